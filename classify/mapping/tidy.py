"""Tidy a class map: majority smoothing, and no patch below the minimum mapping unit.

Both are defined pixel by pixel and patch by patch on the whole map and computed in blocks with a margin wide enough
that no block edge shows. A patch is what hangs together of one class over 4 or 8 neighbours; no data is no patch and
never changes. A patch smaller than the unit, by ground area, takes the class of the neighbour that is not too small
itself with which it shares the longest border; where all are too small, that of the largest, if that is larger than
itself. Of equals, the lowest class code. All patches change at once, and passes are repeated until nothing changes:
each leaves fewer patches.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from itertools import count
from pathlib import Path
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from classify.errors import SettingsError
from classify.mapping.blocks import NO_CLASS, rounded_areas_m2
from classify.mapping.byte_raster import ByteRaster
from classify.mapping.patches import find_patches, majority, neighbours_of_small
from classify.progress import SILENT, Progress
from classify.raster.area import ground_areas_m2
from classify.raster.grid import Grid, Window
from classify.threads import stoppable_pool

# The margin of a block is twice the longest patch below the unit; beyond this a block would not fit into memory.
_LONGEST_PX = 1000
_BLOCK_PX = 1024
# Pixels that all workers together hold, with some 30 bytes for each.
_PIXELS_AT_ONCE = 20_000_000


@dataclass(frozen=True, slots=True)
class TidyOptions:
    """minimum_unit_m2: patches below this ground area go; 0 keeps all. neighbours: what hangs together, over edges or
    over corners too. majority_px: side of the square whose most frequent class a pixel takes, odd; 1 leaves it alone.
    """

    minimum_unit_m2: float = 0.0
    neighbours: Literal[4, 8] = 8
    majority_px: int = 1

    def __bool__(self) -> bool:
        return self.minimum_unit_m2 > 0 or self.majority_px > 1

    def __str__(self) -> str:
        steps = []
        if self.majority_px > 1:
            steps.append(f"majority of {self.majority_px} x {self.majority_px} pixels")
        if self.minimum_unit_m2 > 0:
            steps.append(f"minimum mapping unit {self.minimum_unit_m2 / 10_000:g} ha over {self.neighbours} neighbours")
        return ", then ".join(steps)


AS_IT_IS = TidyOptions()


def tidy(
    source: ByteRaster, folder: Path, options: TidyOptions, *, jobs: int = 1, progress: Progress = SILENT
) -> ByteRaster:
    """The tidied map as a raster of bytes in `folder`; `source`, class codes with 0 for no data, is left as it is.

    Raises SettingsError if the unit is too large for the pixels.
    """
    grid = source.grid
    longest_px = _longest_px(grid, options.minimum_unit_m2)
    current = source
    if options.majority_px > 1:
        margin = options.majority_px // 2
        current = ByteRaster(folder / "majority.bytes", grid)
        _by_block(
            source, current, margin, lambda codes, _: majority(codes, options.majority_px), jobs=jobs, progress=progress
        )
    if options.minimum_unit_m2 > 0:
        work = _Absorb(grid, options)
        for number in count():
            before, current = current, ByteRaster(folder / f"unit_{number % 2}.bytes", grid)
            if not _by_block(before, current, 2 * longest_px + 2, work, jobs=jobs, progress=progress):
                break
    return current


@dataclass(frozen=True, slots=True)
class _Absorb:
    """One pass: what small patches become."""

    grid: Grid
    options: TidyOptions

    def __call__(self, codes: NDArray[np.uint8], window: Window) -> NDArray[np.uint8]:
        """New codes (h, w) of a window that may not reach outside the grid."""
        corners = self.options.neighbours == 8
        labels, sizes_m2, classes = find_patches(codes, rounded_areas_m2(self.grid, window), corners)
        small = (sizes_m2 < self.options.minimum_unit_m2) & (classes != NO_CLASS)
        if not small.any():
            return codes
        become = classes.copy()
        pairs = neighbours_of_small(labels, small, classes)
        if len(pairs):
            patches, chosen = _choose(pairs, sizes_m2, small, classes)
            become[patches] = classes[chosen]
        return np.asarray(become[labels], dtype=np.uint8)


def _choose(
    pairs: NDArray[np.int64], sizes_m2: NDArray[np.float64], small: NDArray[np.bool_], classes: NDArray[np.uint8]
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Small patches that change, and the neighbours whose class they take. pairs (n, 2): one row per shared edge."""
    (patch, other), border = _counted(pairs)
    # Among neighbours too small themselves only larger ones count, and of two of one size the one of the lower class.
    larger = (sizes_m2[other] > sizes_m2[patch]) | (
        (sizes_m2[other] == sizes_m2[patch]) & (classes[other] < classes[patch])
    )
    eligible = ~small[other] | larger
    patch, other, border = patch[eligible], other[eligible], border[eligible]
    weight = np.where(small[other], sizes_m2[other], border)
    order = np.lexsort((classes[other], -border, -weight, small[other], patch))
    patch, other = patch[order], other[order]
    first = np.flatnonzero(np.diff(patch, prepend=-1))
    return patch[first], other[first]


