"""From a checked sample to everything that is reported of it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from classify.assessment import bootstrap
from classify.assessment import statistics as st
from classify.assessment.agreement import area_matrix, disagreement, kappa, kappa_values
from classify.assessment.estimate import Floats, Linearised, Ratio, Tally, linearise, tally
from classify.assessment.evidence import EVIDENCE
from classify.assessment.findings import class_findings, findings, kappa_findings, region_findings, unseen_findings
from classify.assessment.intervals import Bounds, Estimate, proportion, signed
from classify.assessment.options import AssessmentOptions
from classify.assessment.result import (
    AreaEstimate,
    Assessment,
    EitherLabel,
    RegionEstimate,
    StratumSummary,
    Unlabelled,
)
from classify.assessment.sample import NO_LABEL, ReferenceSample
from classify.errors import SampleError


def estimate_sample(sample: ReferenceSample, options: AssessmentOptions) -> Assessment:
    """Estimate accuracy, areas and agreement. Raises SampleError when no point on the map has a label."""
    require_labels(sample)
    if not EVIDENCE[sample.evidence].has_intervals:
        sample = sample.unweighted()
    t = tally(sample, finite_population=options.finite_population)
    sample = of_sampled_strata(sample, t)
    k = len(sample.classes)
    estimator = Estimator(t, sample, options)
    proportions = area_matrix(t.share, t, k)
    makers = (st.users_accuracy, st.producers_accuracy, st.f1, st.area_proportion)
    ratios = [st.overall_accuracy(t), *(make(t, c) for make in makers for c in range(k))]
    shown = iter(estimator.proportions(ratios))
    overall = next(shown)
    users, producers, harmonic, areas = ({name: next(shown) for name in sample.classes} for _ in makers)
    mapped = dict(zip(sample.classes, sample.mapped_area, strict=True))
    differing, agreement = disagreement(proportions), estimator.kappa(proportions)
    return Assessment(
        evidence_name=sample.evidence, confidence_level=options.confidence_level, classes=sample.classes,
        area_unit=sample.area_unit, total_area=estimator.sampled_area * float(t.share @ t.mapped),
        design_kind=sample.kind, post_stratified=sample.post_stratified, reservations=sample.reservations,
        clusters=int(t.group_size.sum()) if t.clustered else None,
        strata=tuple(StratumSummary(s.name, s.area, int(n)) for s, n in zip(sample.strata, t.points, strict=True)),
        matrix_counts=counts_matrix(sample), matrix_area_proportions=proportions, overall_accuracy=overall,
        users_accuracy=users, producers_accuracy=producers, f1=harmonic,
        area={c: AreaEstimate(mapped[c], estimator.size(areas[c])) for c in sample.classes},
        kappa=agreement, disagreement=differing,
        either_label=_either_label(sample, t, estimator),
        unlabelled=_unlabelled(sample, options),
        regions=_regions(sample, t, estimator),
        problems=(
            *sample.problems, *findings(sample, t), *class_findings(sample, t),
            *unseen_findings(sample, t, list(areas.values())), *kappa_findings(agreement, t),
            *region_findings(sample, t),
        ),
    )  # fmt: skip


def require_labels(sample: ReferenceSample) -> None:
    """Raise SampleError unless a point on the map has a label."""
    if not (sample.usable & ~sample.off_map).any():
        raise SampleError("no point on the map has a reference label", fix="label the points before assessing")


def of_sampled_strata(sample: ReferenceSample, t: Tally) -> ReferenceSample:
    """The sample with mapped areas of what the estimates stand for: of the strata that have points.

    Where some have none, mapped areas are known if all others are map classes; but not those of a class that strata
    without points are, as its area beside an estimate for elsewhere would say nothing.
    """
    mapped = sample.mapped_area or (None,) * len(sample.classes)
    empty = [s for s, n in zip(sample.strata, t.points, strict=True) if not n and s.area > 0]
    if not empty:
        return replace(sample, mapped_area=mapped)
    sampled = [s for s, n in zip(sample.strata, t.points, strict=True) if n]
    unknown = {s.mapped_as for s in empty}
    if any(s.mapped_as is None for s in sampled):
        unknown = set(sample.classes)
    within = tuple(
        None if before is None or name in unknown else sum(s.area for s in sampled if s.mapped_as == name)
        for name, before in zip(sample.classes, mapped, strict=True)
    )
    return replace(sample, mapped_area=within).with_reservation("part left out")


def counts_matrix(sample: ReferenceSample) -> np.ndarray:
    """Labelled points, int64 (k, k), rows map, columns reference."""
    counts = np.zeros((len(sample.classes),) * 2, dtype=np.int64)
    here = (sample.reference != NO_LABEL) & ~sample.off_map
    np.add.at(counts, (sample.map[here], sample.reference[here]), sample.count[here])
    return counts


@dataclass(frozen=True, slots=True, eq=False)
class Estimator:
    """The estimator with one choice of intervals: turns statistics into figures as they are shown."""

    t: Tally
    sample: ReferenceSample
    options: AssessmentOptions

    @property
    def sampled_area(self) -> float:
        """Area of the strata that have points, in the sample's unit."""
        return float(sum(s.area for s, n in zip(self.sample.strata, self.t.points, strict=True) if n))

    def size(self, share: Estimate) -> Estimate:
        """An area from its share of the sampled area. Places that were chosen say nothing about sizes."""
        return share.scaled(self.sampled_area) if EVIDENCE[self.sample.evidence].has_intervals else Estimate(None)

    def proportions(self, ratios: Sequence[Ratio]) -> list[Estimate]:
        """Estimates of quantities in 0..1, in the order of `ratios`."""
        limits = self._limits(bootstrap.ratios_of(ratios), len(ratios))
        level, method = self.options.confidence_level, self.options.interval
        found = linearise(self.t, ratios)
        return [self._shown(proportion(f, level, method, b)) for f, b in zip(found, limits, strict=True)]

    def kappa(self, proportions: Floats) -> Estimate:
        """Kappa of an area matrix (k, k)."""

        def values(shares: Floats) -> Floats:
            return kappa_values(area_matrix(shares, self.t, len(proportions)))[:, None]

        return self.signed([kappa(self.t, proportions)], values)[0]

    def signed(self, found: Sequence[Linearised], values: bootstrap.Statistic) -> list[Estimate]:
        """Estimates of quantities in -1..1. values: the same from the shares of replicates."""
        level, method = self.options.confidence_level, self.options.interval
        limits = self._limits(values, len(found))
        return [self._shown(signed(f, level, method, b)) for f, b in zip(found, limits, strict=True)]

    def _limits(self, values: bootstrap.Statistic, n: int) -> Sequence[Bounds | None]:
        o = self.options
        if o.interval != "bootstrap" or not EVIDENCE[self.sample.evidence].has_intervals:
            return [None] * n
        return bootstrap.bounds(self.t, values, o.confidence_level, o.replicates, o.seed)

    def _shown(self, estimate: Estimate) -> Estimate:
        return estimate if EVIDENCE[self.sample.evidence].has_intervals else estimate.without_interval()


