"""The map as a picture: scale and north against pyproj, pixels and shares against the raster."""

from __future__ import annotations

import io
import re

import numpy as np
import pytest
import rasterio
from affine import Affine
from PIL import Image
from pyproj import Geod, Proj
from rasterio.crs import CRS
from report_projects import change_project

from classify.raster.grid import Grid
from classify.report.facts import ClassFact
from classify.report.figures import map_drawing
from classify.report.numbers import NumberStyle
from classify.report.picture import ground_frame, map_fact, nice_step, picture_shape

COLOURS = ("#44aa99", "#ddcc77", "#332288")


UTM = Affine(30, 0, 500_000, 0, -30, 4_200_000)


def write(path, values, crs="EPSG:32633", transform=UTM, nodata=0):
    path.parent.mkdir(parents=True, exist_ok=True)
    with rasterio.open(path, "w", driver="GTiff", height=values.shape[0], width=values.shape[1], count=1, dtype="uint8",
                       crs=crs, transform=transform, nodata=nodata) as target:  # fmt: skip
        target.write(values, 1)


@pytest.fixture
def classes():
    return [ClassFact(i, f"class {i}", colour) for i, colour in enumerate(COLOURS, start=1)]


@pytest.mark.parametrize(("east", "north"), [(500_000, 4_200_000), (700_000, 6_800_000), (320_000, 1_000_000)])
def test_north_and_pixel_size_are_those_of_the_projection(east, north):
    grid = Grid(CRS.from_epsg(32633), Affine(10, 0, east, 0, -10, north), 2, 2)
    (down_m, across_m), north_deg = ground_frame(grid)
    lon, lat = Proj("EPSG:32633")(east + 10, north - 10, inverse=True)
    factors = Proj("EPSG:32633").get_factors(lon, lat)
    # Meridian convergence: grid north lies that much clockwise of true north (pyproj's factors, an independent route).
    assert north_deg == pytest.approx(-factors.meridian_convergence, abs=1e-3)
    assert across_m == pytest.approx(10 / factors.parallel_scale, rel=1e-6)
    assert down_m == pytest.approx(10 / factors.meridional_scale, rel=1e-6)


def test_a_map_in_degrees_is_drawn_by_its_ground_size(tmp_path, classes):
    step = 0.01
    values = np.ones((60, 60), dtype=np.uint8)
    write(tmp_path / "cover.tif", values, "EPSG:4326", Affine(step, 0, 20, 0, -step, 60.3))
    fact = map_fact(tmp_path, classes, ())
    # One pixel at its centre, 60 degrees north: about half as wide as it is high.
    geod = Geod(ellps="WGS84")
    assert fact.pixel_m[1] == pytest.approx(geod.inv(20.3, 60.0, 20.31, 60.0)[2], rel=1e-3)
    drawn = re.search(r'<image [^>]*width="([\d.]+)" height="([\d.]+)"', map_drawing(
        fact, fact.layers[0], "map", NumberStyle()).markup())  # fmt: skip
    assert float(drawn[1]) / float(drawn[2]) == pytest.approx(fact.pixel_m[1] / fact.pixel_m[0], rel=1e-3)


def test_scale_bar_is_as_long_as_it_says(tmp_path):
    project = change_project(tmp_path)
    classes = [ClassFact(c.code, c.name, c.colour) for c in project.classes]
    fact = map_fact(tmp_path / "outputs" / "map", classes, ())
    svg = map_drawing(fact, fact.layers[0], "map", NumberStyle()).markup()
    width_px = float(re.search(r"<image [^>]*width=\"([\d.]+)\"", svg)[1])
    half_px = [float(v) for v in re.findall(r'<rect [^>]*width="([\d.]+)" height="5"', svg)]
    said_km = float(re.search(r">([\d.]+) km<", svg)[1])
    ground_km = fact.size_yx[1] * fact.pixel_m[1] / 1000
    assert sum(half_px) / width_px * ground_km == pytest.approx(said_km, rel=2e-3)


def test_picture_has_the_colours_of_the_classes_and_clear_no_data(tmp_path, classes):
    codes = np.random.default_rng(4).integers(0, 4, (37, 53)).astype(np.uint8)
    write(tmp_path / "cover.tif", codes)
    fact = map_fact(tmp_path, classes, ())
    picture = np.asarray(Image.open(io.BytesIO(fact.layers[0].data)).convert("RGBA"))
    assert (picture[codes == 0, 3] == 0).all()
    for code, colour in enumerate(COLOURS, start=1):
        assert (picture[codes == code] == [*bytes.fromhex(colour[1:]), 255]).all()


def test_shares_of_doubt_and_beyond_reach_count_all_pixels(tmp_path, classes):
    random = np.random.default_rng(6)
    confidence = random.integers(0, 101, (200, 150)).astype(np.uint8)
    reach = random.integers(1, 255, (200, 150)).astype(np.uint8)
    confidence[:40], reach[:40] = 255, 255
    write(tmp_path / "cover.tif", np.ones_like(confidence))
    write(tmp_path / "confidence.tif", confidence, nodata=255)
    write(tmp_path / "reach.tif", reach, nodata=255)
    fact = map_fact(tmp_path, classes, ())
    assert fact.low_share == pytest.approx((confidence[40:] < 50).mean())
    assert fact.beyond_share == pytest.approx((reach[40:] > 100).mean())


@pytest.mark.parametrize(("rough", "step"), [(0.9, 1), (1.0, 1), (1.1, 2), (37, 50), (0.0021, 0.005), (600, 1000)])
def test_steps_are_round(rough, step):
    assert nice_step(rough) == pytest.approx(step)


def test_large_maps_are_decimated_and_small_ones_kept():
    assert picture_shape(600, 700) == (600, 700)
    assert picture_shape(10_980, 5_490) == (1600, 800)
