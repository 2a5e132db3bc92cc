"""Two maps on one reference sample: is one better, by how much, and is that more than chance in the sample?

Both maps are judged at the same points, so their errors go together; differences use that pairing.
"""

from __future__ import annotations

import html
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from scipy import stats

from classify.assessment import statistics as st
from classify.assessment.bootstrap import ratios_of
from classify.assessment.estimate import Floats, Ratio, Tally, linearise_differences, tally
from classify.assessment.estimation import Estimator, of_sampled_strata, require_labels
from classify.assessment.evidence import EVIDENCE, EvidenceName, Reservation, claim_of
from classify.assessment.findings import findings
from classify.assessment.inputs import sample_from_points
from classify.assessment.intervals import Estimate
from classify.assessment.options import AssessmentOptions
from classify.assessment.result import sentence
from classify.assessment.sample import DesignKind, ReferenceSample
from classify.assessment.user_folder import write_results
from classify.errors import Problem, SampleError
from classify.files import json_text
from classify.tables import csv_text

# With fewer discordant pairs McNemar's test is the exact binomial one (common practice).
_EXACT_BELOW = 25


@dataclass(frozen=True, slots=True)
class Pair:
    """One accuracy on both maps, and second minus first."""

    first: Estimate
    second: Estimate
    difference: Estimate

    def to_json(self) -> dict[str, Any]:
        """Plain data."""
        named = {"first": self.first, "second": self.second, "difference": self.difference}
        return {name: estimate.to_json() for name, estimate in named.items()}


@dataclass(frozen=True, slots=True)
class McNemar:
    """Points that only one map has right, and the test that both maps are right equally often (McNemar 1947,
    Psychometrika 12, 153-157; with the continuity correction of Edwards 1948, Psychometrika 13, 185-187).

    statistic: chi-square with one degree of freedom, or the smaller count where the test is exact.
    """

    both_right: int
    only_first_right: int
    only_second_right: int
    neither_right: int
    exact: bool
    statistic: float
    p_value: float

    def to_json(self) -> dict[str, Any]:
        """Plain data."""
        return {name: getattr(self, name) for name in self.__slots__}


@dataclass(frozen=True, slots=True, eq=False)
class Comparison:
    """Two maps judged on one sample. Proportions are 0..1; differences are second minus first, -1..1."""

    evidence_name: EvidenceName
    confidence_level: float
    classes: tuple[str, ...]
    design_kind: DesignKind
    post_stratified: bool
    reservations: tuple[Reservation, ...]
    first: str
    second: str
    overall_accuracy: Pair
    users_accuracy: Mapping[str, Pair]
    producers_accuracy: Mapping[str, Pair]
    mcnemar: McNemar
    problems: tuple[Problem, ...] = ()

    @property
    def warnings(self) -> tuple[str, ...]:
        """What a reader of the numbers must know."""
        return tuple(sentence(problem) for problem in self.problems)

    @property
    def in_words(self) -> str:
        """The outcome in plain words."""
        first, second, difference = (p.estimate for p in (
            self.overall_accuracy.first, self.overall_accuracy.second, self.overall_accuracy.difference))  # fmt: skip
        assert first is not None and second is not None and difference is not None, "both maps have labelled points"
        where = "of the sampled area" if "part left out" in self.reservations else "of the mapped area"
        if not EVIDENCE[self.evidence_name].has_intervals:
            where = "of the sampled places"
        text = f"{self.second[:1].upper()}{self.second[1:]} is right on {100 * second:.1f} % {where} "
        text += f"and {self.first} on {100 * first:.1f} %: "
        if difference == 0:
            text += "no difference"
        else:
            text += f"{100 * abs(difference):.1f} percentage points {'more' if difference > 0 else 'less'}"
        low, high = self.overall_accuracy.difference.lower, self.overall_accuracy.difference.upper
        if low is None or high is None:
            return f"{text}. What chance in the sample contributes to that is not known."
        text += (
            f" ({100 * self.confidence_level:g} % interval of the difference {100 * low:+.1f} to {100 * high:+.1f} "
            "percentage points). "
        )
        if low <= 0 <= high:
            return text + "The interval includes 0, so this sample does not show that one map is better."
        better = self.second if low > 0 else self.first
        return (
            text + f"The interval does not include 0, so {better} is better by more than chance in the sample explains."
        )

    @property
    def frame(self) -> pd.DataFrame:
        """One row per accuracy and map, or difference: measure, class, of, and the figures of an estimate."""
        rows: list[dict[str, Any]] = _rows("overall accuracy", "", self.overall_accuracy)
        for measure, pairs in (
            ("user's accuracy", self.users_accuracy),
            ("producer's accuracy", self.producers_accuracy),
        ):
            for name in self.classes:
                rows += _rows(measure, name, pairs[name])
        return pd.DataFrame(rows).astype(dict.fromkeys(["estimate", "standard_error", "lower", "upper"], np.float64))

    def to_json(self) -> dict[str, Any]:
        """Plain data as written to comparison.json. Never NaN."""
        return {
            "schema": 1,
            "evidence": self.evidence_name,
            "claim": claim_of(self.evidence_name, self.reservations),
            "confidence_level": self.confidence_level,
            "classes": list(self.classes),
            "design": {
                "kind": self.design_kind,
                "post_stratified": self.post_stratified,
                "reservations": list(self.reservations),
            },
            "maps": {"first": self.first, "second": self.second},
            "in_words": self.in_words,
            "overall_accuracy": self.overall_accuracy.to_json(),
            "users_accuracy": {name: pair.to_json() for name, pair in self.users_accuracy.items()},
            "producers_accuracy": {name: pair.to_json() for name, pair in self.producers_accuracy.items()},
            "mcnemar": self.mcnemar.to_json(),
            "warnings": list(self.warnings),
        }

    def _repr_html_(self) -> str:
        table = self.frame.to_html(index=False, na_rep="–", float_format="{:.3f}".format)
        notes = "".join(f"<li>{html.escape(text)}</li>" for text in self.warnings)
        return f"<div><p>{html.escape(self.in_words)}</p>{table}<ul>{notes}</ul></div>"