def _counted(pairs: NDArray[np.int64]) -> tuple[tuple[NDArray[np.int64], NDArray[np.int64]], NDArray[np.int64]]:
    order = np.lexsort((pairs[:, 1], pairs[:, 0]))
    sorted_pairs = pairs[order]
    first = np.flatnonzero((np.diff(sorted_pairs, axis=0, prepend=-1) != 0).any(axis=1))
    counts = np.diff(np.append(first, len(sorted_pairs)))
    return (sorted_pairs[first, 0], sorted_pairs[first, 1]), counts


def _by_block(
    source: ByteRaster,
    target: ByteRaster,
    margin_px: int,
    work: Callable[[NDArray[np.uint8], Window], NDArray[np.uint8]],
    *,
    jobs: int,
    progress: Progress,
) -> bool:
    """Fill `target` with `work` on blocks of `source` with a margin. Returns whether any pixel changed."""
    target.create()
    side_px = max(_BLOCK_PX, 2 * margin_px)
    windows = list(source.grid.blocks(side_px))
    jobs = max(1, min(jobs, _PIXELS_AT_ONCE // (side_px + 2 * margin_px) ** 2))

    def one(window: Window) -> bool:
        wide = window.pad(margin_px).intersect(source.grid.window)
        assert wide is not None, window
        codes = source.read(wide)
        rows, cols = window.shift(-wide.row, -wide.col).slices_yx
        result = work(codes, wide)[rows, cols]
        target.write(window, result)
        return bool((result != codes[rows, cols]).any())

    changed = False
    with progress.task("Tidying the map", len(windows)) as task, stoppable_pool(jobs) as pool:
        for differs in pool.map(one, windows):
            changed |= differs
            task.advance()
    return changed


def _longest_px(grid: Grid, minimum_unit_m2: float) -> int:
    """No patch below the unit has more pixels than this, and so none is longer."""
    if minimum_unit_m2 <= 0:
        return 0
    at = [(row, col) for row in (0, grid.height // 2, grid.height - 1) for col in (0, grid.width // 2, grid.width - 1)]
    least_m2 = min(float(ground_areas_m2(grid, Window(row, col, 1, 1))[0, 0]) for row, col in at)
    # Pixels between the nine looked at may be a little smaller still.
    longest = math.ceil(minimum_unit_m2 / (0.98 * least_m2))
    if longest > _LONGEST_PX:
        raise SettingsError(
            f"a minimum mapping unit of {minimum_unit_m2 / 10_000:g} ha is {longest} pixels of this map; at most "
            f"{_LONGEST_PX} are possible", where="map.minimum_unit_ha", fix="choose a smaller unit or a coarser grid",
        )  # fmt: skip
    return longest
