"""Scenes from files of differing resolution, CRS, storage and mask, read window by window on one grid."""

from __future__ import annotations

import pickle
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pyproj
import pytest
import rasterio
from affine import Affine
from hypothesis import given, settings
from hypothesis import strategies as st
from rasterio.crs import CRS
from rasterio.enums import Resampling
from rasterio.warp import reproject
from scipy import ndimage

from classify.errors import DataError, LandassayError, SettingsError
from classify.raster.grid import Grid, Window
from classify.raster.scene import Scene, open_scene
from classify.settings import Project, parse_project

ORIGIN = (641_200.0, 6_471_800.0)
UTM = "EPSG:32734"


def write(
    path: Path, bands: np.ndarray, pixel: float | Affine = 10.0, crs: str | None = UTM, origin=ORIGIN, **profile
) -> Path:
    """A GeoTIFF of (h, w) or (n, h, w)."""
    bands = bands if bands.ndim == 3 else bands[None]
    transform = pixel if isinstance(pixel, Affine) else Affine(pixel, 0, origin[0], 0, -pixel, origin[1])
    tags = profile.pop("tags", {})
    options = {"driver": "GTiff", "crs": crs, "transform": transform, "dtype": bands.dtype, **profile}
    count, height, width = bands.shape
    with rasterio.open(path, "w", count=count, height=height, width=width, **options) as target:
        target.write(bands)
        if tags:
            target.scales, target.offsets = tags["scales"], tags["offsets"]
    return path


def project_of(folder: Path, scene: dict) -> Project:
    data = {
        "project": {"title": "Sorrel Basin"}, "scene": scene,
        "class": [{"code": 1, "name": "A"}, {"code": 2, "name": "B"}],
        "training": {"polygons": "t.gpkg", "label": "cover"},
    }  # fmt: skip
    return parse_project(data, folder / "project.toml")


def scene_of(folder: Path, bands: dict, **scene) -> Scene:
    project = project_of(folder, {"bands": bands, **scene})
    return open_scene(project.scene, project)


def read_all(scene: Scene, **options) -> dict[str, np.ndarray]:
    with scene.open() as reader:
        return reader.read(scene.grid.window, **options)


def same_bytes(a: np.ndarray, b: np.ndarray) -> bool:
    """Equal to the last bit; any NaN equals any NaN."""
    return a.dtype == b.dtype and a.shape == b.shape and np.array_equal(a, b, equal_nan=True)


def test_scale_offset_and_no_data_by_band_scene_file_and_preset(tmp_path):
    stored = np.array([[0, 1000, 2000], [3000, 4000, 65535]], dtype=np.uint16)
    write(tmp_path / "plain.tif", stored)
    write(tmp_path / "tagged.tif", stored, nodata=65535, tags={"scales": [0.5], "offsets": [2.0]})
    expected = stored.astype(np.float32)
    scene = scene_of(
        tmp_path, {"red": "plain.tif", "nir": {"file": "plain.tif", "scale": 0.001, "offset": 0.25, "nodata": 1000}}
    )
    got = read_all(scene)
    assert np.array_equal(got["red"], expected)
    assert np.allclose(got["nir"], np.where(stored == 1000, np.nan, stored * 0.001 + 0.25), equal_nan=True, rtol=1e-6)
    tagged = scene_of(tmp_path, {"red": "tagged.tif"})
    assert np.allclose(read_all(tagged)["red"], np.where(stored == 65535, np.nan, stored * 0.5 + 2), equal_nan=True)
    preset = scene_of(tmp_path, {"red": "plain.tif"}, sensor="sentinel-2-l2a")
    assert preset.band("red").wavelength_nm == 664.6
    assert np.allclose(
        read_all(preset)["red"], np.where(stored == 0, np.nan, stored * 1e-4 - 0.1), equal_nan=True, rtol=1e-5
    )
    disputed = scene_of(tmp_path, {"red": "tagged.tif", "nir": "tagged.tif"}, sensor="sentinel-2-l2a")
    said = [w for w in disputed.warnings if "state scale 0.5 and offset 2, the preset 0.0001 and -0.1" in w.what]
    assert len(said) == 1, "once, not for each band"
    assert np.nanmax(read_all(disputed)["red"]) == 2002, "the file is believed"
    whole = scene_of(tmp_path, {"red": "tagged.tif"}, sensor="sentinel-2-l2a", scale=0.01, offset=0.0, nodata=2000)
    assert np.allclose(
        read_all(whole)["red"], np.where(stored == 2000, np.nan, stored * 0.01), equal_nan=True, rtol=1e-6
    )


