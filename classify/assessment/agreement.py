"""Agreement of a whole matrix: kappa, and quantity and allocation disagreement.

Kappa is reported because clients ask for it. Overall accuracy with quantity and allocation disagreement says more
(Pontius & Millones 2011, Int. J. Remote Sensing 32(15), 4407-4429).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from classify.assessment.estimate import Floats, Linearised, Tally, variances

KAPPA_REMARK = (
    "Kappa is given because clients ask for it; overall accuracy with quantity and allocation disagreement says more."
)


@dataclass(frozen=True, slots=True, eq=False)
class Disagreement:
    """Proportions of the area, 0..1: overall, and float64 (k,) per class. quantity + allocation = 1 - overall accuracy;
    the classes' figures add up to twice the overall ones, since each wrong place concerns two classes."""

    quantity: float
    allocation: float
    quantity_by_class: Floats
    allocation_by_class: Floats


def area_matrix(shares: Floats, t: Tally, k: int) -> Floats:
    """Area proportions (..., k, k), rows map, columns reference, adding up to 1, from shares of the cells (..., c)."""
    on = np.flatnonzero(t.mapped)
    selector = np.zeros((len(on), k * k))
    selector[np.arange(len(on)), t.map[on] * k + t.reference[on]] = 1.0
    flat = shares[..., on] @ selector
    matrix: Floats = (flat / flat.sum(axis=-1, keepdims=True)).reshape(*shares.shape[:-1], k, k)
    return matrix


def disagreement(proportions: Floats) -> Disagreement:
    """Quantity and allocation disagreement of an area matrix (k, k), rows map, columns reference, adding up to 1."""
    rows, columns, diagonal = proportions.sum(axis=1), proportions.sum(axis=0), np.diag(proportions)
    quantity = np.abs(rows - columns)
    allocation = 2 * np.minimum(rows - diagonal, columns - diagonal)
    return Disagreement(float(quantity.sum() / 2), float(allocation.sum() / 2), quantity, allocation)


def kappa_values(proportions: Floats) -> Floats:
    """Cohen's kappa of area matrices (..., k, k); NaN where a single class fills both map and reference."""
    rows, columns = proportions.sum(axis=-1), proportions.sum(axis=-2)
    observed, chance = np.trace(proportions, axis1=-2, axis2=-1), (rows * columns).sum(axis=-1)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(np.where(chance < 1, (observed - chance) / (1 - chance), np.nan))


def kappa(t: Tally, proportions: Floats) -> Linearised:
    """Cohen's kappa of an area matrix (k, k), linearised: its variance is that of the mean of d kappa / d p_ij.

    For a simple random sample of points this is the large-sample variance of Fleiss, Cohen & Everitt 1969
    (Psychological Bulletin 72, 323-327), with n for its divisor; under stratification see Stehman 1996
    (Photogrammetric Engineering & Remote Sensing 62, 401-407).
    """
    value, n = float(kappa_values(proportions)), int(t.group_size.sum())
    if np.isnan(value):
        return Linearised(np.nan, np.nan, np.nan, np.nan)
    rows, columns = proportions.sum(axis=1), proportions.sum(axis=0)
    observed, chance = float(np.trace(proportions)), float(rows @ columns)
    same = (t.map == t.reference).astype(np.float64)
    slope = same / (1 - chance) - (1 - observed) / (1 - chance) ** 2 * (columns[t.map] + rows[t.reference])
    mapped_share = float(t.share @ t.mapped)
    # The p_ij are ratios to the mapped area, so their linearisation is centred on it.
    centre = float(t.share @ (slope * t.mapped)) / mapped_share
    d = (t.mapped * (slope - centre) / mapped_share)[:, None]
    variance, freedom = variances(t, d, (t.group_size > 0)[:, None])
    factor, size = (n - 1) / n if t.simple else 1.0, np.inf if t.census else float(n)
    return Linearised(value, float(np.sqrt(variance[0] * factor)), float(freedom[0]), size)
