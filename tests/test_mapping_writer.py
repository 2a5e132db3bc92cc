"""Maps appear as valid Cloud-Optimised GeoTIFFs, whole or not at all."""

from __future__ import annotations

import xml.etree.ElementTree as ET

import numpy as np
import pytest
import rasterio
import rasterio.shutil
from affine import Affine
from rasterio.crs import CRS
from rasterio.errors import RasterioIOError
from rio_cogeo.cogeo import cog_validate

from classify.errors import OutputError
from classify.mapping.byte_raster import ByteRaster
from classify.mapping.finish import layer_of
from classify.mapping.writer import write_cog
from classify.raster.grid import Grid
from classify.settings import ClassSettings

GRID = Grid(CRS.from_epsg(32633), Affine(10, 0, 500_000, 0, -10, 5_000_000), 1300, 1100)
CLASSES = [
    ClassSettings(code=1, name="Irrigated pasture", colour="#009e73"),
    ClassSettings(code=7, name="Roofs & <paving>", colour="#cc79a7"),
]
COVER, CONFIDENCE = layer_of("cover", CLASSES), layer_of("confidence", CLASSES)


@pytest.fixture
def stored(tmp_path):
    """A function that stores values block by block."""

    def store(values, size_px=512):
        raster = ByteRaster(tmp_path / "blocks.bytes", GRID)
        raster.create()
        for window in GRID.blocks(size_px):
            raster.write(window, values[window.slices_yx])
        return raster

    return store


@pytest.fixture
def codes():
    return np.random.default_rng(1).choice(np.array([0, 1, 7], dtype=np.uint8), GRID.shape_yx)


def test_class_map_is_a_valid_cog_with_colours_names_and_overviews(tmp_path, stored, codes):
    target = tmp_path / "map" / "cover.tif"
    write_cog(stored(codes), target, COVER)
    valid, errors, warnings = cog_validate(target, strict=True)
    assert valid, (errors, warnings)
    with rasterio.open(target) as written:
        np.testing.assert_array_equal(written.read(1), codes)
        assert written.nodata == 0
        assert written.crs == GRID.crs
        assert written.transform == GRID.transform
        assert written.overviews(1)
        assert written.colormap(1)[7] == (0xCC, 0x79, 0xA7, 255)
        assert written.colormap(1)[0] == (0, 0, 0, 0)
        assert written.descriptions == ("cover class",)
        assert written.tags()["CLASS_7"] == "Roofs & <paving>"
    assert {path.name for path in target.parent.iterdir()} == {"cover.tif", "cover.tif.aux.xml"}
    assert {path.name for path in tmp_path.iterdir()} == {"map", "blocks.bytes"}


@pytest.mark.parametrize("transform", [Affine(2, 0.3, 10, 0.3, -2, 50), Affine(1 / 3, 0, -179.9, 0, -1 / 7, 89.1)])
def test_rotated_and_unround_grids_keep_their_place_exactly(tmp_path, transform):
    grid = Grid(CRS.from_epsg(4326), transform, 40, 30)
    raster = ByteRaster(tmp_path / "blocks.bytes", grid)
    raster.create()
    write_cog(raster, tmp_path / "confidence.tif", CONFIDENCE)
    with rasterio.open(tmp_path / "confidence.tif") as written:
        assert written.transform == transform


@pytest.mark.parametrize("size_px", [128, 300, 2048])
def test_bytes_do_not_depend_on_the_blocks(tmp_path, stored, codes, size_px):
    write_cog(stored(codes), tmp_path / "one.tif", COVER)
    raster = stored(codes, size_px)
    np.testing.assert_array_equal(raster.read(GRID.window), codes)
    write_cog(raster, tmp_path / "other.tif", COVER)
    assert (tmp_path / "one.tif").read_bytes() == (tmp_path / "other.tif").read_bytes()


def test_side_file_names_every_value_up_to_the_largest_code(tmp_path, stored, codes):
    write_cog(stored(codes), tmp_path / "cover.tif", COVER)
    root = ET.parse(tmp_path / "cover.tif.aux.xml").getroot()
    names = [element.text or "" for element in root.iter("Category")]
    assert names == ["no data", "Irrigated pasture", "", "", "", "", "", "Roofs & <paving>"]


def test_overviews_of_classes_hold_only_classes_that_exist(tmp_path, stored, codes):
    write_cog(stored(codes), tmp_path / "cover.tif", COVER)
    with rasterio.open(tmp_path / "cover.tif", overview_level=0) as overview:
        assert set(np.unique(overview.read(1))) <= {0, 1, 7}


def test_confidence_overview_averages_what_is_known(tmp_path, stored):
    percent = np.full(GRID.shape_yx, 255, dtype=np.uint8)
    percent[::2, :] = 60
    write_cog(stored(percent), tmp_path / "confidence.tif", CONFIDENCE)
    with rasterio.open(tmp_path / "confidence.tif", overview_level=0) as overview:
        assert set(np.unique(overview.read(1))) == {60}


@pytest.mark.parametrize(
    ("failure", "raised"), [(KeyboardInterrupt(), KeyboardInterrupt), (RasterioIOError("No space left"), OutputError)]
)
def test_a_failure_midway_keeps_the_earlier_map(tmp_path, stored, codes, monkeypatch, failure, raised):  # noqa: PLR0917
    target = tmp_path / "map" / "cover.tif"
    raster = stored(codes)
    write_cog(raster, target, COVER)
    before = target.read_bytes()

    def half(source, target, **options):
        target.write_bytes(b"II*\0")
        raise failure

    monkeypatch.setattr(rasterio.shutil, "copy", half)
    with pytest.raises(raised):
        write_cog(raster, target, COVER)
    assert target.read_bytes() == before
    assert {path.name for path in target.parent.iterdir()} == {"cover.tif", "cover.tif.aux.xml"}
