"""Polygons that may not be what they claim, ranked, each with its reason. Nothing is deleted for the user."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from classify.training.dataset import TrainingSet
from classify.training.materials import MaterialFinding

Reason = Literal["held out", "outlier", "material", "conflict", "masked"]

# A polygon is named when models that have not seen it give most of it to other classes ...
_WRONG_SHARE = 0.5
# ... when its mean lies this many robust standard deviations from the middle of its class, on average over features ...
_FAR = 4.0
_POLYGONS_FOR_SPREAD = 4
# ... when this share of its pixels is claimed by another class too, or is masked.
_CONFLICT_SHARE, _MASKED_SHARE = 0.05, 0.25


@dataclass(frozen=True)
class HeldOut:
    """How models that had not seen a polygon labelled it. right: share of its pixels; others: code -> share."""

    right: float
    others: Mapping[int, float]


@dataclass(frozen=True)
class Suspect:
    """A polygon to look at. score: 0..1, for the order only. looks_like: another code that most held-out pixels got."""

    polygon: int
    code: int
    class_name: str
    score: float
    looks_like: int | None
    reasons: tuple[Reason, ...]
    sentence: str


def held_out_by_polygon(training: TrainingSet, rounds: NDArray[np.uint8]) -> dict[int, HeldOut]:
    """Summarise held-out labels, uint8 (r, n) with 0 = not held out, by polygon number."""
    result = {}
    for number, mine in training.by_polygon().items():
        labels = rounds[:, mine].ravel()
        labels = labels[labels > 0]
        if len(labels):
            code = int(training.codes[mine][0])
            shares = {
                int(c): float(k / len(labels)) for c, k in zip(*np.unique(labels, return_counts=True), strict=True)
            }
            result[number] = HeldOut(shares.pop(code, 0.0), shares)
    return result


def class_distances(training: TrainingSet) -> dict[int, float]:
    """Robust distance of each polygon's mean from the median polygon of its class, over features.

    Root mean square over features of (mean - median) / s, s the larger of the class's own 1.4826 MAD and the median of
    that of all classes, so that a class of near-identical polygons does not make an outlier of an honest one. Classes
    with fewer than four polygons have no spread to judge by and are left out.
    """
    numbers, first, member = np.unique(training.polygon, return_index=True, return_inverse=True)
    codes = training.codes[first]
    size = np.bincount(member)
    means = np.stack([np.bincount(member, column) / size for column in training.features.T.astype(np.float64)], axis=1)
    judged = [code for code in np.unique(codes) if np.sum(codes == code) >= _POLYGONS_FOR_SPREAD]
    if not judged:
        return {}
    middle = {code: np.median(means[codes == code], axis=0) for code in judged}
    spread = {code: 1.4826 * np.median(np.abs(means[codes == code] - middle[code]), axis=0) for code in judged}
    common = np.median(list(spread.values()), axis=0)
    result: dict[int, float] = {}
    for code in judged:
        scale = np.maximum(spread[code], common)
        z = (means[codes == code] - middle[code]) / np.where(scale > 0, scale, np.inf)
        distance = np.sqrt(np.mean(z**2, axis=1))
        result.update(zip(numbers[codes == code].tolist(), distance.tolist(), strict=True))
    return result


def find_suspects(
    table: pd.DataFrame,
    held_out: Mapping[int, HeldOut],
    distances: Mapping[int, float],
    materials: Sequence[MaterialFinding],
    class_names: Mapping[int, str],
) -> tuple[Suspect, ...]:
    """Rank the polygons that one or more kinds of evidence speak against, the worst first.

    Evidence is joined as if independent: 1 - product of (1 - strength). Only the order matters.
    """
    failed = {finding.polygon: finding for finding in materials if not finding.met}
    suspects = []
    columns = ("polygon", "code", "class_name", "pixels", "conflicting", "invalid")
    for number, code, name, *counts in zip(*(table[column].tolist() for column in columns), strict=True):
        found: list[tuple[Reason, float, str]] = []
        _from_held_out(held_out.get(number), class_names, found)
        _from_distance(distances.get(number), found)
        _from_material(failed.get(number), found)
        _from_counts(counts[0], counts[1], counts[2], found)
        if found:
            seen = held_out.get(number)
            looks_like = max(seen.others, key=lambda c: seen.others[c]) if seen and seen.right < _WRONG_SHARE else None
            found.sort(key=lambda item: -item[1])
            suspects.append(
                Suspect(
                    polygon=number,
                    code=code,
                    class_name=name,
                    score=round(1 - float(np.prod([1 - strength for _, strength, _ in found])), 4),
                    looks_like=looks_like,
                    reasons=tuple(reason for reason, _, _ in found),
                    sentence="; ".join(text for _, _, text in found) + ".",
                )
            )
    return tuple(sorted(suspects, key=lambda suspect: (-suspect.score, suspect.polygon)))


def _from_held_out(
    seen: HeldOut | None, class_names: Mapping[int, str], found: list[tuple[Reason, float, str]]
) -> None:
    if seen is None or 1 - seen.right < _WRONG_SHARE:
        return
    other = max(seen.others, key=lambda code: seen.others[code])
    text = f"models that had not seen it gave {seen.others[other]:.0%} of its pixels to {class_names.get(other, other)}"
    found.append(("held out", 0.95 * (1 - seen.right), text))


def _from_distance(distance: float | None, found: list[tuple[Reason, float, str]]) -> None:
    if distance is not None and distance > _FAR:
        text = f"its mean lies {distance:.1f} robust standard deviations from the middle of its class"
        found.append(("outlier", 0.8 * (1 - (_FAR / distance) ** 2), text))


def _from_material(finding: MaterialFinding | None, found: list[tuple[Reason, float, str]]) -> None:
    if finding is None:
        return
    checked = [check for check in finding.checks if check.met is not None]
    broken = [check for check in checked if not check.met]
    text = f"it claims {finding.material} but: {'; '.join(check.sentence for check in broken)}"
    found.append(("material", 0.4 + 0.5 * len(broken) / len(checked), text))


def _from_counts(pixels: int, conflicting: int, invalid: int, found: list[tuple[Reason, float, str]]) -> None:
    if not pixels:
        return
    conflict, masked = conflicting / pixels, invalid / pixels
    if conflict >= _CONFLICT_SHARE:
        text = f"a polygon of another class claims {conflict:.0%} of its pixels too"
        found.append(("conflict", 0.5 + 0.5 * conflict, text))
    if masked >= _MASKED_SHARE:
        text = f"{masked:.0%} of its pixels are masked or without data, so the rest may lie at a cloud's edge"
        found.append(("masked", 0.4 + 0.4 * masked, text))