@pytest.mark.parametrize("dtype", ["uint8", "int16", "int32", "uint32", "float32", "float64"])
def test_every_stored_type_gives_reflectance(tmp_path, dtype):
    stored = np.arange(1, 13).reshape(3, 4).astype(dtype)
    stored[1, 2] = 99
    write(tmp_path / "a.tif", stored, nodata=99)
    got = read_all(scene_of(tmp_path, {"red": {"file": "a.tif", "scale": 0.01}}))["red"]
    assert got.dtype == np.float32
    assert np.allclose(got, np.where(stored == 99, np.nan, stored.astype(float) * 0.01), equal_nan=True, rtol=1e-6)


def test_not_finite_is_invalid_and_a_no_data_value_with_more_digits_than_stored_is_found(tmp_path):
    stored = np.array([[0.1, np.nan, np.inf], [-3.4028234663852886e38, 0.5, -np.inf]], dtype=np.float32)
    write(tmp_path / "a.tif", stored, nodata=-3.4028234663852886e38)
    got = read_all(scene_of(tmp_path, {"red": "a.tif"}))["red"]
    assert np.array_equal(np.isnan(got), [[False, True, True], [True, False, True]])


def test_one_file_of_many_bands_and_its_alpha(tmp_path):
    stored = np.stack([np.full((5, 6), 10 * k, np.uint8) for k in range(1, 5)])
    stored[3] = 255
    stored[3, 2, 3] = 0
    write(tmp_path / "ortho.tif", stored, photometric="RGB", alpha="YES")
    bands = {
        role: {"file": "ortho.tif", "band": k, "scale": 0.01} for k, role in enumerate(("red", "green", "blue"), 1)
    }
    got = read_all(scene_of(tmp_path, bands))
    for k, role in enumerate(bands, 1):
        assert np.isnan(got[role][2, 3])
        assert np.isclose(got[role][0, 0], 0.1 * k)
        assert np.isnan(got[role]).sum() == 1


# --- grids ----------------------------------------------------------------------------------------------------------


def ramp(grid: Grid) -> np.ndarray:
    """A plane in UTM coordinates, (x - x0) + 3 (y - y0) in kilometres, as the mean of each pixel is its centre's."""
    rows, cols = np.indices(grid.shape_yx).reshape(2, -1)
    x, y = grid.xy(rows, cols)
    if grid.crs != CRS.from_string(UTM):
        x, y = pyproj.Transformer.from_crs(grid.crs.to_wkt(), UTM, always_xy=True).transform(x, y)
    value = (np.asarray(x) - ORIGIN[0]) / 1000 + 3 * (np.asarray(y) - ORIGIN[1]) / 1000
    return value.reshape(grid.shape_yx).astype(np.float64)


STACK = {
    "fine": (UTM, Affine(10, 0, ORIGIN[0], 0, -10, ORIGIN[1]), (160, 180)),
    "coarse": (UTM, Affine(20, 0, ORIGIN[0], 0, -20, ORIGIN[1]), (80, 90)),
    "finer": (UTM, Affine(2.5, 0, ORIGIN[0], 0, -2.5, ORIGIN[1]), (640, 720)),
    "shifted": (UTM, Affine(10, 0, ORIGIN[0] - 43.7, 0, -10, ORIGIN[1] + 36.1), (170, 190)),
    "other_zone": ("EPSG:32735", Affine(15, 0, 73_400, 0, -15, 6_464_100), (130, 140)),
    "degrees": ("EPSG:4326", Affine(0.00015, 0, 22.4925, 0, -0.00015, -31.8804), (102, 134)),
    "rotated": (
        UTM, Affine.translation(ORIGIN[0] - 500, ORIGIN[1] - 100) @ Affine.rotation(25) @ Affine.scale(12, -12),
        (230, 240),
    ),
    "south_up": (UTM, Affine(10, 0, ORIGIN[0], 0, 10, ORIGIN[1] - 1600), (160, 180)),
}  # fmt: skip


