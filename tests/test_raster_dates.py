"""Several dates, composites, ancillary rasters and mask buffers."""

from __future__ import annotations

import pickle

import numpy as np
import pytest
from affine import Affine
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from rasterio.crs import CRS
from scipy import ndimage
from test_raster_scene import ORIGIN, project_of, read_all, refused, same_bytes, scene_of, write

from classify.errors import SettingsError
from classify.raster.area import pixel_size_m
from classify.raster.composite import CLEAR_COUNT, Composite
from classify.raster.grid import Grid, Window
from classify.raster.masks import Disc

SHAPE = (90, 110)


@pytest.fixture(scope="module")
def dates(tmp_path_factory):
    """Three dates of two bands with masks, elevation and a soil map. Everything is random but the seed."""
    folder = tmp_path_factory.mktemp("dates")
    rng = np.random.default_rng(11)
    for name in ("a", "b", "c"):
        for role in ("red", "nir"):
            write(folder / f"{role}_{name}.tif", rng.integers(0, 6000, SHAPE).astype(np.uint16), nodata=0)
        write(folder / f"mask_{name}.tif", (rng.random((45, 55)) < 0.3).astype(np.uint8), 20.0)
    write(folder / "dem.tif", rng.random((40, 40)).astype(np.float32) * 900, 35.0)
    write(folder / "soil.tif", rng.integers(1, 9, (24, 28), dtype=np.uint8), 40.0)
    return folder


def acquisition(name: str) -> dict:
    return {
        "bands": {role: f"{role}_{name}.tif" for role in ("red", "nir")},
        "mask": {"file": f"mask_{name}.tif", "reject": [1]},
    }


def several(folder, **scene):
    further = [{"name": name, **acquisition(name)} for name in ("b", "c")]
    main = acquisition("a")
    return scene_of(folder, main.pop("bands"), **main, scale=1e-4, dates=further, **scene)


def test_each_date_has_its_own_layers_scale_and_mask(dates):
    scene = several(dates, ancillary={"elevation": "dem.tif", "soil": {"file": "soil.tif", "categorical": True}})
    assert scene.roles == ("red", "nir", "elevation", "soil", "red@b", "nir@b", "red@c", "nir@c")
    got = read_all(scene)
    alone = {name: read_all(scene_of(dates, acquisition(name)["bands"], scale=1e-4, mask=acquisition(name)["mask"]))
             for name in ("a", "b", "c")}  # fmt: skip
    for role in ("red", "nir"):
        assert same_bytes(got[role], alone["a"][role])
        assert same_bytes(got[f"{role}@b"], alone["b"][role])
        assert same_bytes(got[f"{role}@c"], alone["c"][role])
    # No mask of any date touches an ancillary raster, and categories are never blended.
    assert np.isfinite(got["elevation"]).all()
    assert set(np.unique(got["soil"])) <= set(range(1, 9))
    assert not any("elevation" in str(w) and "median" in str(w) for w in scene.warnings)


@pytest.mark.parametrize("minimum", [1, 2, 3])
def test_median_and_count_equal_numpy_over_the_clear_dates(dates, minimum):
    scene = several(dates, date="a", composite={"method": "median", "minimum_clear": minimum})
    got = read_all(scene)
    assert scene.roles[:3] == ("red", "nir", CLEAR_COUNT)
    assert "red@a" in scene.roles
    clear = np.all([[np.isfinite(got[f"{role}@{d}"]) for d in "abc"] for role in ("red", "nir")], axis=0)
    count = clear.sum(axis=0)
    assert np.array_equal(got[CLEAR_COUNT], count.astype(np.float32))
    assert {0, 1, 2, 3} == set(np.unique(count))
    for role in ("red", "nir"):
        values = np.where(clear, np.stack([got[f"{role}@{d}"] for d in "abc"]).astype(np.float64), np.nan)
        masked = np.ma.median(np.ma.masked_invalid(values), axis=0)
        expected = np.where(count >= minimum, np.ma.filled(masked, np.nan), np.nan)
        assert np.allclose(got[role], expected, rtol=1e-6, equal_nan=True)


@pytest.mark.parametrize("method", ["highest", "lowest"])
def test_the_best_date_gives_all_its_bands(dates, method):
    scene = several(dates, date="a", composite={"method": method, "of": ["nir", "red"]})
    got = read_all(scene)
    for r, c in np.random.default_rng(0).integers(0, SHAPE, (300, 2)):
        clear = [d for d in "abc" if all(np.isfinite(got[f"{role}@{d}"][r, c]) for role in ("red", "nir"))]
        if not clear:
            assert np.isnan(got["red"][r, c])
            continue
        index = {d: (got[f"nir@{d}"][r, c] - got[f"red@{d}"][r, c]) / (got[f"nir@{d}"][r, c] + got[f"red@{d}"][r, c])
                 for d in clear}  # fmt: skip
        best = (max if method == "highest" else min)(clear, key=index.get)
        assert (got["red"][r, c], got["nir"][r, c]) == (got[f"red@{best}"][r, c], got[f"nir@{best}"][r, c])


