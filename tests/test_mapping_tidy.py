"""The tidied map against a plain implementation on the whole image, and without a trace of its blocks."""

from __future__ import annotations

import numpy as np
import pytest
from affine import Affine
from hypothesis import given, settings
from hypothesis import strategies as st
from rasterio.crs import CRS
from scipy import ndimage
from skimage.measure import label

from classify.errors import SettingsError
from classify.mapping import tidy as tidy_module
from classify.mapping.byte_raster import ByteRaster
from classify.mapping.tidy import TidyOptions, tidy
from classify.raster.grid import Grid

PIXEL_M2 = 100.0


def grid_of(shape):
    # In an equal-area CRS every pixel covers the same ground.
    return Grid(CRS.from_epsg(6933), Affine(10, 0, 1_000_000, 0, -10, 2_000_000), *shape)


def tidied(folder, codes, options, *, block_px=16, jobs=1):
    raster = ByteRaster(folder / "codes.bytes", grid_of(codes.shape))
    raster.create()
    raster.write(raster.grid.window, codes)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(tidy_module, "_BLOCK_PX", block_px)
        result = tidy(raster, folder, options, jobs=jobs).read(raster.grid.window)
    np.testing.assert_array_equal(raster.read(raster.grid.window), codes)
    return result


def absorbed(codes, least_px, neighbours):
    """One pass on the whole image, patch by patch, in plain words."""
    labels = label(codes, background=0, connectivity=1 if neighbours == 4 else 2)
    size = {i: int((labels == i).sum()) for i in range(1, labels.max() + 1)}
    code = {i: int(codes[labels == i][0]) for i in size}
    result = codes.copy()
    for i, pixels_of_i in size.items():
        if pixels_of_i >= least_px:
            continue
        border = {}
        for row, col in np.argwhere(labels == i):
            for r, c in ((row - 1, col), (row + 1, col), (row, col - 1), (row, col + 1)):
                if 0 <= r < codes.shape[0] and 0 <= c < codes.shape[1] and labels[r, c] not in (0, i):
                    border[labels[r, c]] = border.get(labels[r, c], 0) + 1
        edges = [(length, size[j], code[j]) for j, length in border.items()]
        big = [(-length, c) for length, pixels, c in edges if pixels >= least_px]
        larger = [(-pixels, -length, c) for length, pixels, c in edges if (-pixels, c) < (-pixels_of_i, code[i])]
        if big or larger:
            result[labels == i] = min(big or larger)[-1]
    return result


def reference(codes, least_px, neighbours):
    while not np.array_equal(after := absorbed(codes, least_px, neighbours), codes):
        codes = after
    return codes


@st.composite
def maps(draw):
    """Maps between pure noise and large patches, some with holes of no data."""
    random = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    shape = draw(st.tuples(st.integers(1, 60), st.integers(1, 60)))
    classes = draw(st.integers(1, 5))
    smooth = draw(st.sampled_from([0, 0.7, 2]))
    fields = ndimage.gaussian_filter(random.normal(0, 1, (classes, *shape)), (0, smooth, smooth))
    codes = (fields.argmax(axis=0) * 40 + 1).astype(np.uint8)
    if draw(st.booleans(), label="holes"):
        codes[random.random(shape) < 0.1] = 0
    return codes


@settings(max_examples=60, deadline=None)
@given(maps(), st.sampled_from([2, 3, 6, 9]), st.sampled_from([4, 8]))
def test_no_patch_below_the_unit_as_in_the_plain_implementation(tmp_path_factory, codes, least_px, neighbours):
    options = TidyOptions(minimum_unit_m2=least_px * PIXEL_M2, neighbours=neighbours)
    result = tidied(tmp_path_factory.mktemp("tidy"), codes, options)
    np.testing.assert_array_equal(result, reference(codes, least_px, neighbours))


@settings(max_examples=30, deadline=None)
@given(maps(), st.sampled_from([3, 5, 7]))
def test_majority_is_the_most_frequent_class_around(tmp_path_factory, codes, side):
    result = tidied(tmp_path_factory.mktemp("tidy"), codes, TidyOptions(majority_px=side))
    counts = {
        c: ndimage.uniform_filter((codes == c).astype(float), side, mode="constant") for c in np.unique(codes) if c
    }
    for row, col in np.ndindex(codes.shape):
        if codes[row, col] == 0:
            assert result[row, col] == 0
            continue
        often = {c: round(count[row, col] * side**2) for c, count in counts.items()}
        best = max(often.values())
        tied = [c for c, count in often.items() if count == best]
        assert result[row, col] == (codes[row, col] if codes[row, col] in tied else min(tied))


@pytest.mark.parametrize("least_px", [5, 30])
def test_no_block_edge_shows_on_a_map_of_many_blocks(tmp_path, least_px):
    random = np.random.default_rng(2)
    fields = ndimage.gaussian_filter(random.normal(0, 1, (4, 400, 500)), (0, 1.2, 1.2))
    codes = (fields.argmax(axis=0) + 1).astype(np.uint8)
    codes[100:140, 200:260] = 0
    # Worms as thin and long as a small patch can be, across block edges.
    codes[200, 10 : 10 + least_px - 1] = codes[10 : 10 + least_px - 1, 300] = 9
    options = TidyOptions(minimum_unit_m2=least_px * PIXEL_M2, majority_px=3)
    whole = tidied(tmp_path, codes, options, block_px=1024)
    np.testing.assert_array_equal(tidied(tmp_path, codes, options, block_px=8, jobs=2), whole)
    for code in np.unique(whole[whole > 0]):
        sizes = np.bincount(label(whole == code, connectivity=2).ravel())[1:]
        assert sizes.min() >= least_px
    assert ((whole == 0) == (codes == 0)).all()
    assert 9 not in whole


def test_islands_in_no_data_stay(tmp_path):
    codes = np.zeros((20, 20), dtype=np.uint8)
    codes[5, 5], codes[10, 10:12] = 3, (4, 5)
    result = tidied(tmp_path, codes, TidyOptions(minimum_unit_m2=10 * PIXEL_M2))
    assert result[5, 5] == 3
    assert result[10, 10:12].tolist() == [4, 4]


def test_a_unit_too_large_for_the_pixels_is_refused(tmp_path):
    with pytest.raises(SettingsError, match="at most 1000 are possible"):
        tidied(tmp_path, np.ones((10, 10), dtype=np.uint8), TidyOptions(minimum_unit_m2=2e6))
