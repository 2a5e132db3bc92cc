"""The review of training data as one plain value: what polygons claim, and what they show."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from pyproj import Transformer

from classify.errors import Problem
from classify.settings import Project
from classify.training.dataset import TrainingSet
from classify.training.materials import MaterialFinding, Spectra, check_material, load_materials
from classify.training.separability import Pair, separability
from classify.training.suspects import HeldOut, Suspect, class_distances, find_suspects, held_out_by_polygon

MEANING = (
    "A review of the training polygons: whether they are what they claim. "
    "It rests on the polygons themselves and says nothing about the accuracy of a map."
)
_ADVICE = {
    "good": "These classes part well.",
    "fair": "Some pixels will be mixed up; {best} part them best.",
    "weak": "Expect many mixed-up pixels: {best} part them best and do not suffice. Add a band, a date or a feature "
    "that tells them apart, look again at the polygons of both, or merge the classes if the client can.",
}


@dataclass(frozen=True)
class Evidence:
    """What models say about the polygons, made elsewhere. rounds: uint8 (r, n), held-out labels; screening and
    learning_curve: plain data for the review, or None."""

    rounds: NDArray[np.uint8]
    screening: Mapping[str, Any] | None = None
    learning_curve: Mapping[str, Any] | None = None

    @classmethod
    def none(cls, pixels: int) -> Evidence:
        """No evidence: nothing could be held out."""
        return cls(np.zeros((0, pixels), dtype=np.uint8))


@dataclass(frozen=True, eq=False)
class TrainingReview:
    """All that review.json holds. distances: by polygon number; missing where a class has too few polygons."""

    training: TrainingSet
    project: Project
    pairs: tuple[Pair, ...]
    materials: tuple[MaterialFinding, ...]
    suspects: tuple[Suspect, ...]
    held_out: Mapping[int, HeldOut]
    distances: Mapping[int, float]
    evidence: Evidence
    problems: tuple[Problem, ...]

    def to_json(self) -> dict[str, Any]:
        """Plain data, schema 1; null where something is unknown, never NaN."""
        order = np.argsort(np.array(self.training.wavelengths_nm), kind="stable")
        bands = [
            {"role": self.training.roles[b], "wavelength_nm": _finite(self.training.wavelengths_nm[b])} for b in order
        ]
        return {
            "schema": 1,
            "title": self.project.project.title,
            "meaning": MEANING,
            "bands": bands,
            "classes": _classes(self.training, self.project, order),
            "polygons": self._polygons(order),
            "conflicts": [{key: int(pair[key]) for key in pair} for pair in self.training.conflicts.to_dict("records")],
            "separability": {
                "scale": "Jeffries-Matusita distance 0..1.414, transformed divergence 0..2",
                "pairs": [_pair(pair) for pair in self.pairs],
            },
            "materials": [{**asdict(finding), "met": finding.met} for finding in self.materials],
            "suspects": self._suspects(),
            "screening": self.evidence.screening,
            "learning_curve": self.evidence.learning_curve,
            "problems": [asdict(problem) for problem in self.problems],
        }

    def _suspects(self) -> list[dict[str, Any]]:
        names = {c.code: c.name for c in self.project.classes}
        return [
            {"rank": rank, **asdict(suspect), "looks_like": names.get(suspect.looks_like or 0)}
            for rank, suspect in enumerate(self.suspects, start=1)
        ]

    def _polygons(self, order: NDArray[np.intp]) -> list[dict[str, Any]]:
        table = self.training.table
        longitude, latitude = _lonlat(self.training, table)
        where = self.training.by_polygon()
        rows = []
        for place, row in enumerate(table.to_dict("records")):
            number = int(row["polygon"])
            mine = self.training.reflectance[where.get(number, slice(0))]
            held = self.held_out.get(number)
            rows.append(
                {
                    "polygon": number,
                    "code": int(row["code"]),
                    "class_name": row["class_name"],
                    "area_m2": _finite(row["area_m2"]),
                    **{key: int(row[key]) for key in ("pixels", "used", "conflicting", "repeated", "invalid")},
                    "clear_share": _finite(row["clear_share"]),
                    "row": _finite(row["row"]),
                    "col": _finite(row["col"]),
                    "longitude": _finite(longitude[place]),
                    "latitude": _finite(latitude[place]),
                    "mean": _spectrum(mine[:, order].mean(axis=0, dtype=np.float64)) if len(mine) else None,
                    "distance": self.distances.get(number),
                    "held_out_right": held.right if held else None,
                    "held_out_as": [
                        {"code": code, "share": share}
                        for code, share in sorted(held.others.items(), key=lambda item: -item[1])
                    ]
                    if held
                    else [],
                }
            )
        return rows


def review_training(
    training: TrainingSet, project: Project, evidence: Evidence, problems: Sequence[Problem] = (), seed: int = 0
) -> TrainingReview:
    """Review a training set; `problems` are findings beside its own. Models speak through `evidence` only.

    Raises SettingsError for a wrong material.
    """
    held_out = held_out_by_polygon(training, evidence.rounds)
    distances = class_distances(training)
    materials = _material_findings(training, project)
    suspects = find_suspects(training.table, held_out, distances, materials, {c.code: c.name for c in project.classes})
    pairs = separability(training, seed)
    return TrainingReview(
        training, project, pairs, materials, suspects, held_out, distances, evidence, (*training.problems, *problems)
    )


def _material_findings(training: TrainingSet, project: Project) -> tuple[MaterialFinding, ...]:
    claimed = {c.code: c.material for c in project.classes if c.material}
    own = project.training.materials
    materials = load_materials(list(claimed.values()), Path(project.path(own)) if own else None)
    where = training.by_polygon()
    findings = []
    for row in training.table.to_dict("records"):
        material = claimed.get(int(row["code"]))
        mine = where.get(int(row["polygon"]))
        if material is None or mine is None:
            continue
        spectra = Spectra(training.reflectance[mine], training.roles, training.wavelengths_nm)
        checks = check_material(materials[material], spectra)
        findings.append(MaterialFinding(int(row["polygon"]), str(row["class_name"]), material, checks))
    return tuple(findings)


def _classes(training: TrainingSet, project: Project, order: NDArray[np.intp]) -> list[dict[str, Any]]:
    table = training.table
    rows = []
    for entry in project.classes:
        mine = table[table["code"] == entry.code]
        pixels = training.reflectance[training.codes == entry.code][:, order].astype(np.float64)
        inside = int(mine["pixels"].sum())
        rows.append(
            {
                "code": entry.code,
                "name": entry.name,
                "colour": entry.colour,
                "material": entry.material,
                "polygons": len(mine),
                "pixels": len(pixels),
                "area_m2": float(mine["area_m2"].sum()),
                "clear_share": 1 - float(mine["invalid"].sum()) / inside if inside else None,
                "signature": _signature(pixels) if len(pixels) else None,
            }
        )
    return rows


def _signature(pixels: NDArray[np.float64]) -> dict[str, list[float | None]]:
    low, high = np.percentile(pixels, [5, 95], axis=0)
    parts = {"mean": pixels.mean(axis=0), "sd": pixels.std(axis=0), "low": low, "high": high}
    return {name: _spectrum(part) for name, part in parts.items()}


def _pair(pair: Pair) -> dict[str, Any]:
    best = [{"feature": name, "jeffries_matusita": distance} for name, distance in pair.best_features]
    advice = _ADVICE[pair.verdict].format(best=", ".join(name for name, _ in pair.best_features))
    return {
        "a": pair.a,
        "b": pair.b,
        "jeffries_matusita": pair.jeffries_matusita,
        "transformed_divergence": pair.transformed_divergence,
        "verdict": pair.verdict,
        "best_features": best,
        "advice": advice,
    }


def _lonlat(training: TrainingSet, table: pd.DataFrame) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Longitude and latitude of each polygon's middle pixel, NaN without one."""
    t, col, row = training.grid.transform, table["col"].to_numpy() + 0.5, table["row"].to_numpy() + 0.5
    x, y = t.a * col + t.b * row + t.c, t.d * col + t.e * row + t.f
    longitude, latitude = Transformer.from_crs(training.grid.crs.to_wkt(), "EPSG:4326", always_xy=True).transform(x, y)
    return longitude, latitude


def _spectrum(values: NDArray[np.float64]) -> list[float | None]:
    return [_finite(value) for value in values]


def _finite(value: Any) -> float | None:  # noqa: ANN401 - a NumPy or Python number
    return float(value) if np.isfinite(value) else None
