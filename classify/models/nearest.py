"""The nearest of some thousands of points, for many pixels: exact, compiled, and skipping points that lie too far."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from classify.features.compiled import compiled

# Points of a group, for which distances are taken together: a few vectors of what processors hold.
_LANES = 64
# Bounds are rounded; a group is skipped only if it is farther than this beyond doubt.
_SURELY = np.float32(0.9999)


@dataclass(frozen=True, eq=False)
class Points:
    """Points in groups of neighbours, g groups of `_LANES`, the last ones padded with points at infinity.

    lanes: float32 (g, d, lanes). weights: float32 (g, lanes), a number that goes with each point. low, high: float32
    (d, g), boxes around the groups.
    """

    lanes: NDArray[np.float32]
    weights: NDArray[np.float32]
    low: NDArray[np.float32]
    high: NDArray[np.float32]

    def nearest(self, pixels: NDArray[np.float32], count: int) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
        """For pixels (n, d): the distance to the `count`-th nearest point, and the mean weight of those that are up to
        so near, float32 (n,) each. Infinite where there are not so many points; NaN where a pixel is not finite."""
        pixels = np.ascontiguousarray(pixels)
        far = np.empty(len(pixels), dtype=np.float32)
        mean = np.empty(len(pixels), dtype=np.float32)
        _find(pixels, self.lanes, self.weights, self.low, self.high, count, far, mean)
        lost = ~np.isfinite(pixels).all(axis=1)
        far[lost] = mean[lost] = np.nan
        return far, mean


def group_points(points: NDArray[np.float32], weights: NDArray[np.float32]) -> Points:
    """Points (m, d), m > 0, with their weights (m,), arranged for the search."""
    groups = _split(points, np.arange(len(points)))
    lanes = np.full((len(groups), points.shape[1], _LANES), np.inf, dtype=np.float32)
    spread = np.zeros((len(groups), _LANES), dtype=np.float32)
    low = np.empty((points.shape[1], len(groups)), dtype=np.float32)
    high = np.empty_like(low)
    for number, rows in enumerate(groups):
        lanes[number, :, : len(rows)] = points[rows].T
        spread[number, : len(rows)] = weights[rows]
        low[:, number], high[:, number] = points[rows].min(axis=0), points[rows].max(axis=0)
    return Points(lanes, spread, low, high)


def _split(points: NDArray[np.float32], rows: NDArray[np.int64]) -> list[NDArray[np.int64]]:
    """Halves, across the direction in which they spread most, until a group fits into the lanes."""
    if len(rows) <= _LANES:
        return [rows]
    axis = int(np.argmax(np.ptp(points[rows], axis=0)))
    half = -(-len(rows) // (2 * _LANES)) * _LANES
    ordered = rows[np.argsort(points[rows, axis], kind="stable")]
    return [*_split(points, ordered[:half]), *_split(points, ordered[half:])]


@compiled
def _bound(pixel, low, high, bound):  # type: ignore[no-untyped-def]  # noqa: ANN001, ANN202
    # Squared distances (g,) from a pixel (d,) to the boxes.
    bound[:] = 0
    for direction in range(len(pixel)):
        for group in range(len(bound)):
            below = low[direction, group] - pixel[direction]
            gap = max(below, pixel[direction] - high[direction, group], np.float32(0))
            bound[group] += gap * gap


@compiled
def _find(pixels, lanes, weights, low, high, count, far, mean):  # type: ignore[no-untyped-def]  # noqa: ANN001, ANN202, PLR0917
    width, groups = low.shape
    least = np.empty(count, dtype=np.float32)
    theirs = np.empty(count, dtype=np.float32)
    bound = np.empty(groups, dtype=np.float32)
    square = np.empty(_LANES, dtype=np.float32)
    for pixel in range(len(pixels)):
        least[:] = np.inf
        theirs[:] = np.inf
        _bound(pixels[pixel], low, high, bound)
        limit = np.float32(np.inf)
        while True:
            group = -1
            closest = limit
            for other in range(groups):
                if bound[other] < closest:
                    closest = bound[other]
                    group = other
            if group < 0:
                break
            bound[group] = np.inf
            square[:] = 0
            for direction in range(width):
                here = pixels[pixel, direction]
                for lane in range(_LANES):
                    gap = lanes[group, direction, lane] - here
                    square[lane] += gap * gap
            for lane in range(_LANES):
                if square[lane] < limit:
                    place = count - 1
                    while place > 0 and least[place - 1] > square[lane]:
                        least[place] = least[place - 1]
                        theirs[place] = theirs[place - 1]
                        place -= 1
                    least[place] = square[lane]
                    theirs[place] = weights[group, lane]
                    limit = least[count - 1]
        far[pixel] = np.sqrt(least[count - 1])
        total = np.float64(0)
        for place in range(count):
            total += theirs[place]
        mean[pixel] = total / count
