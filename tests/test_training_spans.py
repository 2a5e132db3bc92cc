"""The pixel-centre rule, against GDAL's rasteriser and against shapely's point-in-polygon."""

from __future__ import annotations

import numpy as np
import rasterio.features
import shapely
from affine import Affine
from hypothesis import given, settings
from hypothesis import strategies as st
from rasterio.crs import CRS

from classify.raster.grid import Grid
from classify.training.spans import pixels_inside

GRID = Grid(CRS.from_epsg(32633), Affine(10, 0, 500_000, 0, -10, 4_600_000), 60, 50)


def _blob(rng: np.random.Generator, hole: bool) -> shapely.Geometry:
    """A star-shaped polygon, perhaps with a hole, that may reach beyond the grid."""
    angle = np.sort(rng.uniform(0, 2 * np.pi, 9))
    radius = rng.uniform(20, 220, 9)
    x, y = 500_000 + rng.uniform(-50, 550), 4_600_000 - rng.uniform(-50, 650)
    shell = shapely.Polygon(np.column_stack([x + radius * np.cos(angle), y + radius * np.sin(angle)]))
    shape = shapely.make_valid(shell)
    return shape.difference(shapely.Point(x, y).buffer(35)) if hole else shape


def _claimed(geometry: list[shapely.Geometry], grid: Grid) -> list[set[tuple[int, int]]]:
    index, row, col = pixels_inside(np.array(geometry, dtype=object), grid)
    return [set(zip(row[index == i].tolist(), col[index == i].tolist(), strict=True)) for i in range(len(geometry))]


@given(seed=st.integers(0, 2**32 - 1), hole=st.booleans())
@settings(max_examples=60, deadline=None)
def test_same_pixels_as_gdal_and_as_points_in_polygon(seed: int, hole: bool) -> None:
    rng = np.random.default_rng(seed)
    shapes = [_blob(rng, hole) for _ in range(4)]
    rows, cols = np.divmod(np.arange(GRID.height * GRID.width), GRID.width)
    x, y = GRID.xy(rows, cols)
    for shape, found in zip(shapes, _claimed(shapes, GRID), strict=True):
        burnt = (
            rasterio.features.rasterize([shape], GRID.shape_yx, transform=GRID.transform)
            if shape.area
            else np.zeros(GRID.shape_yx)
        )
        inside = shapely.contains_xy(shape, x, y).reshape(GRID.shape_yx)
        assert found == set(zip(*(part.tolist() for part in np.nonzero(burnt)), strict=True))
        assert found == set(zip(*(part.tolist() for part in np.nonzero(inside)), strict=True))


@given(seed=st.integers(0, 2**32 - 1))
@settings(max_examples=40, deadline=None)
def test_neighbours_share_no_pixel_and_leave_no_gap(seed: int) -> None:
    """Cells that tile the grid claim every pixel once, also where their edges run exactly through pixel centres."""
    rng = np.random.default_rng(seed)
    cut = GRID.bounds[0] + 10 * rng.integers(5, 45) + 5, GRID.bounds[1] + 10 * rng.integers(5, 55) + 5
    left, bottom, right, top = GRID.bounds
    cells = [
        shapely.box(left, bottom, cut[0], cut[1]), shapely.box(cut[0], bottom, right, cut[1]),
        shapely.Polygon([(left, cut[1]), (cut[0], cut[1]), (right, top), (left, top)]),
        shapely.Polygon([(cut[0], cut[1]), (right, cut[1]), (right, top)]),
    ]  # fmt: skip
    _, row, col = pixels_inside(np.array(cells, dtype=object), GRID)
    times = np.zeros(GRID.shape_yx, dtype=int)
    np.add.at(times, (row, col), 1)
    assert (times == 1).all()


def test_turned_grid_and_parts_of_one_feature() -> None:
    turned = Grid(
        GRID.crs, Affine.translation(500_000, 4_600_000) @ Affine.rotation(30) @ Affine.scale(10, -10), 40, 40
    )
    middle = turned.transform @ (20.0, 20.0)
    parts = shapely.MultiPolygon(
        [shapely.Point(middle).buffer(60), shapely.Point(middle[0] + 120, middle[1]).buffer(40)]
    )
    rows, cols = np.divmod(np.arange(1600), 40)
    expected = shapely.contains_xy(parts, *turned.xy(rows, cols))
    assert _claimed([parts], turned)[0] == set(zip(rows[expected].tolist(), cols[expected].tolist(), strict=True))
    assert expected.sum() > 100
