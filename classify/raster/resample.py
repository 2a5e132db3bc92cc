"""From a raster's own grid to the map's grid, so that a pixel's value never depends on the window it is read in.

Every target pixel is placed in the source by a function of its row and column alone; the source pixels around that
place are then gathered. Three rules, chosen once for a whole raster by the ratio of pixel sizes:

* nearest: the source pixel that holds the target pixel's centre. For codes, masks, and rasters that lie on the grid.
* bilinear: for a source as coarse as the target or coarser. Invalid neighbours are left out and the weights of the
  others scaled to one; where the nearest neighbour is invalid, so is the result.
* mean: for a source at least one and a half times finer. The mean of the valid source pixels at evenly spread points
  of the target pixel, which is the exact mean when the ratio is whole and the grids are aligned.

Between two CRSs the place is interpolated in a lattice anchored to the target grid's origin, whose nodes are
transformed exactly (pyproj). The middle of every cell is too: where the lattice misses it by more than
`_LATTICE_ERROR_PX` source pixels, every pixel of the cell is transformed on its own.
"""

from __future__ import annotations

import math
import threading
import warnings
from collections.abc import Sequence
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
_LATTICE_STEPS_PX = (64, 32, 16, 8)
# A grid whose pixels lie this close to another's (in pixels) over its whole extent counts as the same grid.
ALIGNED_PX = 0.01


