"""What the interactive viewer of the page needs, as plain data."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from classify.report.facts import MapFact, ReportFacts
from classify.report.figures import data_uri
from classify.report.messages import Messages

# From the bottom up. Layers that the page shows as figures are taken from there by the script.
_ORDER = ("natural", "false", "reach", "confidence", "cover")
_FIGURES = {"cover": "map", "confidence": "confidence", "reach": "reach"}


@dataclass(frozen=True, slots=True)
class Explore:
    """aspect: width over height on the ground. layers: kind and title, for the controls. data: for the script."""

    aspect: str
    layers: tuple[dict[str, str], ...]
    points: int
    data: dict[str, Any]


def explore(facts: ReportFacts, words: Messages) -> Explore | None:
    """None without a map."""
    fact = facts.map
    if fact is None:
        return None
    kinds = [kind for kind in _ORDER if fact.layer(kind) is not None]
    names = list(facts.accuracy.classes) if facts.accuracy else []
    place = {name: i for i, name in enumerate(names)}
    points = [
        [p.id, round(p.at_yx[0], 6), round(p.at_yx[1], 6), place[p.mapped], place[p.reference]]
        for p in facts.points if p.mapped in place and p.reference in place
    ]  # fmt: skip
    return Explore(
        aspect=f"{fact.picture_yx[1] * fact.step_m[1] / (fact.picture_yx[0] * fact.step_m[0]):.4f}",
        layers=tuple({"kind": kind, "title": words.text(f"explore.layer_{kind}")} for kind in reversed(kinds)),
        points=len(points),
        data={
            "layers": [_layer(fact, kind) for kind in kinds], "points": points, "classes": names,
            "words": {key: words.template(f"explore.{key}") for key in ("none", "chosen", "cell")},
        },
    )  # fmt: skip


def _layer(fact: MapFact, kind: str) -> dict[str, str]:
    if kind in _FIGURES:
        return {"kind": kind, "figure": _FIGURES[kind]}
    layer = fact.layer(kind)
    assert layer is not None, kind
    return {"kind": kind, "src": data_uri(layer)}