@pytest.fixture(scope="module")
def stack(tmp_path_factory) -> Path:
    """Rasters whose values tell where they are, one per grid of STACK."""
    folder = tmp_path_factory.mktemp("stack")
    for name, (crs, transform, shape) in STACK.items():
        write(folder / f"{name}.tif", ramp(Grid(CRS.from_string(crs), transform, *shape)), transform, crs)
    codes = np.random.default_rng(3).integers(0, 12, (80, 90), dtype=np.uint8)
    write(folder / "mask.tif", codes, 20.0)
    return folder


@pytest.mark.parametrize("name", STACK)
def test_every_grid_registers_to_a_small_part_of_a_pixel(stack, name):
    scene = scene_of(stack, {"fine": "fine.tif", name: f"{name}.tif"}, grid="fine")
    got = read_all(scene)[name]
    assert got.shape == (160, 180)
    off_km = np.abs(got - ramp(scene.grid))
    known = np.isfinite(got)
    assert known.mean() > 0.9 if name != "rotated" else known.mean() > 0.5
    # A twentieth of a 10 m pixel along the steeper direction of the plane is 0.05 * 0.01 km * 3; the outermost half
    # pixel of a coarser source is held level, not extended.
    inner = ndimage.binary_erosion(known, iterations=2, border_value=0)
    assert off_km[inner].max() < 0.05 * 0.01 * 3


@pytest.mark.parametrize(
    ("crs", "transform", "shape"),
    [("EPSG:3031", Affine(9000, 0, -247_000, 0, -9000, 252_000), (55, 55)),
     ("EPSG:32760", Affine(700, 0, 790_000, 0, -700, 8_140_000), (80, 130))],
    ids=["round the pole", "over the antimeridian"],
)  # fmt: skip
def test_where_longitude_jumps_every_pixel_is_still_in_its_place(tmp_path, crs, transform, shape):
    # A source in degrees round the whole earth; each of its pixels holds a number of its own.
    source = np.arange(720 * 360, dtype=np.float64).reshape(360, 720)
    write(tmp_path / "earth.tif", source, Affine(0.5, 0, -180, 0, -0.5, 90), "EPSG:4326")
    write(tmp_path / "base.tif", np.ones(shape, np.float32), transform, crs)
    scene = scene_of(tmp_path, {"base": "base.tif"}, ancillary={"earth": {"file": "earth.tif", "categorical": True}})
    rows, cols = np.indices(shape).reshape(2, -1)
    lon, lat = pyproj.Transformer.from_crs(crs, 4326, always_xy=True).transform(*scene.grid.xy(rows, cols))
    expected = np.floor((90 - np.asarray(lat)) * 2) * 720 + np.floor((np.asarray(lon) + 180) * 2)
    got = read_all(scene)["earth"].ravel()
    # A pixel centre within a hundredth of a source pixel of an edge may fall to either side.
    assert (got == expected.astype(np.float32)).mean() > 0.99
    with scene.open() as reader:
        part = reader.read(Window(20, 31, 9, 13), ["earth"])["earth"]
    assert same_bytes(part, got.reshape(shape)[20:29, 31:44])