def compare(
    points: pd.DataFrame,
    strata: pd.DataFrame | None,
    options: AssessmentOptions,
    *,
    names: tuple[str, str] = ("the first map", "the second map"),
) -> Comparison:
    """Compare two maps on labelled points: columns as for `assess`, and other_map, the class on the second map.

    Raises SampleError naming table, row and column of every problem.
    """
    if "other_map" not in points.columns:
        raise SampleError("the table has no column 'other_map'", where=options.points.name,
                          fix="give the class of the second map at each point")  # fmt: skip
    return compare_sample(sample_from_points(points, strata, options), options, names=names)


def compare_sample(sample: ReferenceSample, options: AssessmentOptions, *, names: tuple[str, str]) -> Comparison:
    """Compare the two maps of a sample that has `other_map`. Raises SampleError when no point on both has a label."""
    assert sample.other_map is not None, "there is no second map"
    require_labels(sample)
    if not EVIDENCE[sample.evidence].has_intervals:
        sample = sample.unweighted()
    t = tally(sample, finite_population=options.finite_population)
    sample = of_sampled_strata(sample, t)
    estimator, other, k = Estimator(t, sample, options), st.on_other_map(t), len(sample.classes)
    firsts = [st.overall_accuracy(t), *(make(t, c) for make in _PER_CLASS for c in range(k))]
    seconds = [st.overall_accuracy(other), *(_anywhere(make(other, c)) for make in _PER_CLASS for c in range(k))]
    pairs = iter(_pairs(estimator, firsts, seconds))
    overall = next(pairs)
    users, producers = ({name: next(pairs) for name in sample.classes} for _ in _PER_CLASS)
    return Comparison(
        evidence_name=sample.evidence, confidence_level=options.confidence_level, classes=sample.classes,
        design_kind=sample.kind, post_stratified=sample.post_stratified, reservations=sample.reservations,
        first=names[0], second=names[1], overall_accuracy=overall, users_accuracy=users,
        producers_accuracy=producers, mcnemar=_mcnemar(t, other),
        problems=(*sample.problems, *findings(sample, t), *_about_mcnemar(t)),
    )  # fmt: skip


def write_comparison(comparison: Comparison, folder: Path, *, inputs: Sequence[Path] | None = None) -> list[Path]:
    """Write comparison.json and comparison.csv into `folder`; inputs and what is raised as for `write_assessment`."""
    files = {
        "comparison.json": json_text(comparison.to_json()),
        "comparison.csv": csv_text(comparison.frame),
    }
    return write_results(folder, files, "comparison.files.json", inputs)


_PER_CLASS = (st.users_accuracy, st.producers_accuracy)


def _anywhere(ratio: Ratio) -> Ratio:
    """A class of the second map may occur in any stratum."""
    return replace(ratio, map_class=None)


def _pairs(estimator: Estimator, firsts: list[Ratio], seconds: list[Ratio]) -> list[Pair]:
    of_first, of_second = ratios_of(firsts), ratios_of(seconds)

    def difference(shares: Floats) -> Floats:
        return of_second(shares) - of_first(shares)

    found = linearise_differences(estimator.t, list(zip(firsts, seconds, strict=True)))
    parts = (estimator.proportions(firsts), estimator.proportions(seconds), estimator.signed(found, difference))
    return [Pair(*pair) for pair in zip(*parts, strict=True)]


def _mcnemar(t: Tally, other: Tally) -> McNemar:
    points = np.asarray(t.units.T @ t.repeats).ravel() * t.mapped
    first, second = t.map == t.reference, other.map == other.reference
    groups = (first & second, first & ~second, ~first & second, ~first & ~second)
    both, b, c, neither = (round(float(points @ group)) for group in groups)
    if b + c < _EXACT_BELOW:
        p_value = float(stats.binomtest(min(b, c), b + c).pvalue) if b + c else 1.0
        return McNemar(both, b, c, neither, True, float(min(b, c)), p_value)
    statistic = max(abs(b - c) - 1, 0) ** 2 / (b + c)
    return McNemar(both, b, c, neither, False, statistic, float(stats.chi2.sf(statistic, 1)))


def _about_mcnemar(t: Tally) -> tuple[Problem, ...]:
    if t.simple:
        return ()
    return (
        Problem(
            "McNemar's test counts points alike, as in a simple random sample of points; for this design rely on the "
            "differences with their intervals",
            severity="warning",
        ),
    )


def _rows(measure: str, name: str, pair: Pair) -> list[dict[str, Any]]:
    parts = {"first map": pair.first, "second map": pair.second, "difference": pair.difference}
    return [{"measure": measure, "class": name, "of": of, **estimate.to_json()} for of, estimate in parts.items()]
