"""The population of a sample: every pixel of a map with a class, streamed once whatever the size of the map.

One pass counts pixels and ground area by stratum and keeps the lowest keys of each (see `lots`). What is kept does not
depend on the order of blocks: the same seed gives the same points whatever the block size or the number of jobs.
"""

from __future__ import annotations

import threading
from collections.abc import Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import rasterio
import rasterio.features
from numpy.typing import NDArray
from rasterio.errors import RasterioError
from rasterio.io import DatasetReader
from shapely import STRtree
from shapely.geometry import box
from shapely.geometry.base import BaseGeometry

from classify.assessment.lots import lots, offer, stream
from classify.errors import DataError
from classify.progress import SILENT, Progress
from classify.raster.area import ground_areas_m2, pixel_size_m
from classify.raster.grid import Grid, Window

# Rows at a time, and columns: strips of a wide map are quickest to read, and a few MB each.
_ROWS_PX, _COLS_PX = 512, 8_192
# Rows offered to the kernel between two looks at the lowest keys.
_SLICE_PX = 64
# Within so many metres, and so many pixels, the ground area of a pixel is taken as one.
_CELL_M, _CELL_PX = 500.0, 64
_KEYS = 1
_CACHE_BYTES = 64 << 20


@dataclass(frozen=True)
class Population:
    """A map and what of it is to be sampled.

    stratum_of: int16 (256,), stratum by class code, -1 outside. names: of strata. excluded: shapes in the map's CRS
    whose pixels (by centre) are not in the population. segment_px: side of the square of pixels drawn as one unit,
    aligned to the map's first pixel; with more than one there is a single stratum.
    """

    path: Path
    grid: Grid
    names: tuple[str, ...]
    stratum_of: NDArray[np.int16]
    excluded: tuple[BaseGeometry, ...] = ()
    segment_px: int = 1
    _tree: STRtree = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "_tree", STRtree(list(self.excluded)))

    def codes(self, source: DatasetReader, window: Window) -> tuple[NDArray[np.uint8], NDArray[np.bool_] | None]:
        """Class codes (uint8, (h, w)) and where pixels are excluded (bool, or None for nowhere). Raises DataError."""
        try:
            codes = source.read(1, window=window.to_rasterio())
        except RasterioError as error:
            raise DataError(f"the map cannot be read: {error}", where=str(self.path)) from error
        part = self.grid.crop(window)
        near = self._tree.query(box(*part.bounds)) if self.excluded else ()
        if not len(near):
            return codes, None
        shapes = [self.excluded[i] for i in near]
        return codes, rasterio.features.geometry_mask(shapes, window.shape_yx, part.transform, invert=True)

    def members(self, source: DatasetReader, window: Window) -> NDArray[np.int16]:
        """Stratum of each pixel (int16, (h, w)), -1 outside the population."""
        codes, out = self.codes(source, window)
        strata = self.stratum_of[codes]
        return np.asarray(strata if out is None else np.where(out, np.int16(-1), strata))

    def open(self) -> DatasetReader:
        """The map, opened for one thread. Raises DataError."""
        return open_map(self.path)


@dataclass(frozen=True, slots=True, eq=False)
class Lowest:
    """The lowest keys of one stratum, ascending. units: int64, row * width + col of the unit raster; keys: float64."""

    units: NDArray[np.int64]
    keys: NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Scan:
    """One pass over a population. pixels, area_m2 by stratum, without what is excluded; excluded_pixels and
    excluded_area_m2 beside it. units: units that could be drawn. lowest: by stratum."""

    pixels: tuple[int, ...]
    area_m2: tuple[float, ...]
    units: tuple[int, ...]
    excluded_pixels: int
    excluded_area_m2: float
    lowest: tuple[Lowest, ...]


def open_map(path: Path) -> DatasetReader:
    """A map opened for reading. Raises DataError when it is none."""
    try:
        source = rasterio.open(path)
    except RasterioError as error:
        raise DataError(f"the map cannot be read: {error}", where=str(path),
                        fix="run 'landassay classify' first, or name another map") from error  # fmt: skip
    if source.crs is None:
        raise DataError("the map has no CRS", where=str(path))
    if source.dtypes[0] != "uint8":
        raise DataError(f"a map holds class codes as uint8, but this file holds {source.dtypes[0]}", where=str(path))
    return source


