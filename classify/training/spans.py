"""Which pixels a polygon holds: those whose centre lies inside it. All polygons at once, by scan lines.

A centre on a shared edge belongs to exactly one of the two polygons (intervals are closed on the left, open on the
right), so that neighbours drawn edge to edge neither share a pixel nor leave a gap.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import shapely
from numpy.typing import NDArray

from classify.raster.grid import Grid


def pixels_inside(geometry: NDArray[Any], grid: Grid) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]]:
    """Index of the geometry, row and column (int64, each (n,)) of every pixel centre inside each areal geometry.

    Geometries are valid polygons or multipolygons in the grid's CRS; holes are left out by the even-odd rule. Sorted
    by geometry, row, column; only pixels on the grid.
    """
    owner, row, cross = _crossings(geometry, grid)
    order = np.lexsort((cross, row, owner))
    owner, row, cross = owner[order], row[order], cross[order]
    # Closed rings cross a line an even number of times, so neighbours in this order are the ends of one span.
    assert len(cross) % 2 == 0, len(cross)
    owner, row, first, last = owner[::2], row[::2], cross[::2], cross[1::2]
    # The centre of column c is at c + 0.5: columns from ceil(first - 0.5) up to, not including, ceil(last - 0.5).
    start = np.clip(np.ceil(first - 0.5), 0, grid.width).astype(np.int64)
    stop = np.clip(np.ceil(last - 0.5), 0, grid.width).astype(np.int64)
    length = np.maximum(stop - start, 0)
    span = np.repeat(np.arange(len(length)), length)
    within = np.arange(len(span)) - np.repeat(np.cumsum(length) - length, length)
    return owner[span], row[span], start[span] + within


def _crossings(geometry: NDArray[Any], grid: Grid) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.float64]]:
    """Where edges cross the centre lines of rows: geometry index, row, and the crossing in pixel columns."""
    from_xy, to_xy, owner = _edges(geometry, grid)
    # Edges run upwards whoever draws them, so that both owners of a shared edge compute the same crossing to the bit.
    swap = (from_xy[:, 1] > to_xy[:, 1])[:, None]
    low, high = np.where(swap, to_xy, from_xy), np.where(swap, from_xy, to_xy)
    first = np.clip(np.ceil(low[:, 1] - 0.5), 0, grid.height).astype(np.int64)
    stop = np.clip(np.ceil(high[:, 1] - 0.5), 0, grid.height).astype(np.int64)
    count = np.maximum(stop - first, 0)
    edge = np.repeat(np.arange(len(count)), count)
    row = first[edge] + np.arange(len(edge)) - np.repeat(np.cumsum(count) - count, count)
    low, high = low[edge], high[edge]
    share = (row + 0.5 - low[:, 1]) / (high[:, 1] - low[:, 1])
    return owner[edge], row, low[:, 0] + share * (high[:, 0] - low[:, 0])


def _edges(geometry: NDArray[Any], grid: Grid) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.int64]]:
    """Both ends of every edge in pixel coordinates (column, row), float64 (e, 2), and its geometry's index."""
    parts, part_owner = shapely.get_parts(geometry, return_index=True)
    rings, ring_part = shapely.get_rings(parts, return_index=True)
    xy, point_ring = shapely.get_coordinates(rings, return_index=True)
    inverse = ~grid.transform
    pixel_xy = np.column_stack(
        [
            inverse.a * xy[:, 0] + inverse.b * xy[:, 1] + inverse.c,
            inverse.d * xy[:, 0] + inverse.e * xy[:, 1] + inverse.f,
        ]
    )
    joined = point_ring[:-1] == point_ring[1:]
    owner = part_owner[ring_part][point_ring[:-1]]
    return pixel_xy[:-1][joined], pixel_xy[1:][joined], owner[joined]
