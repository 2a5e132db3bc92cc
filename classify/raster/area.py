"""Ground area of pixels on the ellipsoid of their CRS, whatever the projection.

Corners are taken to longitude and authalic latitude, where areas are true: A = a^2 * dlon * (q2 - q1) / 2 with
q(lat) = (1 - e^2) [ sin / (1 - e^2 sin^2) - ln((1 - e sin) / (1 + e sin)) / (2 e) ]  (Snyder 1987, "Map projections: a
working manual", USGS Professional Paper 1395, eq. 3-12). No property of the projection itself is used, so that a
Web Mercator map, which treats ellipsoidal latitudes as spherical, gets the same hectares as one in degrees.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
import pyproj
from affine import Affine
from numpy.typing import NDArray
from rasterio.crs import CRS

from classify.errors import DataError
from classify.raster.grid import Grid, Window

# Within this distance on the ground the areal scale of any projection is linear to about one part in a million.
_LATTICE_M = 2000.0
_LATTICE_MAX_PX = 64


def ground_areas_m2(grid: Grid, window: Window) -> NDArray[np.float64]:
    """Ground area of each pixel of `window` in square metres (float64, (h, w)).

    Exact by row for an upright grid in degrees; otherwise by the areal scale, interpolated in a lattice that is
    anchored to the grid, so that a pixel has one area whatever the window. 0 where the CRS covers no ground (beyond a
    pole). Raises DataError for a CRS that is not tied to the earth.
    """
    earth = _earth(grid.crs)
    upright = grid.transform.b == 0 and grid.transform.d == 0
    if earth.geographic and upright:
        return _by_row(grid, window, earth)
    return _by_lattice(grid, window, earth)


def pixel_size_m(grid: Grid) -> tuple[float, float]:
    """Ground distance in metres between centres of neighbouring rows and of neighbouring columns, mid-grid (geodesic).

    Raises DataError for a CRS that is not tied to the earth.
    """
    earth = _earth(grid.crs)
    row, col = grid.height // 2, grid.width // 2
    x, y = grid.xy(np.array([row, row + 1, row]), np.array([col, col, col + 1]))
    lon, lat = earth.degrees(x, y)
    _, _, metres = earth.geod.inv([lon[0]] * 2, [lat[0]] * 2, lon[1:], lat[1:])
    return float(metres[0]), float(metres[1])


class _Earth:
    """A CRS's way to longitude and latitude in radians, and its ellipsoid."""

    def __init__(self, crs: CRS) -> None:
        projected = pyproj.CRS.from_user_input(crs.to_wkt())
        geodetic = projected.geodetic_crs
        if geodetic is None or geodetic.ellipsoid is None:
            raise DataError(
                "the CRS is a local one without an ellipsoid, so that ground areas are not known",
                where=crs.to_string()[:80], fix="give the scene a geographic or projected CRS",
            )  # fmt: skip
        self.geographic = projected.is_geographic
        self.a_m = geodetic.ellipsoid.semi_major_metre
        flattening = 1 / geodetic.ellipsoid.inverse_flattening if geodetic.ellipsoid.inverse_flattening else 0.0
        self.e = float(np.sqrt(flattening * (2 - flattening)))
        geodetic_2d = geodetic.to_2d()
        self.radians = geodetic_2d.axis_info[0].unit_conversion_factor
        self.geod = pyproj.Geod(a=self.a_m, f=flattening)
        self._to_geodetic = pyproj.Transformer.from_crs(projected.to_2d(), geodetic_2d, always_xy=True)

    def degrees(
        self, x: NDArray[np.float64], y: NDArray[np.float64]
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """CRS coordinates to longitude and latitude in degrees."""
        lon, lat = (x, y) if self.geographic else self._to_geodetic.transform(x, y)
        return np.degrees(np.asarray(lon) * self.radians), np.degrees(np.asarray(lat) * self.radians)

    def equal_area_xy_m(self, x: NDArray[np.float64], y: NDArray[np.float64]) -> tuple[NDArray[np.float64], ...]:
        """CRS coordinates to (a * lon, a * q / 2) in metres, where areas are true."""
        lon, lat = (x, y) if self.geographic else self._to_geodetic.transform(x, y)
        lon, lat = np.asarray(lon) * self.radians, np.clip(np.asarray(lat) * self.radians, -np.pi / 2, np.pi / 2)
        return self.a_m * lon, self.a_m * _q(lat, self.e) / 2


@lru_cache(maxsize=64)
def _earth(crs: CRS) -> _Earth:
    return _Earth(crs)


def _q(lat: NDArray[np.float64], e: float) -> NDArray[np.float64]:
    sin = np.sin(lat)
    if e == 0:
        return np.asarray(2 * sin)
    with np.errstate(invalid="ignore"):
        return np.asarray((1 - e**2) * (sin / (1 - (e * sin) ** 2) + np.arctanh(e * sin) / e))


def _by_row(grid: Grid, window: Window, earth: _Earth) -> NDArray[np.float64]:
    t = grid.transform
    edges = t.f + t.e * np.arange(window.row, window.row + window.height + 1, dtype=np.float64)
    _, y = earth.equal_area_xy_m(np.zeros_like(edges), edges)
    areas = np.abs(np.diff(y)) * earth.a_m * abs(t.a) * earth.radians
    return np.repeat(areas[:, None], window.width, axis=1)


def _by_lattice(grid: Grid, window: Window, earth: _Earth) -> NDArray[np.float64]:
    step = _step_px(grid, earth)
    row = np.arange(window.row, window.row + window.height) + 0.5
    col = np.arange(window.col, window.col + window.width) + 0.5
    r0, c0 = np.floor(row / step).astype(np.int64), np.floor(col / step).astype(np.int64)
    nodes = _pixel_areas(
        grid.transform, np.arange(r0[0], r0[-1] + 2) * step, np.arange(c0[0], c0[-1] + 2) * step, step, earth
    )
    fr, fc = (row / step - r0)[:, None], (col / step - c0)[None, :]
    i, j = r0 - r0[0], c0 - c0[0]
    across = nodes[:, j] * (1 - fc) + nodes[:, j + 1] * fc
    areas = across[i] * (1 - fr) + across[i + 1] * fr
    return np.where(np.isfinite(areas), areas, 0.0)


def _pixel_areas(
    transform: Affine, rows: NDArray[np.int64], cols: NDArray[np.int64], side_px: int, earth: _Earth
) -> NDArray[np.float64]:
    """Mean area of a pixel in the square of `side_px` around each node (row, col): float64 (rows, cols)."""
    half = side_px / 2
    corner_y, corner_x = [], []
    for dr, dc in ((-half, -half), (-half, half), (half, half), (half, -half)):
        c, r = np.meshgrid(cols + dc, rows + dr)
        x, y = transform.a * c + transform.b * r + transform.c, transform.d * c + transform.e * r + transform.f
        ex, ey = earth.equal_area_xy_m(x, y)
        corner_x.append(np.where(np.isfinite(ex), ex, np.nan))
        corner_y.append(np.where(np.isfinite(ey), ey, np.nan))
    turn = 2 * np.pi * earth.a_m
    # A square over the antimeridian has corners a whole turn apart; bring them beside the first one.
    corner_x = [x - turn * np.round((x - corner_x[0]) / turn) for x in corner_x]
    (x0, x1, x2, x3), (y0, y1, y2, y3) = corner_x, corner_y
    return np.asarray(np.abs((x2 - x0) * (y3 - y1) - (x3 - x1) * (y2 - y0)) / 2 / side_px**2)


@lru_cache(maxsize=64)
def _step_px(grid: Grid, earth: _Earth) -> int:
    middle = np.array([grid.height // 2]), np.array([grid.width // 2])
    area_m2 = float(_pixel_areas(grid.transform, *middle, 1, earth)[0, 0])
    if not np.isfinite(area_m2) or area_m2 <= 0:
        return 1
    return int(np.clip(_LATTICE_M / np.sqrt(area_m2), 1, _LATTICE_MAX_PX))
