"""The result of an assessment: one frozen value with tidy data frames, the JSON contract and a notebook display."""

from __future__ import annotations

import html
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from classify.assessment.agreement import KAPPA_REMARK, Disagreement
from classify.assessment.evidence import EVIDENCE, Evidence, EvidenceName, Reservation, claim_of
from classify.assessment.intervals import Estimate
from classify.assessment.sample import DesignKind
from classify.errors import Problem


@dataclass(frozen=True, slots=True)
class StratumSummary:
    """One stratum as reported: area in the result's unit, points n that the estimates rest on."""

    stratum: str
    area: float
    n: int


@dataclass(frozen=True, slots=True)
class AreaEstimate:
    """Area of one class: as mapped (None where not known) and as estimated from the sample, in the result's unit."""

    mapped: float | None
    estimated: Estimate

    def to_json(self) -> dict[str, Any]:
        """Plain data."""
        return {"mapped": self.mapped, **self.estimated.to_json()}


@dataclass(frozen=True, slots=True)
class EitherLabel:
    """Agreement of the map with the interpreter's first or alternate label. points: those with an alternate."""

    points: int
    overall_accuracy: Estimate
    users_accuracy: Mapping[str, Estimate]

    def to_json(self) -> dict[str, Any]:
        """Plain data."""
        return {
            "points_with_alternate": self.points,
            "overall_accuracy": self.overall_accuracy.to_json(),
            "users_accuracy": _plain(self.users_accuracy),
        }


@dataclass(frozen=True, slots=True)
class Unlabelled:
    """Points that the interpreter could not label, and accuracies if the map were wrong, or right, on all of them."""

    points: int
    overall_accuracy: tuple[float | None, float | None]
    users_accuracy: Mapping[str, tuple[float | None, float | None]]

    def to_json(self) -> dict[str, Any]:
        """Plain data."""

        def pair(bounds: tuple[float | None, float | None]) -> dict[str, float | None]:
            return {"if_all_wrong": bounds[0], "if_all_right": bounds[1]}

        users = {name: pair(bounds) for name, bounds in self.users_accuracy.items()}
        return {"points": self.points, "overall_accuracy": pair(self.overall_accuracy), "users_accuracy": users}


@dataclass(frozen=True, slots=True)
class RegionEstimate:
    """One region (domain) of the mapped area: n points in it, its accuracy, its own size and its class areas."""

    region: str
    n: int
    overall_accuracy: Estimate
    size: Estimate
    area: Mapping[str, Estimate]

    def to_json(self) -> dict[str, Any]:
        """Plain data."""
        return {
            "n": self.n, "overall_accuracy": self.overall_accuracy.to_json(), "size": self.size.to_json(),
            "area": _plain(self.area),
        }  # fmt: skip


