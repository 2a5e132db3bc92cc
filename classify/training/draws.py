"""Seeded draws that thin pixels evenly over polygons."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray


def even_draw(polygon: NDArray[np.int32], most: int, seed: int) -> NDArray[np.bool_]:
    """Mask (n,) that keeps `most` pixels, or all if there are fewer, taking as evenly from each polygon as can be.

    Rule: pixels are shuffled by the seed and numbered within their polygon; every polygon gives its first pixel, then
    its second, and so on until the count is reached. Small polygons are kept whole before large ones give more,
    since pixels of one polygon say nearly the same.
    """
    count = len(polygon)
    if count <= most:
        return np.ones(count, dtype=bool)
    shuffled = np.random.default_rng(seed).permutation(count)
    by_polygon = shuffled[np.argsort(polygon[shuffled], kind="stable")]
    ordered = polygon[by_polygon]
    starts = np.flatnonzero(np.r_[True, ordered[1:] != ordered[:-1]])
    turn = np.arange(count) - np.repeat(starts, np.diff(np.r_[starts, count]))
    place = np.empty(count, dtype=np.int64)
    place[by_polygon] = turn
    # The last round is shared out by the shuffle, not by polygon number.
    order = shuffled[np.argsort(place[shuffled], kind="stable")]
    keep = np.zeros(count, dtype=bool)
    keep[order[:most]] = True
    return keep
