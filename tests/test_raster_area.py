"""Ground areas of pixels against pyproj's Geod, which integrates geodesic polygons on the ellipsoid (Karney 2013)."""

from __future__ import annotations

import numpy as np
import pyproj
import pytest
from affine import Affine
from hypothesis import given, settings
from hypothesis import strategies as st
from rasterio.crs import CRS

from classify.errors import DataError
from classify.raster.area import ground_areas_m2
from classify.raster.grid import Grid, Window


def geod_area_m2(grid: Grid, row: int, col: int, points_per_side: int = 40) -> float:
    """Area of one pixel: its outline, densified so that straight lines in the CRS stay straight, summed by Geod."""
    steps = np.linspace(0, 1, points_per_side, endpoint=False)
    zero, one = np.zeros_like(steps), np.ones_like(steps)
    dc = np.concatenate([steps, one, 1 - steps, zero])
    dr = np.concatenate([zero, steps, one, 1 - steps])
    t = grid.transform
    x, y = t.a * (col + dc) + t.b * (row + dr) + t.c, t.d * (col + dc) + t.e * (row + dr) + t.f
    crs = pyproj.CRS.from_wkt(grid.crs.to_wkt())
    lon, lat = pyproj.Transformer.from_crs(crs, crs.geodetic_crs, always_xy=True).transform(x, y)
    degrees = np.degrees(crs.geodetic_crs.axis_info[0].unit_conversion_factor)
    lon, lat = np.asarray(lon) * degrees, np.asarray(lat) * degrees
    return abs(crs.get_geod().polygon_area_perimeter(lon, lat)[0])


GRIDS = {
    "UTM, 10 m": Grid(CRS.from_epsg(32734), Affine(10, 0, 641200, 0, -10, 6471800), 600, 700),
    "UTM, edge of the zone, 30 m": Grid(CRS.from_epsg(32633), Affine(30, 0, 200_000, 0, -30, 5_400_000), 3000, 3000),
    "Web Mercator, 20 m": Grid(CRS.from_epsg(3857), Affine(20, 0, 2_500_000, 0, -20, -3_700_000), 2000, 1500),
    "Web Mercator, far north": Grid(CRS.from_epsg(3857), Affine(100, 0, 1_500_000, 0, -100, 11_000_000), 800, 900),
    "degrees": Grid(CRS.from_epsg(4326), Affine(0.0001, 0, 22.5, 0, -0.0001, -31.8), 500, 400),
    "degrees, 1 km, other ellipsoid": Grid(CRS.from_epsg(4267), Affine(0.01, 0, -110, 0, -0.01, 65), 400, 300),
    "feet, state plane": Grid(CRS.from_epsg(2263), Affine(3, 0, 950_000, 0, -3, 200_000), 500, 500),
    "rotated drone grid": Grid(
        CRS.from_epsg(32734), Affine.translation(641200, 6471800) @ Affine.rotation(33) @ Affine.scale(0.1, -0.1),
        300, 300,
    ),
    "over the antimeridian": Grid(CRS.from_epsg(32760), Affine(30, 0, 817_000, 0, -30, 8_122_000), 300, 200),
    "equal area": Grid(CRS.from_epsg(3035), Affine(100, 0, 4_000_000, 0, -100, 3_000_000), 500, 500),
    "grads from Paris": Grid(CRS.from_epsg(4807), Affine(0.001, 0, 1.0, 0, -0.001, 52.0), 200, 200),
}  # fmt: skip


@pytest.mark.parametrize("name", GRIDS)
def test_pixel_areas_equal_geodesic_polygons(name):
    grid = GRIDS[name]
    areas = ground_areas_m2(grid, grid.window)
    assert areas.shape == grid.shape_yx
    assert areas.dtype == np.float64
    rng = np.random.default_rng(1)
    # A polygon of 10 cm sides is near the resolution of Geod's own sum; blocks are compared there instead.
    side = 1 if abs(grid.transform.determinant) ** 0.5 > 1 or grid.crs.is_geographic else 200
    places = [(0, 0), (grid.height - side, grid.width - side)]
    places += [(int(rng.integers(grid.height - side)), int(rng.integers(grid.width - side))) for _ in range(8)]
    for row, col in places:
        block = Grid(grid.crs, grid.transform @ Affine.translation(col, row) @ Affine.scale(side), 1, 1)
        mine = areas[row : row + side, col : col + side].sum()
        assert mine == pytest.approx(geod_area_m2(block, 0, 0), rel=2e-6)


