"""Cells of a map: squares of pixels, so small that the ground area of a pixel is taken as one in each."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from classify.features.compiled import compiled
from classify.raster.area import ground_areas_m2, pixel_size_m
from classify.raster.grid import Grid, Window

# A cell is at most so wide on the ground: the area of a pixel then differs by less than one part in a thousand from
# the mean in its cell, also at 80 degrees of latitude.
_CELL_M = 1000.0
# Powers of two, for tiles of a map are. Smaller cells cost more than they would tell.
_MOST_PX, _LEAST_PX = 64, 8


def cell_shape_yx(grid: Grid) -> tuple[int, int]:
    """Rows and columns of pixels in a cell. Cells start at the first pixel of the grid."""
    fits = _CELL_M / max(*pixel_size_m(grid), 1e-9)
    side = 2 ** int(np.clip(np.log2(max(fits, 1.0)), 0, np.log2(_MOST_PX)))
    if grid.crs.is_geographic and grid.transform.b == grid.transform.d == 0:
        return side, _MOST_PX  # all pixels of a row are alike
    return max(side, _LEAST_PX), max(side, _LEAST_PX)


def cell_areas(grid: Grid, window: Window, shape_yx: tuple[int, int]) -> NDArray[np.float64]:
    """Mean ground area in m2 of a pixel in each cell that `window` touches (float64)."""
    rows, cols = shape_yx
    t = grid.transform
    cells = Grid(grid.crs, t @ t.scale(cols, rows), -(-grid.height // rows), -(-grid.width // cols))
    row, col = window.row // rows, window.col // cols
    last_row, last_col = (window.row + window.height - 1) // rows, (window.col + window.width - 1) // cols
    return ground_areas_m2(cells, Window(row, col, last_row - row + 1, last_col - col + 1)) / (rows * cols)


def count_by_cell(
    codes: NDArray[np.uint8], shape_yx: tuple[int, int], stratum_of: NDArray[np.int16], strata: int
) -> NDArray[np.int64]:
    """Pixels of each stratum in each cell of `codes`, whose first pixel starts one: int64 (rows, cols, strata).

    stratum_of: int16 (256,), stratum by code, -1 for none.
    """
    rows, cols = shape_yx
    counts = np.zeros((-(-codes.shape[0] // rows), -(-codes.shape[1] // cols), strata), np.int64)
    used = np.flatnonzero(stratum_of >= 0)
    _count(codes, rows, cols, used, stratum_of[used], counts)
    return counts


def locate(  # noqa: PLR0917 - plain arrays, as the kernels take them
    codes: NDArray[np.uint8], shape_yx: tuple[int, int], stratum_of: NDArray[np.int16], cell_yx: NDArray[np.int64],
    stratum: NDArray[np.int64], rank: NDArray[np.int64],
) -> NDArray[np.int64]:  # fmt: skip
    """Row and column in `codes` (int64 (n, 2)) of the rank-th pixel of a stratum in a cell, in reading order.

    cell_yx: row and column of the cell (int64 (n, 2)); stratum and rank: int64 (n,), rank below the count there.
    """
    order = np.lexsort((rank, stratum, cell_yx[:, 1], cell_yx[:, 0]))
    places = np.empty(cell_yx.shape, np.int64)
    _locate(codes, *shape_yx, stratum_of, cell_yx[order], stratum[order], rank[order], places)
    return places[np.argsort(order)]


@compiled
def _count(  # noqa: PLR0917 - a kernel takes plain arrays
    codes: NDArray[np.uint8], rows: int, cols: int, used: NDArray[np.int64], stratum: NDArray[np.int16],
    counts: NDArray[np.int64],
) -> None:  # fmt: skip
    height, width = codes.shape
    # Neighbours are mostly alike: four tallies in turn, as adding to one waits until the addition before is stored.
    tally = np.zeros((4, 256), np.int32)
    a, b, c, d = tally[0], tally[1], tally[2], tally[3]
    for down in range(counts.shape[0]):
        for across in range(counts.shape[1]):
            for i in range(down * rows, min((down + 1) * rows, height)):
                line = codes[i, across * cols : min((across + 1) * cols, width)]
                fours = line.shape[0] // 4 * 4
                for j in range(0, fours, 4):
                    a[line[j]] += 1
                    b[line[j + 1]] += 1
                    c[line[j + 2]] += 1
                    d[line[j + 3]] += 1
                for j in range(fours, line.shape[0]):
                    a[line[j]] += 1
            for u in range(used.shape[0]):
                code = used[u]
                counts[down, across, stratum[u]] += a[code] + b[code] + c[code] + d[code]
                a[code] = b[code] = c[code] = d[code] = 0


@compiled
def _locate(  # noqa: PLR0917 - a kernel takes plain arrays
    codes: NDArray[np.uint8], rows: int, cols: int, stratum_of: NDArray[np.int16], cell_yx: NDArray[np.int64],
    stratum: NDArray[np.int64], rank: NDArray[np.int64], places: NDArray[np.int64],
) -> None:  # fmt: skip
    """As `locate`, of places in ascending order: a cell is gone through once for all that are sought of a stratum."""
    height, width = codes.shape
    e, n = 0, len(rank)
    while e < n:
        down, across = cell_yx[e]
        code, seen, last = stratum[e], 0, e
        while last < n and cell_yx[last, 0] == down and cell_yx[last, 1] == across and stratum[last] == code:
            last += 1
        for i in range(down * rows, min((down + 1) * rows, height)):
            for j in range(across * cols, min((across + 1) * cols, width)):
                if stratum_of[codes[i, j]] == code:
                    if e < last and rank[e] == seen:
                        places[e, 0], places[e, 1] = i, j
                        e += 1
                    seen += 1
            if e == last:
                break
