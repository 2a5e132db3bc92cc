"""What a reader of the estimates must be told: parts not covered, figures that cannot be estimated and why."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np

from classify.assessment.estimate import Floats, Tally
from classify.assessment.evidence import EVIDENCE
from classify.assessment.intervals import Estimate
from classify.assessment.sample import ReferenceSample
from classify.errors import Problem

# With fewer points in a region, or fewer clusters in all, intervals are rough (common practice).
_FEW_POINTS = 30
_FEW_CLUSTERS = 30


def findings(sample: ReferenceSample, t: Tally) -> tuple[Problem, ...]:
    """Warnings about a sample and its tally, whatever is estimated from it."""
    inferential = EVIDENCE[sample.evidence].has_intervals
    about_chance = (*_few_clusters(t), *_empty_strata(sample, t), *_lone_units(sample, t)) if inferential else ()
    return (*_evidence(sample), *_off_map(sample), *_unlabelled(sample), *about_chance)


def class_findings(sample: ReferenceSample, t: Tally) -> tuple[Problem, ...]:
    """Warnings about classes that are wanting on the map or among the labels, or whose mapped area is not known."""
    return (*_one_sided_classes(sample, t), *_mapped_areas(sample))


def unseen_findings(sample: ReferenceSample, t: Tally, areas: Sequence[Estimate]) -> Iterator[Problem]:
    """Warn where a class may hide in a stratum whose points show none of it, far beyond what its interval admits.

    areas: estimated share of the sampled area per class. Where none of n points is of the class, its share of the
    stratum is below 1 - 0.05^(1/n) with 95 % confidence (exact binomial; about 3 / n). Intervals are built on what was
    seen and cannot know of it; the warning comes when it would triple the distance to the upper limit.
    """
    if not EVIDENCE[sample.evidence].has_intervals:
        return
    hidden_share = np.where(t.points > 0, 1 - 0.05 ** (1 / np.maximum(t.group_size, 1)), 0.0) * t.weights
    # A census hides nothing.
    hidden_share = np.where(t.fraction >= 1, 0.0, hidden_share)
    for c, name in enumerate(sample.classes):
        share = areas[c]
        if share.estimate is None or share.upper is None or share.estimate == 0:
            continue
        seen = np.bincount(t.stratum, t.reference == c, minlength=len(sample.strata)) > 0
        worst = int(np.where(seen, 0.0, hidden_share).argmax())
        if not seen[worst] and hidden_share[worst] > 2 * (share.upper - share.estimate):
            area = hidden_share[worst] * sum(s.area for s, n in zip(sample.strata, t.points, strict=True) if n)
            yield _warning(
                f"class {name!r} was not found in stratum {sample.strata[worst].name!r}, but up to {area:,.4g}"
                f"{_unit(sample)} of it could lie there unseen by {int(t.points[worst])} points; the intervals of its "
                "area and producer's accuracy do not cover that",
                "draw more points in that stratum if the class matters",
            )


def kappa_findings(kappa: Estimate, t: Tally) -> Iterator[Problem]:
    """Say why kappa, or its interval, is missing."""
    if kappa.estimate is None:
        yield _warning("kappa cannot be estimated, as a single class fills both map and reference")
    elif kappa.standard_error == 0 and kappa.lower is None:
        disagree = _points(t)[(t.map != t.reference)].sum() > 0
        why = (
            "the labelled points of each stratum are all alike"
            if disagree
            else "no labelled point disagrees with the map"
        )
        yield _warning(f"kappa has no interval, as {why}")


def region_findings(sample: ReferenceSample, t: Tally) -> Iterator[Problem]:
    """Warnings about regions with few points or none."""
    here = t.mapped * _points(t)
    for region, name in enumerate(sample.regions):
        n = round(float(here @ (t.region == region)))
        if n == 0:
            yield _warning(f"no labelled point on the map lies in region {name!r}, so nothing is estimated for it")
        elif n < _FEW_POINTS:
            yield _warning(
                f"region {name!r} has {n} labelled points; its figures are rough and its intervals may be too narrow",
                "draw more points there before a decision rests on them",
            )


def _warning(what: str, fix: str = "") -> Problem:
    return Problem(what, fix=fix, severity="warning")


def _evidence(sample: ReferenceSample) -> Iterator[Problem]:
    evidence = EVIDENCE[sample.evidence]
    if not evidence.has_intervals:
        yield _warning(f"this rests on a {sample.evidence}, so standard errors, intervals and areas are left out. "
                       f"{evidence.caution}")  # fmt: skip


def _few_clusters(t: Tally) -> Iterator[Problem]:
    if t.clustered and int(t.group_size.sum()) < _FEW_CLUSTERS:
        yield _warning(
            f"the sample has {int(t.group_size.sum())} clusters; it is their number, not that of the points, that "
            "makes intervals narrow, and with so few they are rough",
        )


def _off_map(sample: ReferenceSample) -> Iterator[Problem]:
    off = int(sample.count[sample.off_map].sum())
    if off:
        yield _warning(
            f"{off} of {int(sample.count.sum())} points lie outside the map or where it has no data; the estimates "
            "stand for the mapped part of the sampled area, whose size is estimated from the points"
        )


def _unlabelled(sample: ReferenceSample) -> Iterator[Problem]:
    missing = int(sample.count[~sample.usable].sum())
    if missing:
        yield _warning(
            f"{missing} of {int(sample.count.sum())} points have no reference label; the estimates take them to be "
            "like the labelled points of their stratum, and bounds say what they could change at most",
        )


def _empty_strata(sample: ReferenceSample, t: Tally) -> Iterator[Problem]:
    empty = [s for s, n in zip(sample.strata, t.points, strict=True) if not n and s.area > 0]
    if empty:
        area, total = sum(s.area for s in empty), sum(s.area for s in sample.strata)
        yield _warning(
            f"no labelled point lies in {_listed([s.name for s in empty], 'stratum', 'strata')}; the estimates leave "
            f"out the {area:,.6g}{_unit(sample)} there, {100 * area / total:.1f} % of the total area",
            "draw points there, or merge the stratum with one like it before sampling",
        )


def _lone_units(sample: ReferenceSample, t: Tally) -> Iterator[Problem]:
    lone = [s.name for s, n, f in zip(sample.strata, t.group_size, t.fraction, strict=True) if n == 1 and f < 1]
    if not lone:
        return
    if t.clustered and int(t.group_size.sum()) == 1:
        yield _warning("there is a single cluster, so no standard error can be given", "sample at least two clusters")
        return
    unit = "cluster" if t.clustered else "labelled point"
    has = "has" if len(lone) == 1 else "have"
    yield _warning(
        f"{_listed(lone, 'stratum', 'strata')} {has} a single {unit}, so how units differ within it is unknown and the "
        "standard errors that it bears on are left out",
        "label at least one more there, or merge the stratum with one like it",
    )


def _points(t: Tally) -> Floats:
    """Usable points per cell, float64 (c,)."""
    return np.asarray(t.units.T @ t.repeats, dtype=np.float64).ravel()


def _one_sided_classes(sample: ReferenceSample, t: Tally) -> Iterator[Problem]:
    # Points are counted, as a class may have some and yet no share of the area.
    on_map, points = t.mapped > 0, _points(t)
    rows, columns = (
        np.bincount(codes[on_map], points[on_map], minlength=len(sample.classes)) for codes in (t.map, t.reference)
    )
    for c, name in enumerate(sample.classes):
        if rows[c] == 0 and columns[c] == 0:
            yield _warning(
                f"class {name!r} occurs in no labelled point, neither mapped nor as reference, so its accuracies "
                "cannot be estimated",
            )
        elif rows[c] == 0:
            yield _warning(
                f"class {name!r} is a reference label but no point is mapped as it, so it has no user's accuracy"
            )
        elif columns[c] == 0:
            yield _warning(
                f"class {name!r} is mapped but is no point's reference label, so it has no producer's accuracy; its "
                "area is estimated as 0, and the upper limit says how large it may still be",
            )


def _mapped_areas(sample: ReferenceSample) -> Iterator[Problem]:
    mapped = sample.mapped_area or (None,) * len(sample.classes)
    unknown = [name for name, area in zip(sample.classes, mapped, strict=True) if area is None]
    if unknown:
        yield _warning(
            f"the mapped area of {_listed(unknown, 'class', 'classes')} is not known for what the estimates stand for, "
            "so it is not set beside them",
            "in a table of strata, 'mapped_as' says which map class a stratum is",
        )


def _unit(sample: ReferenceSample) -> str:
    return f" {sample.area_unit}" if sample.area_unit else ""


def _listed(names: Sequence[str], one: str, many: str) -> str:
    quoted = ", ".join(repr(name) for name in names)
    return f"{one} {quoted}" if len(names) == 1 else f"{many} {quoted}"