def test_bilinear_agrees_with_gdal_and_nearest_too(stack):
    for name in ("coarse", "shifted", "degrees", "other_zone"):
        with rasterio.open(stack / f"{name}.tif") as source:
            crs, transform, values = source.crs, source.transform, source.read(1)
        rng = np.random.default_rng(5)
        values = rng.random(values.shape)
        write(stack / f"random_{name}.tif", values, transform, crs.to_string())
        for rule in ("bilinear", "nearest"):
            bands = {"fine": "fine.tif", "other": f"random_{name}.tif"}
            scene = scene_of(stack, bands, grid="fine", resampling=rule)
            mine = read_all(scene)["other"]
            theirs = np.full(scene.grid.shape_yx, np.nan)
            reproject(
                values, theirs, src_transform=transform, src_crs=crs,
                dst_transform=scene.grid.transform, dst_crs=scene.grid.crs,
                resampling=Resampling[rule], tolerance=0, init_dest_nodata=True, dst_nodata=np.nan,
            )  # fmt: skip
            both = np.isfinite(mine) & np.isfinite(theirs)
            # GDAL treats the outermost half pixel its own way; nearest may round a tie the other way.
            assert both[2:-2, 2:-2].mean() > 0.97
            differ = np.abs(mine - theirs)[2:-2, 2:-2] > 0.02
            assert differ[both[2:-2, 2:-2]].mean() < 0.003, (name, rule)


@pytest.mark.parametrize("crs", ["EPSG:4326", "EPSG:32618"])
def test_a_world_from_0_to_360_degrees_lies_where_it_should(tmp_path, crs):
    world = np.arange(360 * 180, dtype=np.float32).reshape(180, 360)
    write(tmp_path / "world.tif", world, Affine(1, 0, 0, 0, -1, 90), "EPSG:4326")
    transform = (
        Affine(0.01, 0, -75.3, 0, -0.01, 4.6) if crs == "EPSG:4326" else Affine(1000, 0, 466_000, 0, -1000, 508_000)
    )
    write(tmp_path / "base.tif", np.ones((40, 50), np.float32), transform, crs)
    scene = scene_of(tmp_path, {"red": "base.tif"}, ancillary={"world": {"file": "world.tif", "categorical": True}})
    got = read_all(scene)["world"]
    # By hand: 75.3 W is 284.7 E, in column 284; 4.6 N lies in row 85, counted from 90 N.
    assert got[0, 0] == world[85, 284]
    assert got[0, 49] == world[85, 285]


def test_a_crs_with_heights_is_still_the_same_grid(tmp_path):
    values = np.random.default_rng(6).random((2, 30, 40)).astype(np.float32)
    write(tmp_path / "base.tif", values[0])
    write(tmp_path / "dem.tif", values[1], crs="EPSG:32734+5773")
    got = read_all(scene_of(tmp_path, {"red": "base.tif"}, ancillary={"elevation": "dem.tif"}))
    assert same_bytes(got["elevation"], values[1]), "read as stored, not interpolated"


def test_a_finer_source_is_averaged_exactly(tmp_path):
    rng = np.random.default_rng(2)
    fine = rng.random((40, 60)).astype(np.float32)
    fine[4:6, 8:10] = -1
    fine[0, 0] = -1
    write(tmp_path / "fine.tif", fine, 5.0, nodata=-1)
    write(tmp_path / "base.tif", np.zeros((20, 30), np.float32), 10.0)
    got = read_all(scene_of(tmp_path, {"base": "base.tif", "fine": "fine.tif"}, grid="base"))["fine"]
    with_nan = np.where(fine == -1, np.nan, fine).astype(np.float64)
    with np.errstate(invalid="ignore"):
        blocks = with_nan.reshape(20, 2, 30, 2).transpose(0, 2, 1, 3).reshape(20, 30, 4)
        count = np.isfinite(blocks).sum(axis=2)
        expected = np.where(count, np.nansum(blocks, axis=2) / np.maximum(count, 1), np.nan)
    assert np.allclose(got, expected, rtol=1e-6, equal_nan=True)
    assert np.isnan(got[2, 4])