def _either_label(sample: ReferenceSample, t: Tally, estimator: Estimator) -> EitherLabel | None:
    if sample.alternate is None:
        return None
    with_one = (sample.alternate != NO_LABEL) & (sample.reference != NO_LABEL) & ~sample.off_map
    ratios = [st.either_overall(t), *(st.either_users(t, c) for c in range(len(sample.classes)))]
    overall, *users = estimator.proportions(ratios)
    return EitherLabel(int(sample.count[with_one].sum()), overall, dict(zip(sample.classes, users, strict=True)))


def _unlabelled(sample: ReferenceSample, options: AssessmentOptions) -> Unlabelled | None:
    missing = ~sample.usable
    if not missing.any():
        return None
    # Wrong in any way: the class after the mapped one, as nothing but agreement is taken from it.
    wrong = (sample.map + 1) % max(len(sample.classes), 2)
    bounds = []
    for supposed in (wrong, sample.map):
        full = replace(sample, reference=np.where(missing, supposed, sample.reference))
        t = tally(full, finite_population=options.finite_population)
        ratios = [st.overall_accuracy(t), *(st.users_accuracy(t, c) for c in range(len(sample.classes)))]
        bounds.append([None if np.isnan(f.value) else f.value for f in linearise(t, ratios)])
    overall, *users = zip(*bounds, strict=True)
    return Unlabelled(int(sample.count[missing].sum()), overall, dict(zip(sample.classes, users, strict=True)))


def _regions(sample: ReferenceSample, t: Tally, estimator: Estimator) -> tuple[RegionEstimate, ...]:
    return tuple(_region(sample, t, estimator, region) for region in range(len(sample.regions)))


def _region(sample: ReferenceSample, t: Tally, estimator: Estimator, region: int) -> RegionEstimate:
    here = t.mapped * (t.region == region)
    n = round(float((t.units.T @ t.repeats) @ here))
    if not n:
        nothing = {name: Estimate(None) for name in sample.classes}
        return RegionEstimate(sample.regions[region], 0, Estimate(None), Estimate(None), nothing)
    in_classes = [st.area_in_region(t, c, region) for c in range(len(sample.classes))]
    ratios = [st.within(st.overall_accuracy(t), t, region), st.region_share(t, region), *in_classes]
    overall, share, *areas = estimator.proportions(ratios)
    sizes = {name: estimator.size(area) for name, area in zip(sample.classes, areas, strict=True)}
    return RegionEstimate(sample.regions[region], n, overall, estimator.size(share), sizes)