@dataclass(frozen=True, slots=True, eq=False)
class Assessment:
    """Accuracy and areas estimated from one reference sample. Proportions are 0..1; areas are in `area_unit`.

    matrix_counts: int64 (k, k) and matrix_area_proportions: float64 (k, k), rows map, columns reference, in the order
    of `classes`. Mappings are keyed by class name. post_stratified: whether strata came after the draw. reservations:
    what takes something from the claim. clusters: clusters with usable points, None where points were drawn singly;
    it is they that make intervals narrow. either_label, unlabelled: None where the sample has no alternate
    labels, or where every point is labelled.
    """

    evidence_name: EvidenceName
    confidence_level: float
    classes: tuple[str, ...]
    area_unit: str
    total_area: float
    design_kind: DesignKind
    post_stratified: bool
    reservations: tuple[Reservation, ...]
    clusters: int | None
    strata: tuple[StratumSummary, ...]
    matrix_counts: NDArray[np.int64]
    matrix_area_proportions: NDArray[np.float64]
    overall_accuracy: Estimate
    users_accuracy: Mapping[str, Estimate]
    producers_accuracy: Mapping[str, Estimate]
    f1: Mapping[str, Estimate]
    area: Mapping[str, AreaEstimate]
    kappa: Estimate
    disagreement: Disagreement
    either_label: EitherLabel | None = None
    unlabelled: Unlabelled | None = None
    regions: tuple[RegionEstimate, ...] = ()
    problems: tuple[Problem, ...] = ()

    @property
    def evidence(self) -> Evidence:
        """What the numbers may claim."""
        return EVIDENCE[self.evidence_name]

    @property
    def claim(self) -> str:
        """What may be said of the sample in a few sentences."""
        return claim_of(self.evidence_name, self.reservations)

    @property
    def clustered(self) -> bool:
        """Whether points were drawn in clusters."""
        return self.clusters is not None

    @property
    def quantity_disagreement(self) -> float:
        """Disagreement that is due to wrong class totals, 0..1."""
        return self.disagreement.quantity

    @property
    def allocation_disagreement(self) -> float:
        """Disagreement that is due to classes in wrong places, 0..1."""
        return self.disagreement.allocation

    @property
    def commission_error(self) -> Mapping[str, Estimate]:
        """Of the area mapped as a class, the proportion that is not it: 1 - user's accuracy."""
        return {name: value.complement() for name, value in self.users_accuracy.items()}

    @property
    def omission_error(self) -> Mapping[str, Estimate]:
        """Of the area that is a class, the proportion mapped as something else: 1 - producer's accuracy."""
        return {name: value.complement() for name, value in self.producers_accuracy.items()}

    @property
    def warnings(self) -> tuple[str, ...]:
        """Everything that a reader of the numbers must know, a sentence or two each."""
        return tuple(sentence(problem) for problem in self.problems)

    @property
    def accuracy_frame(self) -> pd.DataFrame:
        """One row per figure: measure, class ("" for all), estimate, standard_error, lower, upper, interval."""
        rows: list[dict[str, Any]] = [_row("overall accuracy", "", self.overall_accuracy)]
        per_class = {
            "user's accuracy": self.users_accuracy,
            "commission error": self.commission_error,
            "producer's accuracy": self.producers_accuracy,
            "omission error": self.omission_error,
            "F1": self.f1,
        }
        for measure, estimates in per_class.items():
            rows += [_row(measure, name, estimates[name]) for name in self.classes]
        if self.either_label is not None:
            rows.append(_row("overall agreement with either label", "", self.either_label.overall_accuracy))
            either = self.either_label.users_accuracy
            rows += [_row("user's agreement with either label", name, either[name]) for name in self.classes]
        rows.append(_row("kappa", "", self.kappa))
        parts = {
            "quantity disagreement": (self.disagreement.quantity, self.disagreement.quantity_by_class),
            "allocation disagreement": (self.disagreement.allocation, self.disagreement.allocation_by_class),
        }
        for measure, (whole, by_class) in parts.items():
            rows.append(_row(measure, "", Estimate(whole)))
            rows += [_row(measure, name, Estimate(float(v))) for name, v in zip(self.classes, by_class, strict=True)]
        return _frame(rows)

    @property
    def area_frame(self) -> pd.DataFrame:
        """One row per class: class, unit, mapped, estimate, standard_error, lower, upper, interval."""
        return _frame([{"class": c, "unit": self.area_unit, **self.area[c].to_json()} for c in self.classes])

    @property
    def matrix_frame(self) -> pd.DataFrame:
        """One row per pair of classes: map, reference, count, area_proportion."""
        k = len(self.classes)
        return pd.DataFrame({
            "map": np.repeat(self.classes, k), "reference": np.tile(self.classes, k),
            "count": self.matrix_counts.ravel(), "area_proportion": self.matrix_area_proportions.ravel(),
        })  # fmt: skip

    @property
    def strata_frame(self) -> pd.DataFrame:
        """One row per stratum: stratum, area, n."""
        return pd.DataFrame([{"stratum": s.stratum, "area": s.area, "n": s.n} for s in self.strata])

    @property
    def region_frame(self) -> pd.DataFrame:
        """One row per figure of a region: region, n, measure, class, and the figures of `accuracy_frame`."""
        rows: list[dict[str, Any]] = []
        for r in self.regions:
            figures = [_row("overall accuracy", "", r.overall_accuracy), _row("area of the region", "", r.size)]
            figures += [_row("area", name, r.area[name]) for name in self.classes]
            rows += [{"region": r.region, "n": r.n, **figure} for figure in figures]
        return _frame(rows)

    def to_json(self) -> dict[str, Any]:
        """Plain data as written to assessment.json. Never NaN: what cannot be estimated is None."""
        by_class = zip(
            self.classes, self.disagreement.quantity_by_class, self.disagreement.allocation_by_class, strict=True
        )
        return {
            "schema": 1,
            "evidence": self.evidence_name,
            "claim": self.claim,
            "confidence_level": self.confidence_level,
            "classes": list(self.classes),
            "area_unit": self.area_unit,
            "total_area": self.total_area,
            "design": {
                "kind": self.design_kind, "post_stratified": self.post_stratified, "clusters": self.clustered,
                "cluster_count": self.clusters, "reservations": list(self.reservations),
                "strata": self.strata_frame.to_dict("records"),
            },
            "matrix_counts": self.matrix_counts.tolist(),
            "matrix_area_proportions": self.matrix_area_proportions.tolist(),
            "overall_accuracy": self.overall_accuracy.to_json(),
            "users_accuracy": _plain(self.users_accuracy),
            "producers_accuracy": _plain(self.producers_accuracy),
            "commission_error": _plain(self.commission_error),
            "omission_error": _plain(self.omission_error),
            "f1": _plain(self.f1),
            "area": {name: value.to_json() for name, value in self.area.items()},
            "kappa": self.kappa.to_json(),
            "quantity_disagreement": self.quantity_disagreement,
            "allocation_disagreement": self.allocation_disagreement,
            "disagreement_by_class": {c: {"quantity": float(q), "allocation": float(a)} for c, q, a in by_class},
            "either_label": None if self.either_label is None else self.either_label.to_json(),
            "unlabelled": None if self.unlabelled is None else self.unlabelled.to_json(),
            "regions": {region.region: region.to_json() for region in self.regions},
            "warnings": list(self.warnings),
        }  # fmt: skip

    def _repr_html_(self) -> str:
        accuracy = self.accuracy_frame.to_html(index=False, na_rep="–", float_format="{:.3f}".format)
        areas = self.area_frame.to_html(index=False, na_rep="–", float_format="{:,.1f}".format)
        notes = "".join(f"<li>{html.escape(text)}</li>" for text in (*self.warnings, KAPPA_REMARK))
        claim = html.escape(f"{self.claim} {self.evidence.caution}".strip())
        return f"<div><p><b>{self.evidence_name.capitalize()}.</b> {claim}</p>{accuracy}{areas}<ul>{notes}</ul></div>"


def sentence(problem: Problem) -> str:
    """A warning in running text: where, what, and what to do."""
    text = f"{problem.where}: {problem.what}" if problem.where else problem.what
    text = text[:1].upper() + text[1:].rstrip(".") + "."
    return f"{text} {problem.fix[:1].upper()}{problem.fix[1:].rstrip('.')}." if problem.fix else text


def _plain(estimates: Mapping[str, Estimate]) -> dict[str, dict[str, Any]]:
    return {name: value.to_json() for name, value in estimates.items()}


def _row(measure: str, name: str, estimate: Estimate) -> dict[str, Any]:
    return {"measure": measure, "class": name, **estimate.to_json()}


def _frame(rows: list[dict[str, Any]]) -> pd.DataFrame:
    """Rows as a frame whose figures are float64, NaN where there is none."""
    frame = pd.DataFrame(rows)
    figures = frame.columns.intersection(["mapped", "estimate", "standard_error", "lower", "upper"])
    return frame.astype(dict.fromkeys(figures, np.float64))
