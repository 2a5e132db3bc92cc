"""Stratified bootstrap with rescaled weights, on request.

Within each stratum n - 1 of the n primary units are drawn with replacement and weights rescaled so that the spread of
the replicates is the design's (Rao & Wu 1988, J. American Statistical Association 83, 231-241; in terms of weights Rao,
Wu & Yue 1992, Survey Methodology 18, 209-217). Limits are percentiles of the replicates.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence

import numpy as np

from classify.assessment.estimate import Floats, Ratio, Tally
from classify.assessment.intervals import Bounds

# Replicates held in memory at once are limited to about so many numbers.
_NUMBERS_AT_ONCE = 4_000_000

# Shares of replicates, float64 (b, c) -> values of statistics, float64 (b, k).
Statistic = Callable[[Floats], Floats]


def ratios_of(ratios: Sequence[Ratio]) -> Statistic:
    """Values of ratios from the shares of replicates."""
    y, x = np.stack([r.y for r in ratios], axis=1), np.stack([r.x for r in ratios], axis=1)

    def values(shares: Floats) -> Floats:
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.asarray((shares @ y) / (shares @ x))

    return values


def bounds(t: Tally, statistic: Statistic, level: float, replicates: int, seed: int) -> list[Bounds]:
    """Percentile limits of every value of `statistic`. Replicates in which a value has no base are left out of it."""
    values = np.concatenate([statistic(shares) for shares in _replicates(t, replicates, seed)])
    tails = [(1 - level) / 2, (1 + level) / 2]
    found = []
    for column in values.T:
        finite = column[np.isfinite(column)]
        found.append(Bounds(*np.quantile(finite, tails)) if len(finite) else Bounds(np.nan, np.nan))
    return found


def _replicates(t: Tally, replicates: int, seed: int) -> Iterator[Floats]:
    """Shares of the cells, float64 (b, c), in batches of replicates; each row adds up to 1."""
    rng = np.random.default_rng(seed)
    members = [np.flatnonzero(t.group == g) for g in range(len(t.group_size))]
    batch = max(1, _NUMBERS_AT_ONCE // max(t.units.shape))
    points_of_cell, in_stratum = t.units.T.tocsr(), _indicator(t)
    for start in range(0, replicates, batch):
        size = min(batch, replicates - start)
        weight = np.ones((size, len(t.group)))
        for group, here in enumerate(members):
            n = int(t.group_size[group])
            if n < 2:
                continue
            drawn = rng.multinomial(n - 1, t.repeats[here] / n, size=size) / t.repeats[here]
            keep = np.sqrt(1 - t.fraction[group])
            weight[:, here] = 1 - keep + keep * n / (n - 1) * drawn
        # Points per cell in each replicate; every stratum keeps its known share of the area.
        points = np.asarray((points_of_cell @ (weight * t.repeats).T).T)
        total = points @ in_stratum
        yield points * np.divide(t.weights, total, out=np.zeros_like(total), where=total > 0)[:, t.stratum]


def _indicator(t: Tally) -> Floats:
    return np.asarray(t.stratum[:, None] == np.arange(len(t.weights)), dtype=np.float64)
