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
    """Proportions of the area, 0..1: overall figures, and float64 (k,) per class. quantity + allocation = 1 - overall
    accuracy."""

    quantity: float
    allocation: float
    quantity_by_class: Floats
    allocation_by_class: Floats


def disagreement(proportions: Floats) -> Disagreement:
    """Quantity and allocation disagreement of an area matrix (k, k), rows map, columns reference, adding up to 1."""
    rows, columns, diagonal = proportions.sum(axis=1), proportions.sum(axis=0), np.diag(proportions)
    quantity = np.abs(rows - columns)
    allocation = 2 * np.minimum(rows - diagonal, columns - diagonal)
    return Disagreement(float(quantity.sum() / 2), float(allocation.sum() / 2), quantity, allocation)


def kappa(sample_tally: Tally, proportions: Floats) -> Linearised:
    """Cohen's kappa of an area matrix (k, k), linearised: d kappa / d p_ij is the variable whose mean's variance counts.

    For a simple random sample of points this is the large-sample variance of Fleiss, Cohen & Everitt 1969
    (Psychological Bulletin 72, 323-327), with n for its divisor; under stratification see Stehman 1996
    (Photogrammetric Engineering & Remote Sensing 62, 401-407).
    """
    t = sample_tally
    rows, columns = proportions.sum(axis=1), proportions.sum(axis=0)
    observed, chance = float(np.trace(proportions)), float(rows @ columns)
    if chance >= 1:
        return Linearised(np.nan, np.nan, np.nan, np.nan)
    value = (observed - chance) / (1 - chance)
    same = (t.map == t.reference).astype(np.float64)
    slope = same / (1 - chance) - (1 - observed) / (1 - chance) ** 2 * (columns[t.map] + rows[t.reference])
    everywhere = np.ones((len(t.group_size), 1), dtype=bool) & (t.group_size > 0)[:, None]
    variance, freedom = variances(t, slope[:, None], everywhere)
    n = int(t.group_size.sum())
    simple = np.count_nonzero(t.weights) == 1 and not t.clustered
    factor = (n - 1) / n if simple else 1.0
    return Linearised(value, float(np.sqrt(variance[0] * factor)), float(freedom[0]), float(n))
