"""What a reader of the estimates must be told: parts not covered, figures that cannot be estimated and why."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from classify.assessment.estimate import Tally
from classify.assessment.evidence import EVIDENCE
from classify.assessment.sample import ReferenceSample
from classify.errors import Problem


def findings(sample: ReferenceSample, t: Tally, proportions: np.ndarray) -> tuple[Problem, ...]:
    """Warnings about a sample and its tally. proportions: the area matrix, float64 (k, k)."""
    return (
        *_evidence(sample), *_unlabelled(sample), *_empty_strata(sample, t), *_lone_units(sample, t),
        *_one_sided_classes(sample, proportions), *_unmapped(sample),
    )  # fmt: skip


def _warning(what: str, fix: str = "") -> Problem:
    return Problem(what, fix=fix, severity="warning")


def _evidence(sample: ReferenceSample) -> Iterator[Problem]:
    evidence = EVIDENCE[sample.evidence]
    if not evidence.has_intervals:
        yield _warning(f"standard errors and intervals are left out: {evidence.caution}")


def _unlabelled(sample: ReferenceSample) -> Iterator[Problem]:
    missing = int(sample.count[~sample.labelled].sum())
    if missing:
        yield _warning(
            f"{missing} of {int(sample.count.sum())} points have no reference label and are left out, as if they were "
            "like the labelled points of their stratum",
        )


def _empty_strata(sample: ReferenceSample, t: Tally) -> Iterator[Problem]:
    empty = [s for s, n in zip(sample.strata, t.points, strict=True) if not n and s.area > 0]
    if empty:
        area, total = sum(s.area for s in empty), sum(s.area for s in sample.strata)
        yield _warning(
            f"no labelled point lies in {_listed([s.name for s in empty], 'stratum', 'strata')}; the estimates leave out "
            f"its {area:,.6g}{_unit(sample)} ({area / total:.1%} of the total area)",
            "draw points there, or merge the stratum with one like it before sampling",
        )


def _lone_units(sample: ReferenceSample, t: Tally) -> Iterator[Problem]:
    lone = [
        s.name for s, n, f in zip(sample.strata, t.group_size, t.fraction, strict=True) if n == 1 and f < 1
    ]  # fmt: skip
    if lone:
        unit = "cluster" if t.clustered else "labelled point"
        yield _warning(
            f"{_listed(lone, 'stratum', 'strata')} has a single {unit}, so how units differ within it is unknown and "
            "standard errors that it bears on are left out",
            "label at least one more there, or merge the stratum with one like it",
        )


def _one_sided_classes(sample: ReferenceSample, proportions: np.ndarray) -> Iterator[Problem]:
    rows, columns = proportions.sum(axis=1), proportions.sum(axis=0)
    for c, name in enumerate(sample.classes):
        if rows[c] == 0 and columns[c] == 0:
            yield _warning(f"class {name!r} occurs in no labelled point, so nothing is known of it but that it is rare")
        elif rows[c] == 0:
            yield _warning(
                f"class {name!r} occurs among the reference labels but no point is mapped as it, so it has no user's "
                "accuracy",
            )
        elif columns[c] == 0:
            yield _warning(
                f"class {name!r} is mapped but no reference label names it, so it has no producer's accuracy; its area "
                "is estimated as 0 and its upper limit says how large it may still be",
            )


def _unmapped(sample: ReferenceSample) -> Iterator[Problem]:
    unknown = [
        c for c, m in zip(sample.classes, sample.mapped_area or [None] * len(sample.classes), strict=True) if m is None
    ]
    if unknown:
        yield _warning(
            f"the mapped area of {_listed(unknown, 'class', 'classes')} is not known from the strata",
            "give 'mapped_as' in the strata table where strata are map classes",
        )


def _unit(sample: ReferenceSample) -> str:
    return f" {sample.area_unit}" if sample.area_unit else ""


def _listed(names: list[str], one: str, many: str) -> str:
    quoted = ", ".join(repr(name) for name in names)
    return f"{one} {quoted}" if len(names) == 1 else f"{many} {quoted}"