def test_the_same_land_has_the_same_area_in_every_projection():
    # One field of about 4 km2 near 31.9 S 22.5 E, cut out of three grids along a parallel and a meridian.
    field = (22.50, -31.91, 22.52, -31.89)
    found = []
    for epsg, pixel in ((4326, 2e-5), (3857, 2.0), (32734, 2.0)):
        crs = CRS.from_epsg(epsg)
        to = pyproj.Transformer.from_crs(4326, epsg, always_xy=True)
        x, y = to.transform([field[0], field[2], field[0], field[2]], [field[1], field[1], field[3], field[3]])
        grid = Grid(
            crs,
            Affine(pixel, 0, min(x), 0, -pixel, max(y)),
            int((max(y) - min(y)) / pixel),
            int((max(x) - min(x)) / pixel),
        )
        rows, cols = np.indices(grid.shape_yx).reshape(2, -1)
        lon, lat = to.transform(*grid.xy(rows, cols), direction="INVERSE")
        inside = (lon > field[0]) & (lon < field[2]) & (lat > field[1]) & (lat < field[3])
        found.append(ground_areas_m2(grid, grid.window).ravel()[inside].sum())
    # 2 m pixels along an outline of 8 km: half a row or column in doubt, 8000 m2 in 4 km2.
    assert found == pytest.approx([found[0]] * 3, rel=2.4e-3)


def test_the_whole_earth_in_degrees_is_the_surface_of_the_ellipsoid():
    # WGS 84 surface: 510 065 621.724 km2, a common geodetic constant (from memory).
    grid = Grid(CRS.from_epsg(4326), Affine(1, 0, -180, 0, -1, 90), 180, 360)
    assert ground_areas_m2(grid, grid.window).sum() == pytest.approx(5.10065621724e14, rel=1e-11)


@settings(max_examples=60, deadline=None)
@given(data=st.data(), name=st.sampled_from(sorted(GRIDS)))
def test_a_pixel_has_one_area_whatever_the_window(data, name):
    grid = GRIDS[name]
    row = data.draw(st.integers(0, grid.height - 1), "row")
    col = data.draw(st.integers(0, grid.width - 1), "col")
    height = data.draw(st.integers(1, min(150, grid.height - row)), "height")
    width = data.draw(st.integers(1, min(150, grid.width - col)), "width")
    whole = ground_areas_m2(grid, Window(row, col, height, width))
    r, c = height // 2, width // 3
    assert ground_areas_m2(grid, Window(row + r, col + c, 1, 1))[0, 0] == whole[r, c]


def test_beyond_the_edge_of_the_earth_there_is_no_ground():
    grid = Grid(CRS.from_string("ESRI:54008"), Affine(50_000, 0, -20_000_000, 0, -50_000, 10_000_000), 400, 800)
    areas = ground_areas_m2(grid, grid.window)
    assert areas[0, 0] == 0
    assert areas[200, 400] == pytest.approx(2.5e9, rel=0.01)
    assert np.isfinite(areas).all()


def test_a_local_crs_is_refused():
    local = CRS.from_wkt('LOCAL_CS["mine",UNIT["metre",1],AXIS["x",EAST],AXIS["y",NORTH]]')
    with pytest.raises(DataError, match="local"):
        ground_areas_m2(Grid(local, Affine(1, 0, 0, 0, -1, 0), 5, 5), Window(0, 0, 1, 1))


def test_a_point_that_is_nowhere_is_outside_the_grid():
    grid = Grid(CRS.from_epsg(32633), Affine(10, 0, 500_000, 0, -10, 4_200_000), 5, 5)
    x, y = np.array([500_015, np.inf, np.nan, 500_015]), np.array([4_199_985, 4_199_985, 0, -np.inf])
    rows, cols = grid.rowcol(x, y)
    assert rows.tolist() == [1, -1, -1, -1]
    assert cols.tolist() == [1, -1, -1, -1]
    assert grid.contains(rows, cols).tolist() == [True, False, False, False]
