"""Polygons of a map against the raster library's own on the whole image, and against the pixels they came from."""

from __future__ import annotations

import geopandas as gpd
import numpy as np
import pytest
from affine import Affine
from hypothesis import given, settings
from hypothesis import strategies as st
from rasterio.crs import CRS
from rasterio.features import rasterize, shapes
from scipy import ndimage
from shapely.geometry import shape

from classify.mapping import vector
from classify.mapping.byte_raster import ByteRaster
from classify.mapping.vector import write_polygons
from classify.raster.area import ground_areas_m2
from classify.raster.grid import Grid
from classify.settings import ClassSettings

CLASSES = [ClassSettings(code=c, name=f"Class {c}") for c in range(1, 6)]
TRANSFORM = Affine(10, 0, 500_000, 0, -10, 5_000_000)


def polygons_of(folder, codes, *, strip_pixels, transform=TRANSFORM):
    grid = Grid(CRS.from_epsg(32633), transform, *codes.shape)
    raster = ByteRaster(folder / "codes.bytes", grid)
    raster.create()
    raster.write(grid.window, codes)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(vector, "_STRIP_PIXELS", strip_pixels)
        patch.setattr(vector, "_WRITE_EVERY", 100)
        write_polygons(raster, folder / "cover.gpkg", CLASSES, "ha")
    return gpd.read_file(folder / "cover.gpkg"), grid


def maps(seed, shape_yx, smooth, holes):
    random = np.random.default_rng(seed)
    fields = ndimage.gaussian_filter(random.normal(0, 1, (4, *shape_yx)), (0, smooth, smooth))
    codes = (fields.argmax(axis=0) + 1).astype(np.uint8)
    codes[random.random(shape_yx) < holes] = 0
    return codes


@settings(max_examples=40, deadline=None)
@given(
    st.integers(0, 2**32 - 1), st.tuples(st.integers(1, 30), st.integers(1, 30)), st.sampled_from([0, 0.8, 3]),
    st.sampled_from([0, 0.1, 0.6]), st.integers(1, 200),
)  # fmt: skip
def test_polygons_are_those_of_the_whole_image(tmp_path_factory, seed, shape_yx, smooth, holes, strip_pixels):  # noqa: PLR0917
    codes = maps(seed, shape_yx, smooth, holes)
    found, _ = polygons_of(tmp_path_factory.mktemp("vector"), codes, strip_pixels=strip_pixels)
    expected = sorted(
        (int(value), shape(geometry).normalize().wkt)
        for geometry, value in shapes(codes, mask=codes > 0, connectivity=4, transform=TRANSFORM)
    )
    assert sorted((row.code, row.geometry.normalize().wkt) for row in found.itertuples()) == expected


def test_polygons_painted_again_are_the_map_and_carry_its_areas(tmp_path):
    codes = maps(3, (150, 200), 2, 0.001)
    found, grid = polygons_of(tmp_path, codes, strip_pixels=3000, transform=Affine(9, 2, 400_000, 2, -9, 4_000_000))
    painted = rasterize(
        zip(found.geometry, found["code"], strict=True), codes.shape, transform=grid.transform, dtype=np.uint8
    )
    np.testing.assert_array_equal(painted, codes)
    areas_m2 = ground_areas_m2(grid, grid.window)
    for code, group in found.groupby("code"):
        assert group["pixels"].sum() == (codes == code).sum()
        assert group["area_ha"].sum() * 10_000 == pytest.approx(areas_m2[codes == code].sum(), rel=1e-9)
        assert set(group["name"]) == {f"Class {code}"}
    assert found.crs.to_epsg() == 32633
    assert found.geometry.is_valid.all()


def test_bytes_are_the_same_again_whatever_the_strips(tmp_path):
    codes = maps(5, (60, 50), 1, 0.01)
    contents = []
    for number, strip_pixels in enumerate((3000, 3000, 400)):
        folder = tmp_path / str(number)
        folder.mkdir()
        found, _ = polygons_of(folder, codes, strip_pixels=strip_pixels)
        contents.append(((folder / "cover.gpkg").read_bytes(), set(found.geometry.normalize().to_wkt())))
    assert contents[0][0] == contents[1][0]
    assert contents[0][1] == contents[2][1]


def test_a_map_without_any_class_has_no_polygon(tmp_path):
    found, _ = polygons_of(tmp_path, np.zeros((5, 5), dtype=np.uint8), strip_pixels=10)
    assert len(found) == 0
