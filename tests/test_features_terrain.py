"""Terrain against analytic surfaces, and the ground size of pixels against pyproj."""

from __future__ import annotations

import math

import numpy as np
import pytest
from affine import Affine
from hypothesis import given, settings
from hypothesis import strategies as st
from pyproj import Geod, Transformer
from rasterio.crs import CRS
from scipy import ndimage

from classify.features.facts import ground_vectors_m
from classify.features.terrain import TerrainStep
from classify.raster.grid import Grid

NORTH_UP = (10.0, 0.0, 0.0, -10.0)


def compute(statistic: str, layer: np.ndarray, pixel_m=NORTH_UP, **options) -> np.ndarray:
    return TerrainStep("t", "elevation", statistic, pixel_m, **options).apply(layer.astype(np.float32)[None])[0]


def plane(east: float, north: float, pixel_m=NORTH_UP, shape=(9, 11)) -> np.ndarray:
    """Elevations that rise by `east` and `north` metres per metre."""
    rows, cols = np.indices(shape)
    easting = pixel_m[0] * cols + pixel_m[2] * rows
    northing = pixel_m[1] * cols + pixel_m[3] * rows
    return 500.0 + east * easting + north * northing


slopes = st.floats(-1.5, 1.5)


@given(
    slopes, slopes, st.sampled_from([NORTH_UP, (30.0, 0.0, 0.0, -20.0), (6.0, 8.0, 8.0, -6.0), (0.0, 5.0, 5.0, 0.0)])
)
@settings(max_examples=50, deadline=None)
def test_a_plane_has_one_slope_and_aspect_to_its_very_edge(east, north, pixel_m):
    layer = plane(east, north, pixel_m)
    steepness = math.hypot(east, north)
    np.testing.assert_allclose(compute("slope", layer, pixel_m), math.degrees(math.atan(steepness)), atol=2e-3)
    if steepness > 0.01:
        # A hillside faces where it falls.
        np.testing.assert_allclose(compute("aspect sine", layer, pixel_m), -east / steepness, atol=2e-3)
        np.testing.assert_allclose(compute("aspect cosine", layer, pixel_m), -north / steepness, atol=2e-3)


def test_a_hill_that_falls_to_the_south_east_faces_there():
    layer = plane(-0.3, 0.3)
    assert compute("aspect sine", layer)[4, 4] == pytest.approx(math.sin(math.radians(135)), abs=1e-4)
    assert compute("aspect cosine", layer)[4, 4] == pytest.approx(math.cos(math.radians(135)), abs=1e-4)


def test_level_ground_faces_nowhere_and_lies_in_the_sun():
    level = np.full((5, 5), 812.0)
    for statistic, value in (("slope", 0), ("aspect sine", 0), ("aspect cosine", 0), ("topographic position", 0)):
        assert (compute(statistic, level) == value).all()
    np.testing.assert_allclose(compute("hillshade", level, sun_elevation=30), math.sin(math.radians(30)), rtol=1e-6)


@given(slopes, slopes, st.floats(0, 360), st.floats(5, 90))
@settings(max_examples=50, deadline=None)
def test_hillshade_is_the_cosine_between_sun_and_normal(east, north, azimuth, elevation):
    normal = np.array([-east, -north, 1.0]) / math.sqrt(east**2 + north**2 + 1)
    a, e = math.radians(azimuth), math.radians(elevation)
    sun = np.array([math.sin(a) * math.cos(e), math.cos(a) * math.cos(e), math.sin(e)])
    shade = compute("hillshade", plane(east, north), sun_azimuth=azimuth, sun_elevation=elevation)
    np.testing.assert_allclose(shade, max(0.0, float(normal @ sun)), atol=1e-4)


def test_the_gradient_is_horns():
    # Horn 1981: the differences of a 3 x 3 window are those of Sobel's masks over eight times the pixel size.
    layer = np.random.default_rng(5).uniform(0, 40, (12, 14))
    east = ndimage.sobel(layer, axis=1) / 80
    north = -ndimage.sobel(layer, axis=0) / 80
    expected = np.degrees(np.arctan(np.hypot(east, north)))
    np.testing.assert_allclose(compute("slope", layer)[1:-1, 1:-1], expected[1:-1, 1:-1], rtol=1e-5)


