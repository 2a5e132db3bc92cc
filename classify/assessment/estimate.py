"""The estimator. Everything reported is a mean or a ratio of means over one and the same tally of the sample.

A sample is reduced to cells (points alike in stratum, map class, reference class, ...) and primary units (a point, or
a cluster of points). A statistic is two numbers per cell, y and x; its estimate is the ratio of the area-weighted
means and its variance comes by linearisation with d = (y - R x) / X. Simple random, stratified, post-stratified and
cluster samples differ only in the tally.

Sources: Cochran 1977, Sampling Techniques, 3rd ed., sections 5.4, 6.3 and 9A.1; Särndal, Swensson & Wretman 1992,
Model Assisted Survey Sampling, sections 5.5 and 7.6 (linearisation, post-stratification); Stehman 2014, Int. J. Remote
Sensing 35(13), 4923-4939 (strata that differ from map classes); Olofsson et al. 2014, Remote Sensing of Environment
148, 42-57, to which it reduces when strata are map classes.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from classify.assessment.sample import NO_LABEL, ReferenceSample

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Flags = NDArray[np.bool_]

# Distinct keys up to this many are found by counting, which is quicker than sorting.
_COUNTABLE = 4_000_000
_ROUNDING = 1e-13


@dataclass(frozen=True, slots=True, eq=False)
class Tally:
    """What estimation needs of a sample.

    Per cell (c,), int64: stratum, map, reference, alternate, other_map, region, each -1 where there is none; a cell off
    the map has map and reference -1. share: float64 (c,), the estimated proportion of the area that the cell stands
    for; shares add up to 1. scale: float64 (c,), area proportion per sampled point of the cell's stratum.
    units: sparse (u, c), points per primary unit and cell. repeats: (u,), primary units alike. group: (u,), the
    stratum within which the unit was drawn. group_size: (h,), primary units drawn per group. fraction: (h,), how much
    of the population they are, 0 without finite population correction. points: (h,), usable points per stratum.
    weights: (h,), proportion of the area per sampled stratum, 0 where none was sampled. pure: (h,), the map class
    that the stratum is, or -1. clustered: whether units are clusters.
    """

    stratum: Ints
    map: Ints
    reference: Ints
    alternate: Ints
    other_map: Ints
    region: Ints
    share: Floats
    scale: Floats
    units: sparse.csr_matrix
    repeats: Ints
    group: Ints
    group_size: Ints
    fraction: Floats
    points: Ints
    weights: Floats
    pure: Ints
    clustered: bool

    @property
    def mapped(self) -> Floats:
        """float64 (c,): 1 for cells on the map, 0 off it. The x of every mean over the mapped area."""
        return np.asarray(self.map != NO_LABEL, dtype=np.float64)

    @property
    def census(self) -> bool:
        """Whether every unit of the population was taken, so that nothing is left to chance."""
        return bool((self.fraction[self.group_size > 0] >= 1).all())

    @property
    def simple(self) -> bool:
        """Whether this is one simple random sample of points."""
        return not self.clustered and int(np.count_nonzero(self.weights)) == 1


@dataclass(frozen=True, slots=True, eq=False)
class Ratio:
    """A statistic: y and x per cell, float64 (c,). map_class: where given, y and x are 0 by definition outside that
    map class, so strata that are other map classes cannot touch the statistic."""

    y: Floats
    x: Floats
    map_class: int | None = None


@dataclass(frozen=True, slots=True)
class Linearised:
    """Estimate of one statistic: value, standard error, Satterthwaite's degrees of freedom, and the effective size of
    the sample it rests on. NaN where a figure cannot be estimated."""

    value: float
    standard_error: float
    freedom: float
    effective_size: float


def tally(sample: ReferenceSample, *, finite_population: bool) -> Tally:
    """Reduce the usable part of a sample. At least one point must be usable.

    A post-stratified sample of points is judged given how many fell in each post-stratum, which are then strata like
    others (Holt & Smith 1979, J. Royal Statistical Society A 142, 33-46).
    """
    keep = sample.usable
    assert keep.any(), "a sample without labels has no estimates"
    off = sample.off_map[keep]
    none = np.full(int(keep.sum()), NO_LABEL, dtype=np.int64)
    columns = {
        "stratum": sample.stratum[keep],
        "map": np.where(off, NO_LABEL, sample.map[keep]),
        "reference": np.where(off, NO_LABEL, sample.reference[keep]),
    }
    for name in ("alternate", "other_map", "region"):
        values = getattr(sample, name)
        columns[name] = none if values is None else np.where(off & (name != "region"), NO_LABEL, values[keep])
    count, stratum, n_strata = sample.count[keep], columns["stratum"], len(sample.strata)
    cell, first = distinct(list(columns.values()))
    cells = {name: values[first] for name, values in columns.items()}
    per_cell = np.bincount(cell, count, minlength=len(first))
    sampled = np.bincount(stratum, count, minlength=n_strata)
    areas = np.array([s.area for s in sample.strata]) * (sampled > 0)
    weights = areas / areas.sum()
    scale = weights[cells["stratum"]] / sampled[cells["stratum"]]
    if sample.cluster is None:
        units: sparse.csr_matrix = sparse.identity(len(first), dtype=np.float64, format="csr")
        repeats, group = per_cell.astype(np.int64), cells["stratum"]
    else:
        units, group = _cluster_units(sample, sample.cluster[keep], cell, count, stratum)
        repeats = np.ones(units.shape[0], dtype=np.int64)
    group_size = np.bincount(group, repeats, minlength=n_strata).astype(np.int64)
    fraction = _fractions(sample, group, group_size) if finite_population else np.zeros(n_strata)
    pure = [NO_LABEL if s.mapped_as is None else sample.classes.index(s.mapped_as) for s in sample.strata]
    return Tally(
        **cells, share=scale * per_cell, scale=scale, units=units, repeats=repeats, group=group,
        group_size=group_size, fraction=fraction, points=sampled.astype(np.int64), weights=weights,
        pure=np.array(pure, dtype=np.int64), clustered=sample.cluster is not None,
    )  # fmt: skip


def linearise(t: Tally, ratios: Sequence[Ratio]) -> list[Linearised]:
    """Estimate every ratio. Where X is 0 the value is NaN; where the variance is not estimable (a primary unit alone in
    its stratum) the standard error is NaN."""
    x = np.stack([r.x for r in ratios], axis=1)
    values, d = _residuals(t, ratios)
    variance, freedom = variances(t, d, _touched(t, ratios))
    return _packed(values, variance, freedom, _effective_sizes(t, x, values, variance))


def linearise_differences(t: Tally, pairs: Sequence[tuple[Ratio, Ratio]]) -> list[Linearised]:
    """Estimate second minus first of every pair, whose errors go together because both rest on the same units."""
    firsts, seconds = [first for first, _ in pairs], [second for _, second in pairs]
    (value_1, d_1), (value_2, d_2) = _residuals(t, firsts), _residuals(t, seconds)
    variance, freedom = variances(t, d_2 - d_1, _touched(t, firsts) | _touched(t, seconds))
    size = np.full(len(pairs), np.inf if t.census else np.nan)
    return _packed(value_2 - value_1, variance, freedom, size)


def variances(t: Tally, d: Floats, touched: Flags) -> tuple[Floats, Floats]:
    """Variances of the means of linearised variables d (c, k), and their degrees of freedom; both float64 (k,).

    touched (h, k): whether a stratum bears on a statistic. One that does and has a single primary unit makes the
    variance NaN, since nothing shows how units differ within it.
    """
    n_groups, n = len(t.group_size), t.group_size.astype(np.float64)
    stratum_means = _divide(_sum_by(t.stratum, t.share[:, None] * d, n_groups), t.weights)
    per_unit = t.units @ ((d - stratum_means[t.stratum]) * t.scale[:, None])
    means = _divide(_sum_by(t.group, t.repeats[:, None] * per_unit, n_groups), n)
    squares = _sum_by(t.group, t.repeats[:, None] * (per_unit - means[t.group]) ** 2, n_groups)
    spread = np.where(n > 1, (1 - t.fraction) * n / np.maximum(n - 1, 1), np.where(t.fraction >= 1, 0.0, np.nan))
    # What rounding leaves of residuals that are all alike is no variance.
    squares = np.where(squares < (_ROUNDING * np.abs(d).max(axis=0)) ** 2, 0.0, squares)
    parts = np.where(touched, squares * spread[:, None], 0.0)
    variance = parts.sum(axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        # Satterthwaite 1946, Biometrics Bulletin 2, 110-114; where nothing varies, plain units minus strata.
        satterthwaite = variance**2 / (parts**2 / np.maximum(n - 1, 1)[:, None]).sum(axis=0)
    plain = np.where(touched, np.maximum(n - 1, 0)[:, None], 0).sum(axis=0)
    return variance, np.where(np.isfinite(satterthwaite) & (variance > 0), satterthwaite, plain)


def distinct(columns: Sequence[Ints]) -> tuple[Ints, Ints]:
    """Number the distinct rows of columns int64 (n,) >= -1, in lexical order: the number of each row, a row of each."""
    key, size = np.zeros(len(columns[0]), dtype=np.int64), 1
    for values in columns:
        span = int(values.max()) + 2
        if span == 1:
            continue
        key, size = key * span + values + 1, size * span
    if size > _COUNTABLE:
        _, first, inverse = np.unique(key, return_index=True, return_inverse=True)
        return inverse.astype(np.int64), first.astype(np.int64)
    a_row = np.full(size, NO_LABEL, dtype=np.int64)
    a_row[key] = np.arange(len(key))
    there = np.flatnonzero(a_row != NO_LABEL)
    number = np.empty(size, dtype=np.int64)
    number[there] = np.arange(len(there))
    return number[key], a_row[there]


def _residuals(t: Tally, ratios: Sequence[Ratio]) -> tuple[Floats, Floats]:
    """Estimates (k,) and their linearised variables (c, k)."""
    y, x = np.stack([r.y for r in ratios], axis=1), np.stack([r.x for r in ratios], axis=1)
    total_y, total_x = t.share @ y, t.share @ x
    with np.errstate(divide="ignore", invalid="ignore"):
        values = np.where(total_x != 0, total_y / total_x, np.nan)
        d = (y - values * x) / total_x
    return values, np.where(np.isfinite(d), d, 0.0)


def _packed(values: Floats, variance: Floats, freedom: Floats, size: Floats) -> list[Linearised]:
    errors = np.where(np.isnan(values), np.nan, np.sqrt(variance))
    rows = zip(values, errors, freedom, size, strict=True)
    return [Linearised(float(v), float(e), float(f), float(s)) for v, e, f, s in rows]


def _effective_sizes(t: Tally, x: Floats, values: Floats, variance: Floats) -> Floats:
    """Size of the simple random sample that would be as precise, float64 (k,): p (1 - p) / variance (Korn & Graubard
    1998, Survey Methodology 24, 193-201). Where nothing varies (p = 0 or 1) it is the base of the statistic,
    (sum w)^2 / sum w^2 over its primary units (Kish 1965, Survey Sampling); a census has no bound."""
    weight = t.units @ (np.abs(x) * t.scale[:, None])
    total = (t.repeats[:, None] * weight).sum(axis=0)
    squares = ((t.repeats * (1 - t.fraction[t.group]))[:, None] * weight**2).sum(axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        kish = np.where(total > 0, total**2 / squares, np.nan)
        return np.where(variance > 0, values * (1 - values) / variance, kish)


def _touched(t: Tally, ratios: Sequence[Ratio]) -> Flags:
    """(h, k): strata in which the base of a statistic was seen, or might be and a single unit cannot show it."""
    seen = _sum_by(t.group, t.units @ np.stack([np.abs(r.x) for r in ratios], axis=1), len(t.group_size)) > 0
    classes = np.array([NO_LABEL if r.map_class is None else r.map_class for r in ratios])
    excluded = (classes != NO_LABEL) & (t.pure[:, None] != NO_LABEL) & (t.pure[:, None] != classes)
    touched: Flags = seen | ((t.group_size == 1)[:, None] & ~excluded)
    return touched


def _sum_by(index: Ints, values: Floats, size: int) -> Floats:
    """Sums of values (n, k) by index (n,): float64 (size, k)."""
    selector = sparse.csr_matrix((np.ones(len(index)), (index, np.arange(len(index)))), shape=(size, len(index)))
    return np.asarray(selector @ values)


def _divide(values: Floats, by: Floats) -> Floats:
    """values (h, k) / by (h,), 0 where `by` is 0."""
    return np.asarray(np.divide(values, by[:, None], out=np.zeros_like(values), where=by[:, None] > 0))


def _cluster_units(
    sample: ReferenceSample, cluster: Ints, cell: Ints, count: Ints, stratum: Ints
) -> tuple[sparse.csr_matrix, Ints]:
    """Points per cluster and cell, and the stratum within which each cluster was drawn.

    Clusters that reach over strata were not drawn within them: then all clusters form one group, and the strata act as
    post-strata. So it is, too, where the design says that strata came after the draw.
    """
    number, first = distinct([cluster])
    units = sparse.csr_matrix((count.astype(np.float64), (number, cell)), shape=(len(first), int(cell.max()) + 1))
    across = sample.kind != "stratified" or not np.array_equal(stratum[first][number], stratum)
    return units, np.zeros(len(first), dtype=np.int64) if across else stratum[first]


def _fractions(sample: ReferenceSample, group: Ints, group_size: Ints) -> Floats:
    """n / N per group where the population is a known count of units, else 0."""
    known = [s.pixels if sample.cluster is None else s.clusters for s in sample.strata]
    total = np.array([np.inf if not size else float(size) for size in known])
    if sample.cluster is not None and not group.any():
        total[0] = total.sum()
    return np.asarray(np.minimum(group_size / total, 1.0))
