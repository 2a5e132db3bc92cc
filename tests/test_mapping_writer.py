"""Maps appear as valid Cloud-Optimised GeoTIFFs, whole or not at all."""

from __future__ import annotations

import xml.etree.ElementTree as ET

import numpy as np
import pytest
import rasterio
from affine import Affine
from rasterio.crs import CRS
from rio_cogeo.cogeo import cog_validate

from classify.mapping.classify_scene import CONFIDENCE_LAYER, cover_layer
from classify.mapping.writer import cog_writer
from classify.raster.grid import Grid
from classify.settings import ClassSettings

GRID = Grid(CRS.from_epsg(32633), Affine(10, 0, 500_000, 0, -10, 5_000_000), 1300, 1100)
CLASSES = [
    ClassSettings(code=1, name="Irrigated pasture", colour="#009e73"),
    ClassSettings(code=7, name="Roofs & <paving>", colour="#cc79a7"),
]


def write(target, values, layer):
    with cog_writer(target, GRID, layer) as writer:
        for window in GRID.blocks(512):
            writer.write(window, values[window.slices_yx])


@pytest.fixture
def codes():
    return np.random.default_rng(1).choice(np.array([0, 1, 7], dtype=np.uint8), GRID.shape_yx)


def test_class_map_is_a_valid_cog_with_colours_names_and_overviews(tmp_path, codes):
    target = tmp_path / "cover.tif"
    write(target, codes, cover_layer(CLASSES))
    valid, errors, warnings = cog_validate(target, strict=True)
    assert valid, (errors, warnings)
    with rasterio.open(target) as written:
        np.testing.assert_array_equal(written.read(1), codes)
        assert written.nodata == 0
        assert written.crs == GRID.crs
        assert written.transform == GRID.transform
        assert written.overviews(1)
        assert written.colormap(1)[7] == (0xCC, 0x79, 0xA7, 255)
        assert written.tags()["CLASS_7"] == "Roofs & <paving>"
    assert {path.name for path in tmp_path.iterdir()} == {"cover.tif", "cover.tif.aux.xml"}


def test_side_file_names_every_value_up_to_the_largest_code(tmp_path, codes):
    write(tmp_path / "cover.tif", codes, cover_layer(CLASSES))
    root = ET.parse(tmp_path / "cover.tif.aux.xml").getroot()
    names = [element.text or "" for element in root.iter("Category")]
    assert names == ["no data", "Irrigated pasture", "", "", "", "", "", "Roofs & <paving>"]


def test_overviews_of_classes_hold_only_classes_that_exist(tmp_path, codes):
    write(tmp_path / "cover.tif", codes, cover_layer(CLASSES))
    with rasterio.open(tmp_path / "cover.tif", overview_level=0) as overview:
        assert set(np.unique(overview.read(1))) <= {0, 1, 7}


def test_confidence_overview_averages_what_is_known(tmp_path):
    percent = np.full(GRID.shape_yx, 255, dtype=np.uint8)
    percent[::2, :] = 60
    write(tmp_path / "confidence.tif", percent, CONFIDENCE_LAYER)
    with rasterio.open(tmp_path / "confidence.tif", overview_level=0) as overview:
        assert set(np.unique(overview.read(1))) == {60}


def test_a_failure_midway_keeps_the_earlier_map(tmp_path, codes):
    target = tmp_path / "cover.tif"
    write(target, codes, cover_layer(CLASSES))
    before = target.read_bytes()
    with pytest.raises(KeyboardInterrupt), cog_writer(target, GRID, cover_layer(CLASSES)) as writer:
        writer.write(next(iter(GRID.blocks(512))), np.ones((512, 512), dtype=np.uint8))
        raise KeyboardInterrupt
    assert target.read_bytes() == before
    assert {path.name for path in tmp_path.iterdir()} == {"cover.tif", "cover.tif.aux.xml"}
