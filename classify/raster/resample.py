"""From a raster's own grid to the map's grid, so that a pixel's value never depends on the window it is read in.

Every target pixel is placed in the source by a function of its row and column alone; the source pixels around that
place are then gathered. Three rules, chosen once for a whole raster by the ratio of pixel sizes:

* nearest: the source pixel that holds the target pixel's centre. For codes, masks, and rasters that lie on the grid.
* bilinear: for a source as coarse as the target or coarser. Invalid neighbours are left out and the weights of the
  others scaled to one; where the nearest neighbour is invalid, so is the result.
* mean: for a source at least one and a half times finer. The mean of the valid source pixels at evenly spread points
  of the target pixel, which is the exact mean when the ratio is whole and the grids are aligned.

Between two CRSs the place is interpolated in a lattice anchored to the target grid's origin, whose step is chosen so
that the error stays below `_LATTICE_ERROR_PX`; lattice nodes are transformed exactly (pyproj).
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from functools import cached_property, lru_cache
from typing import Literal

import numpy as np
import pyproj
from affine import Affine
from numpy.typing import NDArray
from pyproj.aoi import AreaOfInterest
from pyproj.transformer import TransformerGroup
from rasterio.crs import CRS
from rasterio.warp import transform_bounds

from classify.raster.grid import Grid, Window

Rule = Literal["nearest", "bilinear", "mean"]
Array = NDArray[np.float32]
Places = tuple[NDArray[np.float64], NDArray[np.float64]]

_LATTICE_ERROR_PX = 0.01
_LATTICE_STEPS_PX = (64, 32, 16, 8, 4, 2, 1)
# A grid whose pixels lie this close to another's (in pixels) over its whole extent counts as the same grid.
ALIGNED_PX = 0.01


@dataclass(frozen=True)
class Placement:
    """Where the pixels of `target` lie in `source`."""

    source: Grid
    target: Grid

    @cached_property
    def same_crs(self) -> bool:
        """Whether both grids share a CRS, so that placing is affine."""
        return bool(self.source.crs == self.target.crs)

    @cached_property
    def affine(self) -> Affine:
        """Target pixel coordinates to source pixel coordinates, when both share a CRS."""
        found: Affine = ~self.source.transform @ self.target.transform
        return found

    @cached_property
    def shift_yx(self) -> tuple[int, int] | None:
        """Whole-pixel (rows, cols) to add to a target pixel to find it in the source; None if grids are not aligned."""
        if not self.same_crs:
            return None
        a = self.affine
        shift = round(a.f), round(a.c)
        corners = [(0, 0), (self.target.width, 0), (0, self.target.height), (self.target.width, self.target.height)]
        off = [max(abs(x - c - shift[1]), abs(y - r - shift[0])) for c, r in corners for x, y in [a @ (c, r)]]
        return shift if max(off) <= ALIGNED_PX else None

    @cached_property
    def ratio_yx(self) -> tuple[float, float]:
        """Source pixels per target pixel along target rows and columns, at the middle of their common part."""
        row, col = self.target.height / 2, self.target.width / 2
        rows, cols = self._exact(np.array([row, row + 1, row]), np.array([col, col, col + 1]))
        return float(np.hypot(rows[1] - rows[0], cols[1] - cols[0])), float(
            np.hypot(rows[2] - rows[0], cols[2] - cols[0])
        )

    def places(self, window: Window, at_yx: tuple[float, float] = (0.5, 0.5)) -> Places:
        """Source (rows, cols) in pixels (float64) of a point of each target pixel; `at_yx` 0.5, 0.5 is its centre.

        Shapes broadcast to (h, w): (h, 1) and (1, w) when rows and columns are independent. Not finite where the
        target's CRS has no counterpart in the source's.
        """
        row = np.arange(window.row, window.row + window.height, dtype=np.float64)[:, None] + at_yx[0]
        col = np.arange(window.col, window.col + window.width, dtype=np.float64)[None, :] + at_yx[1]
        if not self.same_crs:
            return self._interpolated(row, col)
        a = self.affine
        rows = a.e * row + a.f if a.d == 0 else a.d * col + a.e * row + a.f
        cols = a.a * col + a.c if a.b == 0 else a.a * col + a.b * row + a.c
        return rows, cols

    def _exact(self, row: NDArray[np.float64], col: NDArray[np.float64]) -> Places:
        t = self.target.transform
        x, y = t.a * col + t.b * row + t.c, t.d * col + t.e * row + t.f
        if not self.same_crs:
            x, y = _transformer(self.target.crs, self.source.crs, self.target.bounds).transform(x, y)
        with np.errstate(invalid="ignore"):
            i = ~self.source.transform
            return i.d * x + i.e * y + i.f, i.a * x + i.b * y + i.c

    @cached_property
    def _step_px(self) -> int:
        """The largest lattice step whose error at the middle of cells over the whole grid is small enough."""
        height, width = self.target.shape_yx
        for step in _LATTICE_STEPS_PX:
            row, col = (
                (np.unique(np.linspace(0, size // step, 9, dtype=np.int64)).astype(np.float64) + 0.5) * step
                for size in (height, width)
            )
            row, col = row[:, None], col[None, :]
            guess = self._between_nodes(row, col, step)
            exact = self._exact(*np.broadcast_arrays(row, col))
            with np.errstate(invalid="ignore"):
                off = np.hypot(guess[0] - exact[0], guess[1] - exact[1])
            if not np.any(off > _LATTICE_ERROR_PX):
                return step
        return 1

    def _interpolated(self, row: NDArray[np.float64], col: NDArray[np.float64]) -> Places:
        return self._between_nodes(row, col, self._step_px)

    def _between_nodes(self, row: NDArray[np.float64], col: NDArray[np.float64], step: int) -> Places:
        r0, c0 = np.floor(row / step), np.floor(col / step)
        first_row, first_col = r0.min(), c0.min()
        node_rows = np.arange(first_row, r0.max() + 2) * step
        node_cols = np.arange(first_col, c0.max() + 2) * step
        nodes = self._exact(*np.meshgrid(node_rows, node_cols, indexing="ij"))
        fr, fc = row / step - r0, col / step - c0
        i, j = (r0 - first_row).astype(np.intp), (c0 - first_col).astype(np.intp)
        with np.errstate(invalid="ignore"):
            found = []
            for node in nodes:
                top = node[i, j] * (1 - fc) + node[i, j + 1] * fc
                bottom = node[i + 1, j] * (1 - fc) + node[i + 1, j + 1] * fc
                found.append(top * (1 - fr) + bottom * fr)
        return found[0], found[1]


@lru_cache(maxsize=256)
def _transformer(from_crs: CRS, to_crs: CRS, bounds: tuple[float, float, float, float]) -> pyproj.Transformer:
    """One fixed operation for the whole scene, so that neighbouring pixels never take different datum shifts."""
    try:
        west, south, east, north = transform_bounds(from_crs, "OGC:CRS84", *bounds)
        area = AreaOfInterest(west, south, east, north) if west < east else None
    except Exception:  # bounds outside the CRS's domain only cost the choice of the best datum shift
        area = None
    source, target = (pyproj.CRS.from_user_input(crs.to_wkt()).to_2d() for crs in (from_crs, to_crs))
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # the best operation may need a shift grid that is not installed
        group = TransformerGroup(source, target, always_xy=True, area_of_interest=area)  # type: ignore[arg-type]
    return group.transformers[0] if group.transformers else pyproj.Transformer.from_crs(source, target, always_xy=True)


def source_window(source: Grid, places: Places, margin_px: int) -> Window | None:
    """The smallest window of `source` that holds all finite places, grown by a margin, cut to the source; or None."""
    bounds = []
    for values in places:
        finite = values[np.isfinite(values)]
        if not finite.size:
            return None
        # Far outside (up to 1e300 near the edge of a projection's domain) would overflow whole numbers.
        low, high = np.clip([finite.min(), finite.max()], -1e9, 1e9)
        bounds.append((int(np.floor(low)) - margin_px, int(np.floor(high)) + margin_px + 1))
    (row, end_row), (col, end_col) = bounds
    return Window(row, col, end_row - row, end_col - col).intersect(source.window)


def gather_nearest(
    values: NDArray[np.generic], part: Window, source: Grid, places: Places
) -> tuple[NDArray[np.generic], NDArray[np.bool_]]:
    """Source pixels that hold the places, and which places (bool (h, w)) lie in the source.

    values: (..., rows, cols) of the source's window `part`. Pixels outside hold an arbitrary value.
    """
    row, inside_row = _index(places[0], source.height)
    col, inside_col = _index(places[1], source.width)
    row, col = np.clip(row - part.row, 0, part.height - 1), np.clip(col - part.col, 0, part.width - 1)
    inside = inside_row & inside_col
    if _independent(row, col):
        return values.take(row[:, 0], axis=-2).take(col[0], axis=-1), inside
    return values[..., row, col], inside


def gather_bilinear(values: Array, part: Window, source: Grid, places: Places) -> Array:
    """Bilinear values (n, h, w) at the places, NaN outside the source and where the nearest pixel is NaN."""
    rows = _between(places[0], source.height, part.row, part.height)
    cols = _between(places[1], source.width, part.col, part.width)
    result = _blend(values, rows, cols)
    inside = _index(places[0], source.height)[1] & _index(places[1], source.width)[1]
    if not inside.all():
        result[:, ~inside] = np.nan
    # Usually few: pixels beside an invalid one, which must be told from those that are invalid themselves.
    hurt = np.isnan(result)
    hurt &= inside
    for layer in np.flatnonzero(hurt.any(axis=(1, 2))):
        chosen = hurt[layer]
        result[layer, chosen] = _blend_valid(values[layer], rows.at(chosen), cols.at(chosen))
    return result


@dataclass(frozen=True, slots=True)
class _Between:
    """Both neighbours of places along one axis, as indices into a window, and the weight of the second (float32)."""

    low: NDArray[np.intp]
    high: NDArray[np.intp]
    weight: Array

    def at(self, chosen: NDArray[np.bool_]) -> _Between:
        """The chosen pixels alone, flat."""
        low, high = (np.broadcast_to(array, chosen.shape)[chosen] for array in (self.low, self.high))
        return _Between(low, high, np.broadcast_to(self.weight, chosen.shape)[chosen])


def _index(place: NDArray[np.float64], size: int) -> tuple[NDArray[np.intp], NDArray[np.bool_]]:
    with np.errstate(invalid="ignore"):
        inside = (place >= 0) & (place < size)
    return np.where(inside, np.floor(np.where(inside, place, 0)), 0).astype(np.intp), inside


def _independent(rows: NDArray[np.intp], cols: NDArray[np.intp]) -> bool:
    """Whether the place of a row does not depend on the column, nor the other way round: shapes (h, 1) and (1, w)."""
    return bool(rows.shape[-1] == 1 and cols.shape[0] == 1)


def _between(place: NDArray[np.float64], size: int, first: int, length: int) -> _Between:
    centre = np.clip(np.where(np.isfinite(place), place, 0) - 0.5, 0, size - 1)
    low = np.floor(centre)
    low_px = low.astype(np.intp)
    high_px = np.minimum(low_px + 1, size - 1)
    return _Between(
        np.clip(low_px - first, 0, length - 1),
        np.clip(high_px - first, 0, length - 1),
        (centre - low).astype(np.float32),
    )


def _blend(values: Array, rows: _Between, cols: _Between) -> Array:
    if _independent(rows.low, cols.low):
        # Along columns first, on the few source rows, then along rows.
        across = _mix(values.take(cols.low[0], axis=-1), values.take(cols.high[0], axis=-1), cols.weight)
        top, bottom = across.take(rows.low[:, 0], axis=-2), across.take(rows.high[:, 0], axis=-2)
    else:
        top, bottom = (
            _mix(values[..., row, cols.low], values[..., row, cols.high], cols.weight) for row in (rows.low, rows.high)
        )
    return _mix(top, bottom, rows.weight)


def _mix(first: Array, second: Array, weight: Array) -> Array:
    """first + (second - first) * weight, in the memory of both."""
    second -= first
    second *= weight
    first += second
    return first


def _blend_valid(layer: Array, rows: _Between, cols: _Between) -> Array:
    """Bilinear over the valid neighbours only, NaN where the nearest is invalid; all arrays (n,)."""
    total, weights = np.zeros_like(rows.weight), np.zeros_like(rows.weight)
    one, half = np.float32(1), np.float32(0.5)
    for row, row_weight in ((rows.low, one - rows.weight), (rows.high, rows.weight)):
        for col, col_weight in ((cols.low, one - cols.weight), (cols.high, cols.weight)):
            value, weight = layer[row, col], row_weight * col_weight
            valid = ~np.isnan(value)
            total += np.where(valid, value * weight, 0)
            weights += np.where(valid, weight, 0)
    nearest = layer[
        np.where(rows.weight < half, rows.low, rows.high), np.where(cols.weight < half, cols.low, cols.high)
    ]
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(np.where(np.isnan(nearest), nearest, total / weights))
