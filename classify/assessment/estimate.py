"""The estimator. Everything reported is a mean or a ratio of means over one and the same tally of the sample.

A sample is reduced to cells (points alike in stratum, map class, reference class, ...) and primary units (a point, or a
cluster of points). A statistic is two numbers per cell, y and x; its estimate is the ratio of the area-weighted means
and its variance comes by linearisation with d = (y - R x) / X. Simple random, stratified, post-stratified and
cluster samples differ only in the tally.

Sources: Cochran 1977, Sampling Techniques, 3rd ed., sections 5.4, 6.3, 9A.1; Särndal, Swensson & Wretman 1992,
Model Assisted Survey Sampling, section 5.5 (linearisation); Stehman 2014, Int. J. Remote Sensing 35(13), 4923-4939 (strata that differ
from map classes); Olofsson et al. 2014, Remote Sensing of Environment 148, 42-57, to which it reduces when
strata are map classes.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from classify.assessment.sample import NO_LABEL, ReferenceSample

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True, eq=False)
class Tally:
    """What estimation needs of a sample.

    Per cell (c,): stratum, map, reference, alternate, region (int64; alternate and region are -1 where there is none)
    and share (float64), the estimated proportion of the area that the cell stands for; shares add up to 1.
    units: sparse (u, c), points per primary unit and cell. repeats: (u,) primary units alike. group: (u,) the
    stratum within which the unit was drawn. scale: (c,) area proportion per sampled point of the cell's stratum.
    group_size: (h,) primary units drawn per group. fraction: (h,) of the population that they are, 0 without finite
    population correction. weights: (h,) proportion of the area in each sampled stratum, 0 where none was sampled.
    points: (h,) labelled points. pure: (h,) the map class that the stratum is, or -1. clustered: whether units are clusters.
    """

    stratum: Ints
    map: Ints
    reference: Ints
    alternate: Ints
    region: Ints
    share: Floats
    units: sparse.csr_matrix
    repeats: Ints
    group: Ints
    scale: Floats
    group_size: Ints
    fraction: Floats
    weights: Floats
    points: Ints
    pure: Ints
    clustered: bool


@dataclass(frozen=True, slots=True, eq=False)
class Ratio:
    """A statistic: y and x per cell, float64 (c,). x of all ones makes a mean. map_class: where given, y and x are 0 by
    definition outside that map class, so strata that are other map classes cannot touch the statistic."""

    y: Floats
    x: Floats
    map_class: int | None = None


@dataclass(frozen=True, slots=True)
class Linearised:
    """Estimate of one statistic: value, standard error, Satterthwaite's degrees of freedom and the effective size of the
    sample that it rests on. NaN where a figure cannot be estimated."""

    value: float
    standard_error: float
    freedom: float
    effective_size: float


def tally(sample: ReferenceSample, *, finite_population: bool) -> Tally:
    """Reduce the labelled part of a sample. At least one point must be labelled."""
    keep = sample.labelled
    assert keep.any(), "a sample without labels has no estimates"
    none = np.full(int(keep.sum()), NO_LABEL, dtype=np.int64)
    columns = {
        "stratum": sample.stratum[keep],
        "map": sample.map[keep],
        "reference": sample.reference[keep],
        "alternate": none if sample.alternate is None else sample.alternate[keep],
        "region": none if sample.region is None else sample.region[keep],
    }
    count = sample.count[keep]
    cell, of_cell = _distinct(list(columns.values()))
    cells = {name: values[of_cell] for name, values in columns.items()}
    if sample.cluster is None:
        units = sparse.identity(len(of_cell), dtype=np.float64, format="csr")
        repeats, group = np.bincount(cell, count, minlength=len(of_cell)).astype(np.int64), cells["stratum"]
    else:
        units, group = _cluster_units(sample.cluster[keep], cell, count, columns["stratum"], len(of_cell))
        repeats = np.ones(units.shape[0], dtype=np.int64)
    n_strata = len(sample.strata)
    sampled = np.bincount(columns["stratum"], count, minlength=n_strata).astype(np.float64)
    areas = np.array([stratum.area for stratum in sample.strata]) * (sampled > 0)
    weights = areas / areas.sum()
    scale = weights[cells["stratum"]] / sampled[cells["stratum"]]
    group_size = np.bincount(group, repeats, minlength=n_strata).astype(np.int64)
    fraction = np.zeros(n_strata) if not finite_population else _fractions(sample, group, group_size)
    pure = [NO_LABEL if s.mapped_as is None else sample.classes.index(s.mapped_as) for s in sample.strata]
    per_cell = np.bincount(cell, count, minlength=len(of_cell))
    return Tally(
        **cells, share=scale * per_cell, units=units, repeats=repeats, group=group, scale=scale,
        group_size=group_size, fraction=fraction, weights=weights,
        points=sampled.astype(np.int64), pure=np.array(pure, dtype=np.int64), clustered=sample.cluster is not None,
    )  # fmt: skip


def linearise(sample_tally: Tally, ratios: list[Ratio]) -> list[Linearised]:
    """Estimate every statistic. Where X is 0 the value is NaN; where the variance is not estimable (a primary unit alone
    in its stratum) the standard error is NaN."""
    if not ratios:
        return []
    y, x = np.stack([r.y for r in ratios], axis=1), np.stack([r.x for r in ratios], axis=1)
    total_y, total_x = sample_tally.share @ y, sample_tally.share @ x
    with np.errstate(divide="ignore", invalid="ignore"):
        values = np.where(total_x != 0, total_y / total_x, np.nan)
        d = (y - values * x) / total_x
    variance, freedom = variances(sample_tally, np.where(np.isfinite(d), d, 0.0), _touched(sample_tally, ratios))
    size = effective_sizes(sample_tally, x, values, variance)
    errors = np.where(np.isnan(values), np.nan, np.sqrt(variance))
    return [
        Linearised(float(v), float(e), float(f), float(s))
        for v, e, f, s in zip(values, errors, freedom, size, strict=True)
    ]


def variances(sample_tally: Tally, d: Floats, touched: NDArray[np.bool_]) -> tuple[Floats, Floats]:
    """Variances of the means of linearised variables d (c, k), and their degrees of freedom; both float64 (k,).

    touched (h, k): whether a stratum bears on a statistic. One that does and has a single primary unit makes the
    variance NaN, since nothing shows how units differ within it.
    """
    t = sample_tally
    n_groups = len(t.group_size)
    residuals = d - _by(t.stratum, t.share[:, None] * d, n_groups, t.weights)[t.stratum]
    per_unit = t.units @ (residuals * t.scale[:, None])
    means = _sum_by(t.group, t.repeats[:, None] * per_unit, n_groups) / np.maximum(t.group_size, 1)[:, None]
    squares = _sum_by(t.group, t.repeats[:, None] * (per_unit - means[t.group]) ** 2, n_groups)
    n = t.group_size.astype(np.float64)
    spread = np.where(n > 1, (1 - t.fraction) * n / np.maximum(n - 1, 1), np.where(t.fraction >= 1, 0.0, np.nan))
    parts = np.where(touched, squares * spread[:, None], 0.0)
    variance = parts.sum(axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        # Satterthwaite 1946, Biometrics Bulletin 2, 110-114; where nothing varies, plain units minus strata.
        satterthwaite = variance**2 / (parts**2 / np.maximum(n - 1, 1)[:, None]).sum(axis=0)
    plain = np.where(touched, np.maximum(n - 1, 0)[:, None], 0).sum(axis=0)
    return variance, np.where(np.isfinite(satterthwaite) & (variance > 0), satterthwaite, plain)


def effective_sizes(sample_tally: Tally, x: Floats, values: Floats, variance: Floats) -> Floats:
    """Size of the simple random sample that would be as precise, float64 (k,): p (1 - p) / variance (Korn & Graubard
    1998, Survey Methodology 24, 193-201). Where nothing varies (p = 0 or 1) it is the base of the statistic,
    (sum w)^2 / sum w^2 over its primary units (Kish 1965, Survey Sampling)."""
    t = sample_tally
    weight = t.units @ (np.abs(x) * t.scale[:, None])
    total = (t.repeats[:, None] * weight).sum(axis=0)
    squares = ((t.repeats * (1 - t.fraction[t.group]))[:, None] * weight**2).sum(axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        # A census leaves no squares: the effective size is without bound.
        kish = np.where(total > 0, total**2 / squares, np.nan)
        return np.where(variance > 0, values * (1 - values) / variance, kish)


def _touched(sample_tally: Tally, ratios: list[Ratio]) -> NDArray[np.bool_]:
    """(h, k): strata in which the base of a statistic was seen, or might be and a single unit cannot show it."""
    t = sample_tally
    seen = _sum_by(t.group, t.units @ np.stack([np.abs(r.x) for r in ratios], axis=1), len(t.group_size)) > 0
    classes = np.array([NO_LABEL if r.map_class is None else r.map_class for r in ratios])
    excluded = (classes != NO_LABEL) & (t.pure[:, None] != NO_LABEL) & (t.pure[:, None] != classes)
    touched: NDArray[np.bool_] = seen | ((t.group_size == 1)[:, None] & ~excluded)
    return touched


def _by(index: Ints, values: Floats, size: int, divisor: Floats) -> Floats:
    """Sums of values (c, k) by index, divided by `divisor` (size,); 0 where that is 0."""
    sums = _sum_by(index, values, size)
    return np.divide(sums, divisor[:, None], out=np.zeros_like(sums), where=divisor[:, None] > 0)


def _sum_by(index: Ints, values: Floats, size: int) -> Floats:
    rows = np.arange(len(index))
    selector = sparse.csr_matrix((np.ones(len(index)), (index, rows)), shape=(size, len(index)))
    return np.asarray(selector @ values)


def _distinct(columns: list[Ints]) -> tuple[Ints, Ints]:
    """Number the distinct rows of int64 columns (n,), in lexical order: the number of each row, and a row of each."""
    key = np.zeros(len(columns[0]), dtype=np.int64)
    for values in columns:
        key = key * (int(values.max()) + 2) + values + 1
    _, first, inverse = np.unique(key, return_index=True, return_inverse=True)
    return inverse.astype(np.int64), first.astype(np.int64)


def _cluster_units(
    cluster: Ints, cell: Ints, count: Ints, stratum: Ints, n_cells: int
) -> tuple[sparse.csr_matrix, Ints]:
    """Points per cluster and cell, and the stratum within which each cluster was drawn.

    A cluster that lies in more than one stratum was not drawn within strata: then all clusters form one group and the
    strata act as post-strata.
    """
    number, first = _distinct([cluster])
    units = sparse.csr_matrix((count.astype(np.float64), (number, cell)), shape=(len(first), n_cells))
    within = bool(np.array_equal(stratum[first][number], stratum))
    return units, stratum[first] if within else np.zeros(len(first), dtype=np.int64)


def _fractions(sample: ReferenceSample, group: Ints, group_size: Ints) -> Floats:
    """n / N per group where the population is a known count of units, else 0."""
    known = [s.pixels if sample.cluster is None else s.clusters for s in sample.strata]
    total = np.array([np.inf if not size else float(size) for size in known])
    if sample.cluster is not None and not group.any():
        total[0] = total.sum()
    return np.minimum(group_size / total, 1.0)