def test_invalid_neighbours_are_left_out_of_the_interpolation(tmp_path):
    coarse = np.array([[0.2, 0.4], [0.6, -1]], dtype=np.float32)
    write(tmp_path / "coarse.tif", coarse, 20.0, nodata=-1)
    write(tmp_path / "base.tif", np.zeros((4, 4), np.float32))
    got = read_all(scene_of(tmp_path, {"base": "base.tif", "c": "coarse.tif"}))["c"]
    assert np.isnan(got[2:, 2:]).all()
    assert np.isfinite(got[:2]).all()
    assert np.isfinite(got[2:, :2]).all()
    # By hand, pixel (1, 1): its centre is a quarter of a coarse pixel from the centre of the first in both directions.
    weights = np.array([0.75 * 0.75, 0.75 * 0.25, 0.25 * 0.75])
    assert got[1, 1] == pytest.approx(weights @ [0.2, 0.4, 0.6] / weights.sum(), rel=1e-6)
    assert got[0, 0] == pytest.approx(0.2)


def test_the_grid_is_the_named_band_a_size_or_the_finest(stack):
    bands = {"coarse": "coarse.tif", "fine": "fine.tif", "degrees": "degrees.tif"}
    with rasterio.open(stack / "degrees.tif") as source:
        degrees = source.transform
    assert scene_of(stack, bands).grid.transform.a == 10
    assert scene_of(stack, bands, grid="degrees").grid.transform == degrees
    assert scene_of(stack, bands, grid=10.0).grid.transform.a == 10
    made = scene_of(stack, bands, grid=30.0).grid
    assert (made.transform.a, made.transform.e, made.shape_yx) == (30, -30, (54, 60))
    assert made.bounds[0] == ORIGIN[0]
    assert made.bounds[3] == ORIGIN[1]


# --- windows --------------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def mixed(stack) -> tuple[Scene, dict[str, np.ndarray]]:
    """Every grid of STACK under one mask, and the whole of it read at once."""
    scene = scene_of(
        stack, {name: f"{name}.tif" for name in STACK}, grid="fine", mask={"file": "mask.tif", "reject": [3, 8, 9]},
    )  # fmt: skip
    return scene, read_all(scene)


@settings(max_examples=60, deadline=None)
@given(
    window=st.builds(Window, st.integers(-40, 200), st.integers(-40, 220), st.integers(1, 130), st.integers(1, 130)),
    halo=st.integers(0, 9),
)
def test_any_window_is_the_same_slice_of_the_whole(mixed, window, halo):
    scene, whole = mixed
    with scene.open() as reader:
        got = reader.read(window, halo_px=halo)
    height, width = window.shape_yx
    padded = 200
    r, c = window.row - halo + padded, window.col - halo + padded
    for role, values in got.items():
        around = np.pad(whole[role], padded, constant_values=np.nan)
        assert same_bytes(values, around[r : r + height + 2 * halo, c : c + width + 2 * halo]), role


def test_windows_outside_are_nan_and_roles_are_those_asked_for(mixed):
    scene, whole = mixed
    with scene.open() as reader:
        assert all(np.isnan(values).all() for values in reader.read(Window(900, 900, 5, 7)).values())
        got = reader.read(Window(2, 3, 5, 7), roles=("degrees", "fine"))
        with pytest.raises(DataError, match="no band 'swir'"):
            reader.read(Window(0, 0, 1, 1), roles=("swir",))
    assert list(got) == ["degrees", "fine"]
    assert same_bytes(got["fine"], whole["fine"][2:7, 3:10])


def test_threads_with_a_reader_each_and_a_pickled_scene_read_the_same(mixed):
    scene, whole = mixed
    copy = pickle.loads(pickle.dumps(scene))
    windows = list(scene.grid.blocks(50))

    def read(window: Window) -> dict[str, np.ndarray]:
        with copy.open() as reader:
            return reader.read(window)

    with ThreadPoolExecutor(4) as pool:
        for window, got in zip(windows, pool.map(read, windows), strict=True):
            assert all(same_bytes(values, whole[role][window.slices_yx]) for role, values in got.items())


def test_a_reader_opens_each_file_once(stack, monkeypatch):
    bands = {name: f"{name}.tif" for name in ("fine", "coarse")}
    scene = scene_of(stack, bands, mask={"file": "mask.tif", "reject": [3]})
    opened = []
    original = rasterio.open
    monkeypatch.setattr(rasterio, "open", lambda path, *a, **k: opened.append(path) or original(path, *a, **k))
    with scene.open() as reader:
        for window in scene.grid.blocks(32):
            reader.read(window)
    assert len(opened) == len(set(opened)) == 3


