"""Random lots by number: the lot of a pixel depends on the seed and the pixel alone, not on when or where it is drawn.

A pixel of ground area a gets the key -log(1 - u) / a, u uniform, and the pixels with the lowest keys are drawn. The
lowest n keys are a successive sample without replacement with probabilities proportional to area (Efraimidis & Spirakis
2006, Information Processing Letters 97, 181-185), a simple random sample where areas are equal, and the next keys go on
with it. u comes from the mixing function of Steele, Lea & Flood 2014 ("Fast splittable pseudorandom number generators",
OOPSLA), applied to a counter.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from classify.features.compiled import compiled

_STEP = np.uint64(0x9E3779B97F4A7C15)
_MIX_1 = np.uint64(0xBF58476D1CE4E5B9)
_MIX_2 = np.uint64(0x94D049BB133111EB)
_S30, _S27, _S31, _S11 = np.uint64(30), np.uint64(27), np.uint64(31), np.uint64(11)
_UNIT = 2.0**-53


def stream(seed: int, purpose: int) -> np.uint64:
    """Where the lots of one purpose start."""
    with np.errstate(over="ignore"):
        return np.uint64(_mixed(np.array([seed], np.uint64) * _STEP + np.uint64(purpose))[0])


def lots(start: np.uint64, numbers: NDArray[np.int64]) -> NDArray[np.float64]:
    """Uniform lots in [0, 1) of the given numbers (float64, same shape)."""
    with np.errstate(over="ignore"):
        mixed = _mixed(start + (numbers.astype(np.uint64) + np.uint64(1)) * _STEP)
    return np.asarray((mixed >> _S11).astype(np.float64) * _UNIT)


def _mixed(z: NDArray[np.uint64]) -> NDArray[np.uint64]:
    with np.errstate(over="ignore"):
        z = (z ^ (z >> _S30)) * _MIX_1
        z = (z ^ (z >> _S27)) * _MIX_2
        return np.asarray(z ^ (z >> _S31))


# Small kernels with few arrays each are what the compiler makes wide instructions of.


@compiled
def _count(line: NDArray[np.uint8], into_cell: int, step: int, counted: NDArray[np.int32]) -> None:
    """Count the codes of one row by cell; its first pixel is the `into_cell`-th of the first cell."""
    for cell in range(counted.shape[0]):
        count = counted[cell]
        for code in line[max(cell * step - into_cell, 0) : (cell + 1) * step - into_cell]:
            count[code] += 1


@compiled
def _fill(z0: np.uint64, lot: NDArray[np.uint64]) -> None:
    """The lots of a row, as whole numbers below 2^53, from the counter before its first pixel."""
    for j in range(lot.shape[0]):
        z = z0 + np.uint64(j + 1) * _STEP
        z = (z ^ (z >> _S30)) * _MIX_1
        z = (z ^ (z >> _S27)) * _MIX_2
        lot[j] = (z ^ (z >> _S31)) >> _S11


@compiled
def _add_up(
    counted: NDArray[np.int32], stratum_of: NDArray[np.int16], area: NDArray[np.float64], pixels: NDArray[np.int64],
    areas: NDArray[np.float64],
) -> None:  # fmt: skip
    """Add counts by cell and code to the sums by stratum, and clear them."""
    for cell in range(counted.shape[0]):
        for code in range(256):
            n = counted[cell, code]
            if n > 0:
                s = stratum_of[code]
                if s >= 0:
                    pixels[s] += n
                    areas[s] += n * area[cell]
                counted[cell, code] = 0


@compiled
def offer(  # noqa: PLR0917 - a kernel takes plain arrays
    codes: NDArray[np.uint8], row: int, col: int, width: int, stratum_of: NDArray[np.int16],
    cell_area: NDArray[np.float64], step: int, start: np.uint64, limit: NDArray[np.float64], pixels: NDArray[np.int64],
    areas: NDArray[np.float64], found_unit: NDArray[np.int64], found_key: NDArray[np.float64],
    found_stratum: NDArray[np.int16],
) -> int:  # fmt: skip
    """Count pixels and areas by stratum, and find the pixels whose key is at most the stratum's limit.

    codes: uint8 (h, w) at (row, col) of a raster `width` wide. stratum_of: int16 (256,), -1 outside the population.
    cell_area: float64, area of a pixel in cells of `step` x `step` pixels of the raster, from the cell that holds (row,
    col). limit: float64 (k,). pixels int64 (k,) and areas float64 (k,) are added to. The number found is returned;
    their units (int64), keys (float64) and strata (int16) are written to the last three, as long as `codes` is large.
    """
    top, left = row // step, col // step
    cells = cell_area.shape[1]
    highest = cell_area.max()
    # By code: a lot above the bound has a key above the limit whatever the pixel's area, so that most pixels need no
    # logarithm; and those outside the population have bound 0.
    bound = np.zeros(256, np.uint64)
    for code in range(256):
        s = stratum_of[code]
        if s >= 0:
            share = -np.expm1(-max(limit[s], 0.0) * highest)
            bound[code] = np.uint64(min(share * 1.000001 + 1e-15, 1.0) * 9007199254740992.0)
    highest_bound = bound.max()
    counted = np.zeros((cells, 256), np.int32)
    lot = np.empty(codes.shape[1], np.uint64)
    found = 0
    for i in range(codes.shape[0]):
        line = codes[i]
        down = (row + i) // step - top
        z0 = start + np.uint64(np.int64(row + i) * width + col) * _STEP
        _count(line, col - left * step, step, counted)
        _fill(z0, lot)
        for j in range(line.shape[0]):
            if lot[j] <= highest_bound and lot[j] <= bound[line[j]]:
                s = stratum_of[line[j]]
                key = -np.log1p(-np.float64(lot[j]) * _UNIT) / cell_area[down, (col + j) // step - left]
                if s >= 0 and key <= limit[s]:
                    found_unit[found] = np.int64(row + i) * width + col + j
                    found_key[found] = key
                    found_stratum[found] = s
                    found += 1
        if i + 1 == codes.shape[0] or (row + i + 1) // step != (row + i) // step:
            _add_up(counted, stratum_of, cell_area[down], pixels, areas)
    return found
