"""The population of a sample: every pixel of a map with a class, streamed once whatever the size of the map.

One pass counts pixels and ground area by stratum and cell, and keeps the pixels that are drawn first (see `lots`; the
time of a draw is the pixel's key). A cell's draws depend on the seed and the cell alone, and those that come too late
are not looked at: the same seed gives the same points whatever the block size or the number of jobs.
"""

from __future__ import annotations

import threading
from collections.abc import Iterator, Sequence
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

from classify.assessment.cells import cell_areas, cell_shape_yx, count_by_cell, locate
from classify.assessment.lots import Arrivals, arrivals, lots, stream, streams
from classify.errors import DataError
from classify.progress import SILENT, Progress
from classify.raster.grid import Grid, Window
from classify.raster.sources import open_raster
from classify.threads import stoppable_pool

# Rows at a time, which hold whole tiles of a map; and pixels at a time, of all threads together.
_ROWS_PX, _PX = 1024, 24 << 20
_KEYS = 1
# For what lies on no ground (beyond a pole): it comes last.
_NO_GROUND_M2 = 1e-9
_CACHE_BYTES = 16 << 20


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
        source = open_raster(str(path))
    except DataError as error:
        raise DataError(f"the map cannot be read: {error.problems[0].what}", where=str(path),
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
    windows = list(_windows(population, rows_px, jobs))
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
        with cache, progress.task("reading the map", len(windows)) as task, stoppable_pool(jobs) as pool:
            # A new thread would cost more than a small map.
            for _ in (map if jobs == 1 else pool.map)(work, enumerate(windows)):
                pass
    finally:
        for source in opened:
            source.close()
    return collected.result()


class _Collected:
    """What all threads have found so far."""

    def __init__(self, population: Population, seed: int, keep: int) -> None:
        self.population, self.keep, self.start = population, keep, stream(seed, _KEYS)
        self.cell_yx = _cell_yx(population)
        self.lowest = [Lowest(np.zeros(0, np.int64), np.zeros(0)) for _ in population.names]
        # Sums by window, added up in the order of windows: floating-point sums depend on their order.
        self.counts: dict[int, tuple[NDArray[np.int64], NDArray[np.float64], int, int, float]] = {}
        self.lock = threading.Lock()

    def take(self, number: int, window: Window, source: DatasetReader) -> None:
        """Count one window and keep its lowest keys."""
        population = self.population
        codes, out = population.codes(source, window)
        area = np.maximum(cell_areas(population.grid, window, self.cell_yx), _NO_GROUND_M2)
        whole = counts = self._counted(codes)
        if out is not None:
            codes = np.where(out, np.uint8(_outside(population.stratum_of)), codes)
            counts = self._counted(codes)
        if self.keep and population.segment_px == 1:
            self._take_pixels(codes, counts, area, window)
        elif self.keep:
            self._take_segments(counts[..., 0], area, window)
        lost = (whole - counts).sum(axis=2)
        with self.lock:
            self.counts[number] = (
                counts.sum(axis=(0, 1)), np.einsum("rcs,rc->s", counts, area), int(np.count_nonzero(counts[..., 0])),
                int(lost.sum()), float((lost * area).sum()),
            )  # fmt: skip

    def _counted(self, codes: NDArray[np.uint8]) -> NDArray[np.int64]:
        return count_by_cell(codes, self.cell_yx, self.population.stratum_of, len(self.population.names))

    def _take_pixels(
        self, codes: NDArray[np.uint8], counts: NDArray[np.int64], area: NDArray[np.float64], window: Window
    ) -> None:
        """Keep the lowest keys of pixels. counts: int64 (rows, cols, strata) and area: float64 (rows, cols) by cell."""
        population, (rows, cols) = self.population, self.cell_yx
        down, across, stratum = np.nonzero(counts)
        cell = (window.row // rows + down) * -(-population.grid.width // cols) + window.col // cols + across
        # By a code, not by the place of the stratum, which changes with the list of classes.
        code = np.array([int(np.argmax(population.stratum_of == s)) for s in range(len(population.names))])
        starts = streams(self.start, cell * 256 + code[stratum])
        found = self._first(stratum, starts, counts[down, across, stratum], area[down, across])
        of, cell_yx = stratum[found.group], np.stack([down, across], axis=1)[found.group]
        row, col = locate(codes, self.cell_yx, population.stratum_of, cell_yx, of, found.rank).T
        units = (window.row + row) * population.grid.width + window.col + col
        for s in np.unique(of):
            self._keep(int(s), units[of == s], found.time[of == s])

    def _first(
        self, stratum: NDArray[np.int64], starts: NDArray[np.uint64], count: NDArray[np.int64],
        area: NDArray[np.float64],
    ) -> Arrivals:  # fmt: skip
        """The draws of groups of pixels that may be among the lowest of their stratum, and not many more."""
        k = len(self.lowest)
        until = np.array([low.keys[-1] if len(low.keys) == self.keep else np.inf for low in self.lowest])
        total = np.bincount(stratum, count, k)
        wanted = np.where(np.isinf(until), np.minimum(self.keep, total), 0)
        # So long that as many as are kept are to be expected, and four standard errors more.
        share = (self.keep + 4 * np.sqrt(self.keep) + 8) / np.maximum(total, 1)
        mean = np.bincount(stratum, count * area, k) / np.maximum(total, 1)
        guessed = np.isinf(until) & (share < 1)
        until[guessed] = -np.log1p(-share[guessed]) / mean[guessed]
        while True:
            found = arrivals(starts, count, area, until[stratum])
            short = np.bincount(stratum[found.group], minlength=k) < wanted
            if not short.any():
                return found
            until[short] *= 2

    def _take_segments(self, counts: NDArray[np.int64], area: NDArray[np.float64], window: Window) -> None:
        """Keep the lowest keys of segments that hold a pixel of the population; here they are the cells."""
        k = self.population.segment_px
        row, col = np.nonzero(counts)
        units = (window.row // k + row) * segments_across(self.population) + window.col // k + col
        self._keep(0, units, -np.log1p(-lots(self.start, units)) / area[row, col])

    def _keep(self, s: int, units: NDArray[np.int64], keys: NDArray[np.float64]) -> None:
        with self.lock:
            old = self.lowest[s]
            units, keys = np.concatenate([old.units, units]), np.concatenate([old.keys, keys])
            order = np.lexsort((units, keys))[: self.keep]
            self.lowest[s] = Lowest(units[order], keys[order])

    def result(self) -> Scan:
        """Sums in the order of windows."""
        each = [self.counts[number] for number in sorted(self.counts)]
        pixels = tuple(int(n) for n in np.sum([c[0] for c in each], axis=0))
        areas = tuple(float(a) for a in np.sum([c[1] for c in each], axis=0))
        units = pixels if self.population.segment_px == 1 else (sum(c[2] for c in each),)
        return Scan(pixels, areas, units, sum(c[3] for c in each), float(sum(c[4] for c in each)), tuple(self.lowest))


def _cell_yx(population: Population) -> tuple[int, int]:
    """Rows and columns of pixels that are counted together: a segment where segments are drawn."""
    k = population.segment_px
    return (k, k) if k > 1 else cell_shape_yx(population.grid)


def segments_across(population: Population) -> int:
    """Segments in one row of segments."""
    return -(-population.grid.width // population.segment_px)


def _windows(population: Population, rows_px: int, jobs: int) -> Iterator[Window]:
    """Windows of whole cells."""
    grid, cell_yx = population.grid, _cell_yx(population)
    most_yx = rows_px, _PX // rows_px // jobs
    rows, cols = (max(1, most // side) * side for most, side in zip(most_yx, cell_yx, strict=True))
    for row in range(0, grid.height, rows):
        for col in range(0, grid.width, cols):
            yield Window(row, col, min(rows, grid.height - row), min(cols, grid.width - col))


def _outside(stratum_of: Sequence[int] | NDArray[np.int16]) -> int:
    """A code that stands for no stratum: 0 is no data."""
    return int(np.flatnonzero(np.asarray(stratum_of) < 0)[0])
