"""All that is reported of a reference sample: each statistic is its y and x, handed to the one estimator."""

from __future__ import annotations

import numpy as np

from classify.assessment.agreement import disagreement, kappa
from classify.assessment.estimate import Floats, Ratio, Tally, linearise, tally
from classify.assessment.evidence import EVIDENCE
from classify.assessment.intervals import Estimate, proportion, unbounded
from classify.assessment.findings import findings
from classify.assessment.options import AssessmentOptions
from classify.assessment.result import AreaEstimate, Assessment, StratumSummary
from classify.assessment.sample import ReferenceSample
from classify.errors import SampleError


def overall_accuracy(t: Tally) -> Ratio:
    """Proportion of the area that the map has right."""
    return Ratio((t.map == t.reference).astype(np.float64), np.ones(len(t.share)))


def users_accuracy(t: Tally, c: int) -> Ratio:
    """Of the area mapped as class c, the proportion that is c."""
    return Ratio(_both(t, c), (t.map == c).astype(np.float64), map_class=c)


def producers_accuracy(t: Tally, c: int) -> Ratio:
    """Of the area that is class c, the proportion mapped as c."""
    return Ratio(_both(t, c), (t.reference == c).astype(np.float64))


def f1(t: Tally, c: int) -> Ratio:
    """Harmonic mean of user's and producer's accuracy: twice the agreement over the two class areas added."""
    return Ratio(2 * _both(t, c), (t.map == c).astype(np.float64) + (t.reference == c))


def area_proportion(t: Tally, c: int) -> Ratio:
    """Proportion of the area that is class c."""
    return Ratio((t.reference == c).astype(np.float64), np.ones(len(t.share)))


def estimate_sample(sample: ReferenceSample, options: AssessmentOptions) -> Assessment:
    """Estimate accuracy, areas and agreement. Raises SampleError when no point has a label."""
    if not sample.labelled.any():
        raise SampleError("no point of the reference sample has a label", fix="label the points first")
    t = tally(sample, finite_population=options.finite_population)
    k = len(sample.classes)
    proportions, counts = np.zeros((k, k)), np.zeros((k, k), dtype=np.int64)
    np.add.at(proportions, (t.map, t.reference), t.share)
    labelled = sample.labelled
    np.add.at(counts, (sample.map[labelled], sample.reference[labelled]), sample.count[labelled])
    statistics = [
        overall_accuracy(t),
        *(make(t, c) for make in (users_accuracy, producers_accuracy, f1, area_proportion) for c in range(k)),
    ]
    level, method = options.confidence_level, options.interval
    shown = iter([_shown(sample, proportion(found, level, method)) for found in linearise(t, statistics)])
    overall = next(shown)
    users, producers, harmonic, areas = ({name: next(shown) for name in sample.classes} for _ in range(4))
    total = float(sum(s.area for s, n in zip(sample.strata, t.points, strict=True) if n))
    differing = disagreement(proportions)
    mapped = sample.mapped_area or (None,) * k
    return Assessment(
        evidence_name=sample.evidence, confidence_level=level, classes=sample.classes,
        area_unit=sample.area_unit, total_area=total, design_kind=sample.kind,
        strata=tuple(StratumSummary(s.name, s.area, int(n)) for s, n in zip(sample.strata, t.points, strict=True)),
        matrix_counts=counts, matrix_area_proportions=proportions, overall_accuracy=overall,
        users_accuracy=users, producers_accuracy=producers, f1=harmonic,
        area={c: AreaEstimate(m, areas[c].scaled(total)) for c, m in zip(sample.classes, mapped, strict=True)},
        kappa=_shown(sample, unbounded(kappa(t, proportions), level, method)),
        quantity_disagreement=differing.quantity, allocation_disagreement=differing.allocation,
        problems=(*sample.problems, *findings(sample, t, proportions)),
    )  # fmt: skip


def _both(t: Tally, c: int) -> Floats:
    return ((t.map == c) & (t.reference == c)).astype(np.float64)


def _shown(sample: ReferenceSample, estimate: Estimate) -> Estimate:
    return estimate if EVIDENCE[sample.evidence].has_intervals else Estimate(estimate.estimate)
