"""A real six-band scene through train and classify, judged by physics on places that played no part in training.

Scene: subset of a public-domain Landsat 7 image of a tropical coast (see tests/data/README.md). The training rectangles
were placed by eye on the natural and false-colour picture. There are no reference labels; what is checked are facts of
the trade (common practice, no source): open water is darker in the near infrared than in the visible, dense vegetation
the reverse.
"""

from __future__ import annotations

import shutil
from pathlib import Path

import geopandas as gpd
import numpy as np
import pytest
import rasterio
from click.testing import CliRunner
from shapely.geometry import box

from classify.cli.main import cli

DATA = Path(__file__).parent / "data"

# class -> rectangles (first column, first row, last column, last row) in pixels
PLACES = {
    "water": [(317, 283, 333, 300), (233, 327, 250, 345), (300, 215, 315, 230), (335, 150, 345, 165)],
    "dense vegetation": [
        (287, 7, 303, 18), (25, 20, 45, 45), (112, 12, 124, 28), (202, 195, 218, 203), (192, 271, 204, 278)
    ],
    "scrub": [(127, 83, 157, 110), (67, 110, 87, 127), (167, 110, 187, 133)],
    "built-up": [(268, 95, 290, 113), (70, 310, 90, 325), (202, 151, 220, 163), (152, 235, 172, 250)],
}  # fmt: skip

PROJECT = """
[project]
title = "A tropical coast"
seed = 5

[scene.bands]
blue = { file = "coast.tif", band = 1, scale = 0.004 }
green = { file = "coast.tif", band = 2, scale = 0.004 }
red = { file = "coast.tif", band = 3, scale = 0.004 }
nir = { file = "coast.tif", band = 4, scale = 0.004 }
swir_1 = { file = "coast.tif", band = 5, scale = 0.004 }
swir_2 = { file = "coast.tif", band = 6, scale = 0.004 }

[[class]]
code = 1
name = "water"
[[class]]
code = 2
name = "dense vegetation"
[[class]]
code = 3
name = "built-up"
[[class]]
code = 4
name = "scrub"

[training]
polygons = "training.geojson"
label = "cover"

[features]
indices = ["ndvi"]

[model]
kind = "KIND"
trees = 100
repeats = 1
importance = false
"""


@pytest.fixture(scope="module", params=["random forest", "support vector machine"])
def mapped(request, tmp_path_factory):
    """(codes (h, w), digital numbers (6, h, w), trained (h, w) bool) after train and classify by the command."""
    folder = tmp_path_factory.mktemp("coast")
    shutil.copy(DATA / "landsat7_olinda.tif", folder / "coast.tif")
    with rasterio.open(folder / "coast.tif") as scene:
        bands, transform, crs = scene.read().astype(float), scene.transform, scene.crs
    rows, shapes, trained = [], [], np.zeros(bands.shape[1:], dtype=bool)
    for name, rectangles in PLACES.items():
        for left, top, right, bottom in rectangles:
            x0, y0 = transform @ (left, top)
            x1, y1 = transform @ (right, bottom)
            rows.append(name)
            shapes.append(box(x0, y1, x1, y0))
            trained[top:bottom, left:right] = True
    polygons = gpd.GeoDataFrame({"cover": rows}, geometry=shapes, crs=crs)
    polygons.to_crs(4326).to_file(folder / "training.geojson", driver="GeoJSON")
    (folder / "project.toml").write_text(PROJECT.replace("KIND", request.param), encoding="utf-8")
    for command in ("train", "classify"):
        result = CliRunner().invoke(cli, [command, "--project", str(folder), "--quiet"], catch_exceptions=False)
        assert result.exit_code == 0
    with rasterio.open(folder / "outputs" / "map" / "cover.tif") as cover:
        return cover.read(1), bands, trained


def test_mapped_water_is_darker_in_the_near_infrared_than_in_the_visible(mapped):
    codes, bands, trained = mapped
    water = (codes == 1) & ~trained
    assert water.sum() > 10_000
    assert (bands[3][water] < bands[1][water]).mean() > 0.97


def test_mapped_dense_vegetation_is_brighter_in_the_near_infrared_than_in_the_red(mapped):
    codes, bands, trained = mapped
    vegetation = (codes == 2) & ~trained
    assert vegetation.sum() > 5_000
    assert (bands[3][vegetation] > bands[2][vegetation]).mean() > 0.97


def test_what_physics_calls_water_or_vegetation_without_doubt_is_mapped_so(mapped):
    codes, bands, trained = mapped
    _, green, red, nir, swir_1, _ = bands
    surely_water = (nir < 0.4 * green) & (swir_1 < 0.4 * green) & ~trained
    surely_green = (nir > 2.75 * red) & ~trained
    assert surely_water.sum() > 10_000
    assert surely_green.sum() > 300
    assert (codes[surely_water] == 1).mean() > 0.97
    assert np.isin(codes[surely_green], (2, 4)).mean() > 0.95


def test_open_sea_in_the_east_is_one_class(mapped):
    codes, _, _ = mapped
    assert (codes[240:340, 290:345] == 1).mean() > 0.99