@dataclass(frozen=True)
class Placement:
    """Where the pixels of `target` lie in `source`."""

    source: Grid
    target: Grid

    @cached_property
    def same_crs(self) -> bool:
        """Whether both grids share a horizontal CRS, so that placing is affine."""
        return bool(self.source.crs == self.target.crs) or _horizontal(self.source.crs).equals(
            _horizontal(self.target.crs), ignore_axis_order=True
        )

    @cached_property
    def affine(self) -> Affine:
        """Target pixel coordinates to source pixel coordinates, when both share a CRS."""
        to_xy = self.target.transform
        if self._turn:
            (left, _, right, _), (west, _, east, _) = self.target.bounds, self.source.bounds
            turns = round(((west + east) / 2 - (left + right) / 2) / self._turn)
            to_xy = Affine.translation(turns * self._turn, 0) @ to_xy
        found: Affine = ~self.source.transform @ to_xy
        return found

    @cached_property
    def _turn(self) -> float:
        """Once round the earth in units of the source's longitude, 0 if it is projected: 190 E is also 170 W."""
        crs = _horizontal(self.source.crs)
        return 2 * math.pi / crs.axis_info[0].unit_conversion_factor if crs.is_geographic else 0.0

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
        """Source pixels per target pixel along rows and columns: the median over places spread over the target."""
        height, width = self.target.shape_yx
        row, col = np.meshgrid(np.linspace(0, height - 1, 9), np.linspace(0, width - 1, 9), indexing="ij")
        rows, cols = self._exact(row, col)
        ratios = []
        for down, right in ((1, 0), (0, 1)):
            next_rows, next_cols = self._exact(row + down, col + right)
            with np.errstate(invalid="ignore"):
                step = np.hypot(next_rows - rows, next_cols - cols)
            known = step[np.isfinite(step)]
            ratios.append(float(np.median(known)) if known.size else 1.0)
        return ratios[0], ratios[1]

    def places(self, window: Window, points_yx: tuple[int, int] = (1, 1)) -> Places:
        """Source (rows, cols) in pixels (float64) of evenly spread points of each target pixel; of one, its centre.

        Shapes broadcast to (h * points, w * points): (h, 1) and (1, w) when rows and columns are independent. Not
        finite where the target's CRS has no counterpart in the source's.
        """
        down, across = points_yx
        # Counted from the grid's origin, so that a point has one place whatever the window.
        row = (np.arange(window.row * down, (window.row + window.height) * down)[:, None] + 0.5) / down
        col = (np.arange(window.col * across, (window.col + window.width) * across)[None, :] + 0.5) / across
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
            if self._turn:
                west, _, east, _ = self.source.bounds
                with np.errstate(invalid="ignore"):
                    x = x + self._turn * np.round(((west + east) / 2 - x) / self._turn)
        with np.errstate(invalid="ignore"):
            i = ~self.source.transform
            return i.d * x + i.e * y + i.f, i.a * x + i.b * y + i.c

    @cached_property
    def _step_px(self) -> int:
        """The largest lattice step that holds in nearly all of the cells looked at, spread over the grid."""
        for step in _LATTICE_STEPS_PX:
            first = [np.unique(np.linspace(0, size // step, 9).astype(np.int64)) for size in self.target.shape_yx]
            row, col = np.meshgrid(*(cells.astype(np.float64) * step for cells in first), indexing="ij")
            corners = [self._exact(row + down, col + right) for down in (0, step) for right in (0, step)]
            if _off_px(corners, self._exact(row + step / 2, col + step / 2)).mean() < 0.1:
                return step
        return _LATTICE_STEPS_PX[-1]

    def _interpolated(self, row: NDArray[np.float64], col: NDArray[np.float64]) -> Places:
        """Places by the lattice; exact in cells whose middle the lattice misses, as where longitude jumps by a turn."""
        step = self._step_px
        r0, c0 = np.floor(row / step), np.floor(col / step)
        node_row, node_col = np.meshgrid(
            np.arange(r0.min(), r0.max() + 2) * step, np.arange(c0.min(), c0.max() + 2) * step, indexing="ij"
        )
        nodes = self._exact(node_row, node_col)
        i, j = (r0 - r0.min()).astype(np.intp), (c0 - c0.min()).astype(np.intp)
        fr, fc = row / step - r0, col / step - c0
        missed = self._missed(nodes, node_row, node_col, step)[i, j]
        with np.errstate(invalid="ignore"):
            rows, cols = (
                (n[i, j] * (1 - fc) + n[i, j + 1] * fc) * (1 - fr)
                + (n[i + 1, j] * (1 - fc) + n[i + 1, j + 1] * fc) * fr
                for n in nodes
            )
        if missed.any():
            rows[missed], cols[missed] = self._exact(*(np.broadcast_to(x, missed.shape)[missed] for x in (row, col)))
        return rows, cols

    def _missed(
        self, nodes: Places, node_row: NDArray[np.float64], node_col: NDArray[np.float64], step: int
    ) -> NDArray[np.bool_]:
        """Which cells between the nodes the lattice does not hold in."""
        above, below, left, right = slice(None, -1), slice(1, None), slice(None, -1), slice(1, None)
        corners = [(nodes[0][r, c], nodes[1][r, c]) for r in (above, below) for c in (left, right)]
        middle = self._exact(node_row[above, left] + step / 2, node_col[above, left] + step / 2)
        return _off_px(corners, middle)


def _off_px(corners: Sequence[Places], middle: Places) -> NDArray[np.bool_]:
    """Whether the mean of a cell's corners is further from its middle than allowed, or either is not known."""
    with np.errstate(invalid="ignore"):
        mean = [sum(corner[axis] for corner in corners) / 4 for axis in (0, 1)]
        return np.asarray(~(np.hypot(mean[0] - middle[0], mean[1] - middle[1]) <= _LATTICE_ERROR_PX))


@lru_cache(maxsize=256)
def _horizontal(crs: CRS) -> pyproj.CRS:
    """The CRS without heights, as elevation models often carry them."""
    return pyproj.CRS.from_user_input(crs.to_wkt()).to_2d()


_of_thread = threading.local()


def _transformer(from_crs: CRS, to_crs: CRS, bounds: tuple[float, float, float, float]) -> pyproj.Transformer:
    """The calling thread's own transformer: those of a `TransformerGroup` must not be shared between threads."""
    known: dict[object, pyproj.Transformer] = _of_thread.__dict__.setdefault("transformers", {})
    key = from_crs, to_crs, bounds
    if key not in known:
        known[key] = _best_transformer(from_crs, to_crs, bounds)
    return known[key]


def _best_transformer(from_crs: CRS, to_crs: CRS, bounds: tuple[float, float, float, float]) -> pyproj.Transformer:
    """One fixed operation for the whole scene, so that neighbouring pixels never take different datum shifts."""
    try:
        west, south, east, north = transform_bounds(from_crs, "OGC:CRS84", *bounds)
        area = AreaOfInterest(west, south, east, north) if west < east else None
    except Exception:  # bounds outside the CRS's domain only cost the choice of the best datum shift
        area = None
    source, target = _horizontal(from_crs), _horizontal(to_crs)
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


def mean_of_points(values: Array, inside: NDArray[np.bool_], points_yx: tuple[int, int]) -> Array:
    """Mean (n, h, w) of the valid ones among each pixel's points; NaN where none is.

    values (n, h * down, w * across) at the points, inside (h * down, w * across): which of them lie in the source.
    """
    down, across = points_yx
    valid = ~np.isnan(values)
    valid &= inside
    n, height, width = len(values), values.shape[1] // down, values.shape[2] // across
    by_pixel = (n, height, down, width, across)
    known, held = np.where(valid, values, 0).reshape(by_pixel), valid.reshape(by_pixel)
    # Added one by one in a fixed order: a library's sum may regroup by the shape of the window.
    total, count = np.zeros((n, height, width)), np.zeros((n, height, width), dtype=np.int64)
    for i in range(down):
        for j in range(across):
            total += known[:, :, i, :, j]
            count += held[:, :, i, :, j]
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(np.where(count > 0, total / count, np.nan), dtype=np.float32)


def any_of_points(flags: NDArray[np.bool_], points_yx: tuple[int, int]) -> NDArray[np.bool_]:
    """Whether any of each pixel's points is flagged: (h * down, w * across) to (h, w)."""
    down, across = points_yx
    height, width = flags.shape[0] // down, flags.shape[1] // across
    return np.asarray(flags.reshape(height, down, width, across).any(axis=(1, 3)))


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