# --- masks ----------------------------------------------------------------------------------------------------------


def test_mask_by_codes_on_a_coarser_grid(mixed, stack):
    _, whole = mixed
    with rasterio.open(stack / "mask.tif") as source:
        rejected = np.isin(source.read(1), [3, 8, 9]).repeat(2, axis=0).repeat(2, axis=1)
    assert np.array_equal(np.isnan(whole["fine"]), rejected)


@pytest.mark.parametrize("dtype", ["uint8", "int16", "uint16", "int32", "uint32"])
def test_mask_by_bits_also_the_sign_bit(tmp_path, dtype):
    top = np.dtype(dtype).itemsize * 8 - 1
    rng = np.random.default_rng(4)
    info = np.iinfo(dtype)
    stored = rng.integers(info.min, info.max, (30, 30), dtype=dtype, endpoint=True)
    write(tmp_path / "qa.tif", stored)
    write(tmp_path / "a.tif", np.ones((30, 30), np.float32))
    scene = scene_of(tmp_path, {"red": "a.tif"}, mask={"file": "qa.tif", "bits": {"cloud": 3, "fill": top}})
    # Python's whole numbers have no size, so that a negative value's bits are those of its two's complement.
    expected = [[bool((int(v) % 2 ** (top + 1)) & (1 << 3 | 1 << top)) for v in row] for row in stored]
    assert np.array_equal(np.isnan(read_all(scene)["red"]), expected)


def test_a_finer_mask_rejects_a_pixel_if_any_of_it_is_rejected(tmp_path):
    codes = np.zeros((8, 8), np.uint8)
    codes[1, 6] = 1
    write(tmp_path / "mask.tif", codes, 5.0)
    write(tmp_path / "a.tif", np.ones((4, 4), np.float32), 10.0)
    scene = scene_of(tmp_path, {"red": "a.tif"}, mask={"file": "mask.tif", "reject": [1]})
    expected = np.zeros((4, 4), bool)
    expected[0, 3] = True
    assert np.array_equal(np.isnan(read_all(scene)["red"]), expected)


def test_mask_by_meaning_from_the_preset_and_its_usual_list(tmp_path):
    codes = np.arange(12, dtype=np.uint8).reshape(3, 4)
    write(tmp_path / "scl.tif", codes)
    write(tmp_path / "a.tif", np.full((3, 4), 3000, np.uint16))

    def rejected(**mask) -> list[int]:
        scene = scene_of(tmp_path, {"red": "a.tif"}, sensor="sentinel-2-l2a", mask={"file": "scl.tif", **mask})
        return codes[np.isnan(read_all(scene)["red"])].tolist()

    # Codes of the scene classification: Sentinel-2 products specification document (from memory).
    assert rejected(reject=["Cloud", "cloud_shadow", 11]) == [3, 8, 9, 11]
    assert rejected() == [0, 1, 3, 8, 9, 10]
    with pytest.raises(LandassayError, match=r"(?s)no meaning 'fog'.*cloud shadow"):
        rejected(reject=["fog"])


# --- bad input ------------------------------------------------------------------------------------------------------


def refused(folder: Path, bands: dict, **scene) -> str:
    with pytest.raises((DataError, SettingsError)) as caught:
        scene_of(folder, bands, **scene)
    return str(caught.value)


def test_every_faulty_file_is_named_at_once(tmp_path):
    good = np.ones((20, 20), np.float32)
    write(tmp_path / "good.tif", good)
    write(tmp_path / "nowhere.tif", good, crs=None)
    (tmp_path / "text.tif").write_text("not a raster")
    text = refused(
        tmp_path,
        {"a": "good.tif", "b": "lost.tif", "c": "nowhere.tif", "d": "text.tif", "e": {"file": "good.tif", "band": 4}},
        mask={"file": "good.tif", "reject": [1]},
    )
    for part in ("scene.bands.b", "no such file", "scene.bands.c", "no coordinate reference system", "scene.bands.d",
                 "no raster of a format", "scene.bands.e", "band 4 is asked for, but the file has 1 band", "scene.mask",
                 "whole numbers"):  # fmt: skip
        assert part in text
    assert "scene.bands.a" not in text