@settings(max_examples=80, deadline=None)
@given(stack=hnp.arrays(np.float32, st.tuples(st.integers(1, 6), st.just(2), st.integers(1, 4), st.integers(1, 4)),
                        elements=st.one_of(st.just(np.nan), st.floats(-1, 2, width=32))))  # fmt: skip
def test_median_composite_equals_numpy_for_any_number_of_dates(stack):
    names = tuple(f"d{k}" for k in range(len(stack)))
    layers = {f"{role}@{name}": stack[k, j] for k, name in enumerate(names) for j, role in enumerate(("x", "y"))}
    got = Composite(("x", "y"), names, "median").compute(layers)
    clear = ~np.isnan(stack).any(axis=1)
    for (r, c), count in np.ndenumerate(clear.sum(axis=0)):
        assert got[CLEAR_COUNT][r, c] == count
        for j, role in enumerate(("x", "y")):
            if count:
                assert got[role][r, c] == pytest.approx(
                    np.median(stack[clear[:, r, c], j, r, c].astype(float)), abs=1e-6
                )
            else:
                assert np.isnan(got[role][r, c])


@settings(max_examples=40, deadline=None)
@given(window=st.builds(Window, st.integers(-20, 100), st.integers(-20, 120), st.integers(1, 70), st.integers(1, 70)),
       halo=st.integers(0, 5))  # fmt: skip
def test_any_window_of_a_composite_with_buffered_masks_is_a_slice_of_the_whole(buffered, window, halo):
    scene, whole = buffered
    with pickle.loads(pickle.dumps(scene)).open() as reader:
        got = reader.read(window, halo_px=halo)
    pad = 150
    r, c = window.row - halo + pad, window.col - halo + pad
    for role, values in got.items():
        around = np.pad(whole[role], pad, constant_values=np.nan)
        assert same_bytes(values, around[r : r + values.shape[0], c : c + values.shape[1]]), role


@pytest.fixture(scope="module")
def buffered(dates):
    """Dates, a composite, ancillary rasters and buffers around sparse masks, and the whole of it read at once."""
    for name, (row, col) in {"a": (10, 10), "b": (30, 44), "c": (0, 54)}.items():
        sparse = np.zeros((45, 55), np.uint8)
        sparse[row, col] = 1
        write(dates / f"sparse_{name}.tif", sparse, 20.0)
    further = [
        {
            "name": n,
            "bands": acquisition(n)["bands"],
            "mask": {"file": f"sparse_{n}.tif", "reject": [1], "buffer_m": 95},
        }
        for n in ("b", "c")
    ]
    scene = scene_of(
        dates, acquisition("a")["bands"], scale=1e-4, date="a", dates=further, composite={"method": "median"},
        mask={"file": "sparse_a.tif", "reject": [1], "buffer_m": 120},
        ancillary={"elevation": "dem.tif", "soil": {"file": "soil.tif", "categorical": True}},
    )  # fmt: skip
    return scene, read_all(scene)


def test_reading_a_composite_alone_gives_the_same(buffered):
    scene, whole = buffered
    with scene.open() as reader:
        got = reader.read(Window(5, 6, 30, 40), roles=("nir", CLEAR_COUNT))
    assert list(got) == ["nir", CLEAR_COUNT]
    assert all(same_bytes(values, whole[role][5:35, 6:46]) for role, values in got.items())


# --- buffers --------------------------------------------------------------------------------------------------------


@settings(max_examples=60, deadline=None)
@given(
    seeds=hnp.arrays(bool, hnp.array_shapes(min_dims=2, max_dims=2, max_side=25),
                     elements=st.integers(0, 12).map(lambda k: k == 7)),
    radius=st.floats(0, 90), pixel_yx=st.tuples(st.floats(5, 30), st.floats(5, 30)),
)  # fmt: skip
def test_a_buffer_is_the_euclidean_distance_of_scipy(seeds, radius, pixel_yx):
    disc = Disc.of_radius(radius, pixel_yx)
    padded = np.pad(seeds, disc.halo_px)
    got = disc.grow(padded)
    distance = (
        ndimage.distance_transform_edt(~seeds, sampling=pixel_yx) if seeds.any() else np.full(seeds.shape, np.inf)
    )
    sure = (distance < radius) | (distance > 1.003 * radius + 1e-9)
    assert np.array_equal(got[sure], (distance <= radius)[sure])


def test_a_radius_of_whole_pixels_reaches_them():
    assert Disc.of_radius(30, (10, 10)).half_widths == (3, 2, 2, 0)
    assert Disc.of_radius(0.3, (0.1, 0.1)).half_widths == (3, 2, 2, 0)
    assert Disc.of_radius(0, (10, 10)).half_widths == (0,)