def scan(
    population: Population, seed: int, keep: int, *, jobs: int = 1, rows_px: int = _ROWS_PX, progress: Progress = SILENT
) -> Scan:
    """Stream the map once; keep the `keep` lowest keys of each stratum. Raises DataError."""
    collected = _Collected(population, seed, keep)
    windows = list(_windows(population.grid, rows_px, population.segment_px))
    local = threading.local()
    opened: list[DatasetReader] = []

    def work(numbered: tuple[int, Window]) -> None:
        if not hasattr(local, "source"):
            local.source = population.open()
            opened.append(local.source)
        collected.take(numbered[0], numbered[1], local.source)
        task.advance()

    try:
        # GDAL would fill a share of the machine's memory with blocks that are never read again.
        cache = rasterio.Env(GDAL_CACHEMAX=_CACHE_BYTES)
        with cache, progress.task("reading the map", len(windows)) as task, ThreadPoolExecutor(jobs) as pool:
            for _ in pool.map(work, enumerate(windows)):
                pass
    finally:
        for source in opened:
            source.close()
    return collected.result()


class _Collected:
    """What all threads have found so far."""

    def __init__(self, population: Population, seed: int, keep: int) -> None:
        self.population, self.keep, self.start = population, keep, stream(seed, _KEYS)
        k = len(population.names)
        self.step = cell_px(population.grid)
        self.limit = np.full(k, np.inf if keep else -1.0)
        self.lowest = [Lowest(np.zeros(0, np.int64), np.zeros(0)) for _ in range(k)]
        # Sums by window, added up in the order of windows: floating-point sums depend on their order.
        self.counts: dict[int, tuple[NDArray[np.int64], NDArray[np.float64], int, int, float]] = {}
        self.lock = threading.Lock()

    def take(self, number: int, window: Window, source: DatasetReader) -> None:
        """Count one window and keep its lowest keys."""
        population = self.population
        codes, out = population.codes(source, window)
        area = cell_areas(population.grid, window, self.step)
        excluded, lost_m2 = 0, 0.0
        if out is not None:
            lost = out & (population.stratum_of[codes] >= 0)
            excluded = int(lost.sum())
            lost_m2 = float(np.sum(spread(area, window, self.step)[lost]))
            codes = np.where(out, np.uint8(_outside(population.stratum_of)), codes)
        k = len(population.names)
        pixels, areas = np.zeros(k, np.int64), np.zeros(k)
        whole = population.segment_px > 1
        for first in range(0, window.height, _SLICE_PX):
            part = codes[first : first + _SLICE_PX]
            row = window.row + first
            cells = area[row // self.step - window.row // self.step :]
            limit = np.full(k, -1.0) if whole else self.limit.copy()
            units, keys, strata = np.empty(part.size, np.int64), np.empty(part.size), np.empty(part.size, np.int16)
            n = offer(part, row, window.col, population.grid.width, population.stratum_of, cells, self.step, self.start,
                      limit, pixels, areas, units, keys, strata)  # fmt: skip
            if n:
                self._keep(units[:n].copy(), keys[:n].copy(), strata[:n].copy())
        segments = self._segments(codes, area, window) if whole else 0
        with self.lock:
            self.counts[number] = (pixels, areas, segments, excluded, lost_m2)

    def _segments(self, codes: NDArray[np.uint8], area: NDArray[np.float64], window: Window) -> int:
        """Keep the lowest keys of segments that hold a pixel of the population; returns how many there are."""
        units, areas = segments_of(self.population, codes, spread(area, window, self.step), window)
        # A segment on no ground (beyond a pole) comes last.
        keys = -np.log1p(-lots(self.start, units)) / np.maximum(areas, 1e-9)
        self._keep(units, keys, np.zeros(len(units), np.int16))
        return len(units)

    def _keep(self, units: NDArray[np.int64], keys: NDArray[np.float64], strata: NDArray[np.int16]) -> None:
        with self.lock:
            for s in np.unique(strata):
                here = strata == s
                old = self.lowest[s]
                all_units = np.concatenate([old.units, units[here]])
                all_keys = np.concatenate([old.keys, keys[here]])
                order = np.lexsort((all_units, all_keys))[: self.keep]
                self.lowest[s] = Lowest(all_units[order], all_keys[order])
                if len(order) == self.keep and self.keep:
                    self.limit[s] = self.lowest[s].keys[-1]

    def result(self) -> Scan:
        """Sums in the order of windows."""
        each = [self.counts[number] for number in sorted(self.counts)]
        pixels = np.sum([c[0] for c in each], axis=0)
        areas = np.sum([c[1] for c in each], axis=0)
        segments = sum(c[2] for c in each)
        units = tuple(int(n) for n in pixels) if self.population.segment_px == 1 else (segments,)
        return Scan(
            tuple(int(n) for n in pixels), tuple(float(a) for a in areas), units, sum(c[3] for c in each),
            float(sum(c[4] for c in each)), tuple(self.lowest),
        )  # fmt: skip


def segments_of(
    population: Population, codes: NDArray[np.uint8], area: NDArray[np.float64], window: Window
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Numbers (int64, (n,)) of the segments in a window that hold any pixel of the population, and the mean area of
    these pixels (float64, (n,)). area: of each pixel of the window (float64, (h, w)). The window's first row and column
    must start segments."""
    k = population.segment_px
    member = population.stratum_of[codes] >= 0
    count, total = _by_segment(member, k), _by_segment(np.where(member, area, 0.0), k)
    r, c = np.nonzero(count)
    units = (r + window.row // k) * segments_across(population) + c + window.col // k
    return np.asarray(units, dtype=np.int64), np.asarray(total[r, c] / count[r, c])


def _by_segment(values: NDArray[np.generic], k: int) -> NDArray[np.float64]:
    """Sums over squares of k x k pixels, the last ones cut off by the edge (float64)."""
    height, width = values.shape
    across = np.add.reduceat(values, np.arange(0, width, k), axis=1, dtype=np.float64)
    return np.asarray(np.add.reduceat(across, np.arange(0, height, k), axis=0))


def segments_across(population: Population) -> int:
    """Segments in one row of segments."""
    return -(-population.grid.width // population.segment_px)


def cell_px(grid: Grid) -> int:
    """Side, in pixels, of the cells in which the ground area of a pixel is taken as one."""
    return int(np.clip(_CELL_M / max(*pixel_size_m(grid), 1e-9), 1, _CELL_PX))


def cell_areas(grid: Grid, window: Window, step: int) -> NDArray[np.float64]:
    """Mean ground area in m2 of a pixel in each cell that `window` touches (float64); cells start at the grid."""
    t = grid.transform
    cells = Grid(grid.crs, t @ t.scale(step, step), -(-grid.height // step), -(-grid.width // step))
    row, col = window.row // step, window.col // step
    last_row, last_col = (window.row + window.height - 1) // step, (window.col + window.width - 1) // step
    return ground_areas_m2(cells, Window(row, col, last_row - row + 1, last_col - col + 1)) / step**2


def spread(area: NDArray[np.float64], window: Window, step: int) -> NDArray[np.float64]:
    """Areas of cells as areas of the window's pixels (float64, (h, w))."""
    rows = np.arange(window.row, window.row + window.height) // step - window.row // step
    cols = np.arange(window.col, window.col + window.width) // step - window.col // step
    return np.asarray(area[np.ix_(rows, cols)])


def _windows(grid: Grid, rows_px: int, segment_px: int) -> Iterator[Window]:
    rows, cols = (max(1, size // segment_px) * segment_px for size in (rows_px, _COLS_PX))
    for row in range(0, grid.height, rows):
        for col in range(0, grid.width, cols):
            yield Window(row, col, min(rows, grid.height - row), min(cols, grid.width - col))


def _outside(stratum_of: Sequence[int] | NDArray[np.int16]) -> int:
    """A code that stands for no stratum: 0 is no data."""
    return int(np.flatnonzero(np.asarray(stratum_of) < 0)[0])
