"""The result of an assessment: one frozen value with tidy data frames, the JSON contract and a notebook display."""

from __future__ import annotations

import html
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from classify.assessment.agreement import KAPPA_REMARK
from classify.assessment.evidence import EVIDENCE, Evidence, EvidenceName
from classify.assessment.intervals import Estimate
from classify.errors import Problem


@dataclass(frozen=True, slots=True)
class StratumSummary:
    """One stratum as reported: area in the result's unit, labelled points n."""

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


@dataclass(frozen=True, slots=True, eq=False)
class Assessment:
    """Accuracy and areas estimated from one reference sample. Proportions are 0..1; areas are in `area_unit`.

    matrix_counts: int64 (k, k) and matrix_area_proportions: float64 (k, k), rows map, columns reference, in the order
    of `classes`. Mappings are keyed by class name.
    """

    evidence_name: EvidenceName
    confidence_level: float
    classes: tuple[str, ...]
    area_unit: str
    total_area: float
    design_kind: str
    strata: tuple[StratumSummary, ...]
    matrix_counts: NDArray[np.int64]
    matrix_area_proportions: NDArray[np.float64]
    overall_accuracy: Estimate
    users_accuracy: Mapping[str, Estimate]
    producers_accuracy: Mapping[str, Estimate]
    f1: Mapping[str, Estimate]
    area: Mapping[str, AreaEstimate]
    kappa: Estimate
    quantity_disagreement: float | None
    allocation_disagreement: float | None
    problems: tuple[Problem, ...] = ()

    @property
    def evidence(self) -> Evidence:
        """What the numbers may claim."""
        return EVIDENCE[self.evidence_name]

    @property
    def warnings(self) -> tuple[str, ...]:
        """Everything that a reader of the numbers must know, one sentence or two each."""
        return tuple(sentence(problem) for problem in self.problems)

    @property
    def accuracy_frame(self) -> pd.DataFrame:
        """One row per accuracy: measure, class ("" for the whole map), estimate, standard_error, lower, upper,
        interval."""
        rows: list[dict[str, Any]] = [_row("overall accuracy", "", self.overall_accuracy)]
        per_class = {"user's accuracy": self.users_accuracy, "producer's accuracy": self.producers_accuracy}
        for measure, estimates in {**per_class, "F1": self.f1}.items():
            rows += [_row(measure, name, estimates[name]) for name in self.classes]
        rows.append(_row("kappa", "", self.kappa))
        rows.append(_row("quantity disagreement", "", Estimate(self.quantity_disagreement)))
        rows.append(_row("allocation disagreement", "", Estimate(self.allocation_disagreement)))
        return pd.DataFrame(rows)

    @property
    def area_frame(self) -> pd.DataFrame:
        """One row per class: class, unit, mapped, estimate, standard_error, lower, upper, interval."""
        return pd.DataFrame([{"class": c, "unit": self.area_unit, **self.area[c].to_json()} for c in self.classes])

    @property
    def matrix_frame(self) -> pd.DataFrame:
        """One row per pair of classes: map, reference, count, area_proportion."""
        map_class, reference = np.repeat(self.classes, len(self.classes)), np.tile(self.classes, len(self.classes))
        return pd.DataFrame(
            {
                "map": map_class,
                "reference": reference,
                "count": self.matrix_counts.ravel(),
                "area_proportion": self.matrix_area_proportions.ravel(),
            }
        )

    @property
    def strata_frame(self) -> pd.DataFrame:
        """One row per stratum: stratum, area, n."""
        return pd.DataFrame([{"stratum": s.stratum, "area": s.area, "n": s.n} for s in self.strata])

    def to_json(self) -> dict[str, Any]:
        """Plain data as written to assessment.json. Never NaN: what cannot be estimated is None."""
        return {
            "schema": 1,
            "evidence": self.evidence_name,
            "confidence_level": self.confidence_level,
            "classes": list(self.classes),
            "area_unit": self.area_unit,
            "total_area": self.total_area,
            "design": {"kind": self.design_kind, "strata": self.strata_frame.to_dict("records")},
            "matrix_counts": self.matrix_counts.tolist(),
            "matrix_area_proportions": self.matrix_area_proportions.tolist(),
            "overall_accuracy": self.overall_accuracy.to_json(),
            "users_accuracy": {name: value.to_json() for name, value in self.users_accuracy.items()},
            "producers_accuracy": {name: value.to_json() for name, value in self.producers_accuracy.items()},
            "f1": {name: value.to_json() for name, value in self.f1.items()},
            "area": {name: value.to_json() for name, value in self.area.items()},
            "kappa": self.kappa.to_json(),
            "quantity_disagreement": self.quantity_disagreement,
            "allocation_disagreement": self.allocation_disagreement,
            "warnings": list(self.warnings),
        }

    def _repr_html_(self) -> str:
        accuracy = self.accuracy_frame.to_html(index=False, na_rep="–", float_format="{:.3f}".format)
        areas = self.area_frame.to_html(index=False, na_rep="–", float_format="{:,.1f}".format)
        notes = "".join(f"<li>{html.escape(text)}</li>" for text in (*self.warnings, KAPPA_REMARK))
        claim = html.escape(f"{self.evidence.claim} {self.evidence.caution}".strip())
        return f"<div><p><b>{self.evidence_name.capitalize()}.</b> {claim}</p>{accuracy}{areas}<ul>{notes}</ul></div>"


def sentence(problem: Problem) -> str:
    """A warning in running text: where, what, and what to do."""
    text = f"{problem.where}: {problem.what}" if problem.where else problem.what
    text = text[:1].upper() + text[1:].rstrip(".") + "."
    return f"{text} {problem.fix[:1].upper()}{problem.fix[1:].rstrip('.')}." if problem.fix else text


def _row(measure: str, name: str, estimate: Estimate) -> dict[str, Any]:
    return {"measure": measure, "class": name, **estimate.to_json()}