def test_a_truncated_file_is_refused_before_work_starts(tmp_path):
    noise = np.random.default_rng(0).integers(0, 60000, (300, 300), dtype=np.uint16)
    write(tmp_path / "whole.tif", noise)
    content = (tmp_path / "whole.tif").read_bytes()
    for name in ("cut.tif", "cut_too.tif"):
        (tmp_path / name).write_bytes(content[: len(content) * 2 // 3])
    text = refused(tmp_path, {"red": "cut.tif", "nir": "cut_too.tif", "blue": "whole.tif"})
    assert text.count("cut off") == 2
    assert "whole.tif" not in text


def test_a_file_without_georeferencing_is_refused(tmp_path):
    write(tmp_path / "a.tif", np.ones((5, 5), np.float32), Affine.identity())
    assert "no georeferencing" in refused(tmp_path, {"red": "a.tif"})


def test_bands_of_another_place_are_refused_and_partial_cover_is_a_warning(tmp_path):
    one = np.ones((50, 50), np.float32)
    write(tmp_path / "a.tif", one)
    write(tmp_path / "far.tif", one, origin=(700_000, 6_471_800))
    write(tmp_path / "half.tif", one, origin=(ORIGIN[0] + 250, ORIGIN[1]))
    assert "'nir' does not overlap" in refused(tmp_path, {"red": "a.tif", "nir": "far.tif"})
    scene = scene_of(tmp_path, {"red": "a.tif", "nir": "half.tif"})
    assert any("covers only" in w.what and "'nir'" in w.what for w in scene.warnings)
    got = read_all(scene)["nir"]
    assert np.isnan(got[:, :25]).all()
    assert (got[:, 25:] == 1).all()


def test_shifted_grids_unscaled_values_and_a_mask_that_rejects_all_are_warned_of(tmp_path):
    stored = np.full((50, 50), 3000, np.uint16)
    write(tmp_path / "a.tif", stored)
    write(tmp_path / "b.tif", stored, origin=(ORIGIN[0] + 3, ORIGIN[1] - 4.5))
    write(tmp_path / "m.tif", np.ones((50, 50), np.uint8))
    scene = scene_of(tmp_path, {"red": "a.tif", "nir": "b.tif"}, grid="red", mask={"file": "m.tif", "reject": [1]})
    texts = [str(w) for w in scene.warnings]
    assert any("'nir' is shifted by 0.30 pixels in x and 0.45 in y" in text for text in texts)
    assert any("median of 'red' is 3000" in text and "0.0001" in text for text in texts)
    assert any("rejects every pixel" in text for text in texts)
    assert all(w.severity == "warning" for w in scene.warnings)
    scaled = scene_of(tmp_path, {"red": {"file": "a.tif", "scale": 1e-4}})
    assert not scaled.warnings


def test_a_mask_bit_beyond_its_width_is_refused(tmp_path):
    write(tmp_path / "a.tif", np.ones((5, 5), np.float32))
    write(tmp_path / "m.tif", np.ones((5, 5), np.uint8))
    assert "the mask has 8 bits" in refused(tmp_path, {"red": "a.tif"}, mask={"file": "m.tif", "bits": {"cloud": 9}})


def test_the_real_scene_is_read_as_stored():
    # Landsat 7, a subset shipped with a general-purpose package, public domain; see tests/data.
    file = Path(__file__).parent / "data" / "landsat7_olinda.tif"
    bands = {f"b{k}": {"file": str(file), "band": k, "scale": 1 / 255} for k in range(1, 7)}
    scene = scene_of(file.parent, bands)
    with rasterio.open(file) as source:
        stored = source.read()
    got = read_all(scene)
    assert np.allclose(np.stack(list(got.values())), stored / 255, rtol=1e-6)
    assert not scene.warnings