@pytest.mark.parametrize("size", [3, 7])
def test_topographic_position_is_the_height_above_the_others(size):
    layer = np.random.default_rng(6).uniform(2000, 2100, (15, 15)).astype(np.float32)
    others = np.ones((size, size))
    others[size // 2, size // 2] = 0
    mean = ndimage.convolve(layer.astype(np.float64), others / others.sum())
    inner = np.s_[size // 2 : -(size // 2), size // 2 : -(size // 2)]
    found = compute("topographic position", layer, size=size)
    np.testing.assert_allclose(found[inner], (layer - mean)[inner], atol=1e-4)
    peak = np.zeros((size, size))
    peak[size // 2, size // 2] = 5.0
    assert compute("topographic position", peak, size=size)[size // 2, size // 2] == 5.0


def test_a_hole_stays_a_hole_and_harms_no_neighbour():
    layer = plane(0.2, -0.1)
    layer[4, 5] = np.nan
    slope = compute("slope", layer)
    assert np.isnan(slope[4, 5])
    assert np.isnan(slope).sum() == 1
    np.testing.assert_allclose(
        np.delete(slope.ravel(), 4 * 11 + 5), math.degrees(math.atan(math.hypot(0.2, 0.1))), atol=2e-3
    )


@pytest.mark.parametrize(
    ("crs", "transform"),
    [
        ("EPSG:32633", Affine(10, 0, 500_000, 0, -10, 4_200_000)),
        ("EPSG:3857", Affine(10, 0, 1_600_000, 0, -10, 8_400_000)),  # degrees 60 north: twice as large as the ground
        ("EPSG:4326", Affine(0.0001, 0, 14.0, 0, -0.0001, 38.0)),
        ("EPSG:2263", Affine(30, 0, 980_000, 0, -30, 200_000)),  # feet
        ("EPSG:32633", Affine(8, 6, 500_000, 6, -8, 4_200_000)),  # turned
    ],
)
def test_pixel_vectors_are_those_of_the_ellipsoid(crs, transform):
    grid = Grid(CRS.from_string(crs), transform, 40, 60)
    vectors = ground_vectors_m(grid)
    geod = Geod(ellps="GRS80" if crs == "EPSG:2263" else "WGS84")
    middle = transform @ (30.5, 20.5)
    for (cols, rows), (east, north) in (((1, 0), vectors[:2]), ((0, 1), vectors[2:])):
        start = lonlat(crs, middle)
        end = lonlat(crs, transform @ (30.5 + cols, 20.5 + rows))
        azimuth, _, distance = geod.inv(*start, *end)
        expected = distance * math.sin(math.radians(azimuth)), distance * math.cos(math.radians(azimuth))
        np.testing.assert_allclose((east, north), expected, atol=1e-3 * distance)


def lonlat(crs: str, xy: tuple[float, float]) -> tuple[float, float]:
    return Transformer.from_crs(crs, "EPSG:4326", always_xy=True).transform(*xy)


def test_pixels_of_web_maps_and_of_degrees_are_as_large_as_their_latitude_makes_them():
    # Spherical arithmetic by hand, good to the flattening of the ellipsoid (0.7 %).
    mercator = ground_vectors_m(
        Grid(CRS.from_epsg(3857), Affine(10, 0, 0, 0, -10, 8_399_738), 2, 2)
    )  # 60 degrees north
    np.testing.assert_allclose(mercator, (5.0, 0.0, 0.0, -5.0), rtol=0.01, atol=0.01)
    degrees = ground_vectors_m(Grid(CRS.from_epsg(4326), Affine(0.001, 0, 10, 0, -0.001, 60), 2, 2))
    np.testing.assert_allclose(degrees, (111.3 / 2, 0.0, 0.0, -111.3), rtol=0.01, atol=0.01)