def test_a_buffer_in_metres_is_the_same_on_the_ground_in_degrees(tmp_path):
    pixel = 1e-4
    codes = np.zeros((81, 81), np.uint8)
    codes[40, 40] = 1
    write(tmp_path / "m.tif", codes, pixel, "EPSG:4326", (22.0, 60.0))
    write(tmp_path / "a.tif", np.full((81, 81), 0.3, np.float32), pixel, "EPSG:4326", (22.0, 60.0))
    scene = scene_of(tmp_path, {"red": "a.tif"}, mask={"file": "m.tif", "reject": [1], "buffer_m": 100})
    rejected = np.isnan(read_all(scene)["red"])
    # One ten-thousandth of a degree at 60 N: 11.14 m of latitude and 5.58 m of longitude (pyproj's Geod).
    assert pixel_size_m(scene.grid) == pytest.approx((11.14, 5.58), abs=0.01)
    assert rejected[:, 40].sum() == 2 * int(100 / 11.14) + 1
    assert rejected[40].sum() == 2 * int(100 / 5.58) + 1


def test_a_rejected_pixel_beyond_the_grid_reaches_into_it(tmp_path):
    codes = np.zeros((10, 12), np.uint8)
    codes[4, 0] = 1
    write(tmp_path / "m.tif", codes, origin=(ORIGIN[0] - 20, ORIGIN[1]))
    write(tmp_path / "a.tif", np.full((10, 10), 0.3, np.float32))
    scene = scene_of(tmp_path, {"red": "a.tif"}, mask={"file": "m.tif", "reject": [1], "buffer_m": 30})
    rejected = np.isnan(read_all(scene)["red"])
    assert rejected[4, :2].tolist() == [True, True]
    # Three pixels around (4, -2): in its row up to column 1, in the two rows above and below up to column 0.
    assert rejected.sum() == 2 + 4


def test_pixel_size_of_a_rotated_grid():
    turned = Affine.translation(500_000, 5_000_000) @ Affine.rotation(30) @ Affine.scale(4, -9)
    rows_m, cols_m = pixel_size_m(Grid(CRS.from_epsg(32633), turned, 50, 50))
    # UTM's scale at the central meridian is 0.9996 (by definition of the grid).
    assert (rows_m, cols_m) == pytest.approx((9 / 0.9996, 4 / 0.9996), rel=1e-5)


# --- bad input ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("scene", "text"),
    [
        ({"composite": {"method": "median"}}, "needs further dates"),
        ({"date": "a", "dates": [{"name": "b", "bands": {"red": "x.tif"}}], "composite": {"method": "median"}},
         "'b' lacks nir"),
        ({"date": "a", "dates": [{"name": "a", "bands": {"red": "x.tif"}}]}, "'a' is named more than once"),
        ({"ancillary": {"red": "x.tif"}}, "'red' is taken"),
        ({"ancillary": {"my dem": "x.tif"}}, "'my dem' must be letters"),
        ({"date": "a", "dates": [{"name": "b", "bands": {"red": "x.tif", "nir": "y.tif"}}],
          "composite": {"method": "highest"}}, "'of'"),
        ({"date": "a", "dates": [{"name": "b", "bands": {"red": "x.tif", "nir": "y.tif"}}],
          "composite": {"method": "highest", "of": ["nir", "swir"]}}, "'swir'"),
        ({"date": "a", "dates": [{"name": "b", "bands": {"red": "x.tif", "nir": "y.tif"}}],
          "composite": {"method": "median", "minimum_clear": 3}}, "only 2 dates"),
        ({"dates": [{"name": "2024-06", "bands": {"red": "x.tif"}}]}, "2024-06"),
    ],
)  # fmt: skip
def test_settings_of_dates_are_checked(tmp_path, scene, text):
    with pytest.raises(SettingsError, match=text):
        project_of(tmp_path, {"bands": {"red": "a.tif", "nir": "b.tif"}, **scene})


def test_faults_of_every_date_are_named_at_once(dates):
    text = refused(
        dates, {"red": "lost_a.tif"}, sensor="sentinel-3",
        dates=[{"name": "b", "bands": {"red": "lost_b.tif"}}], ancillary={"elevation": "lost_c.tif"},
    )  # fmt: skip
    for part in ("scene.sensor", "sentinel-3", "scene.bands.red", "lost_a", "scene.dates[1].bands.red", "lost_b",
                 "scene.ancillary.elevation", "lost_c"):  # fmt: skip
        assert part in text


def test_a_role_that_the_preset_lacks_is_warned_of_with_the_nearest(dates):
    scene = scene_of(dates, {"rde": "red_a.tif"}, sensor="sentinel-2-l2a")
    assert any("no band 'rde'" in w.what and "'red'" in w.fix for w in scene.warnings)
