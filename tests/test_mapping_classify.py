"""Maps are what the model says of every pixel, and the same bytes whatever happened on the way."""

from __future__ import annotations

import multiprocessing
import os
import random
import resource
import signal
import sys
import time
from contextlib import contextmanager, suppress
from dataclasses import replace

import geopandas as gpd
import numpy as np
import pytest
import rasterio
from rio_cogeo.cogeo import cog_validate
from small_project import make_small_project, read_json

from classify.errors import DataError, OutputError
from classify.mapping import blocks, engines
from classify.mapping.classify_scene import MapOptions, block_side_px, classify_scene
from classify.mapping.tidy import TidyOptions
from classify.mapping.unfinished import FOLDER
from classify.models import load_model
from classify.progress import Silent
from classify.raster.area import ground_areas_m2
from classify.raster.grid import Grid
from classify.raster.scene import open_scene
from classify.settings import load_project
from classify.workflow import Job, run, status

OPTIONS = MapOptions(block_px=32, reach=True)
FILES = ("cover.tif", "cover.tif.aux.xml", "confidence.tif", "reach.tif", "areas.csv")


@pytest.fixture(scope="module")
def trained_project(tmp_path_factory):
    """A miniature project with its model."""
    folder = make_small_project(tmp_path_factory.mktemp("trained") / "miniature")
    run(Job(load_project(folder)), ["train"])
    return folder


@pytest.fixture
def made(trained_project):
    """Project, model and scene of the miniature, and a function that maps it into a folder."""
    project = load_project(trained_project)
    model = load_model(trained_project / "outputs" / "model")
    scene = open_scene(project.scene, project)

    def map_into(folder, options=OPTIONS, progress=None, scene=scene):
        return classify_scene(
            model, scene, folder, classes=project.classes, options=options, progress=progress or Silent()
        )

    return project, model, scene, map_into


def contents(folder):
    return {name: (folder / name).read_bytes() for name in FILES}


class Interrupting(Silent):
    """Progress that interrupts the work when so many blocks are done, as Ctrl-C does."""

    def __init__(self, after):
        self.left = after

    @contextmanager
    def task(self, label, total):
        yield self

    def advance(self, units=1):
        self.left -= units
        if self.left <= 0:
            raise KeyboardInterrupt


def test_the_map_is_what_scikit_learn_says_of_each_pixel(made, tmp_path, trained_project):
    project, model, scene, map_into = made
    result = map_into(tmp_path)
    with rasterio.open(trained_project / "bands.tif") as bands, rasterio.open(trained_project / "mask.tif") as mask:
        stored, masked = bands.read(), mask.read(1) == 3
    reflectance = stored.astype(np.float32) * np.float32(0.0001)
    blue, green, red, nir = reflectance
    with np.errstate(invalid="ignore"):
        features = np.stack([blue, green, red, nir, (nir - red) / (nir + red)]).reshape(5, -1).T
    assert model.recipe.names == ("blue", "green", "red", "nir", "ndvi")
    expected = model.estimator.predict(np.nan_to_num(features)).reshape(masked.shape)
    expected[masked | (stored == 0).any(axis=0)] = 0
    with rasterio.open(result.cover) as cover:
        np.testing.assert_array_equal(cover.read(1), expected)
    assert result.unmapped_pixels == (expected == 0).sum() == 15 + 150
    areas_m2 = ground_areas_m2(scene.grid, scene.grid.window)
    for row in result.areas.itertuples():
        assert row.pixels == (expected == row.code).sum()
        assert row.area_m2 == pytest.approx(areas_m2[expected == row.code].sum(), rel=1e-9)
        assert row.area == pytest.approx(row.area_m2 / 10_000)
    assert list(result.areas["name"]) == [c.name for c in project.classes]


def test_confidence_and_reach_are_those_of_the_model_and_all_are_valid_cogs(made, tmp_path):
    _, model, scene, map_into = made
    result = map_into(tmp_path)
    with scene.open() as reader:
        layers = reader.read(scene.grid.window, model.recipe.needs, halo_px=model.recipe.halo_px)
    features = model.recipe.compute(layers)
    valid = np.isfinite(features).all(axis=0)
    pixels = np.ascontiguousarray(features[:, valid].T)
    for name, expected in (
        ("confidence", np.rint(100 * model.probabilities(pixels).max(axis=1))), ("reach", model.reach.percent(pixels))
    ):  # fmt: skip
        with rasterio.open(result.files[name]) as written:
            values = written.read(1)
            assert written.nodata == 255
        np.testing.assert_array_equal(values[valid], expected)
        assert (values[~valid] == 255).all()
    with rasterio.open(result.files["reach"]) as reach, rasterio.open(result.cover) as cover:
        beyond, codes = np.isin(reach.read(1), range(101, 255)), cover.read(1)
    assert list(result.areas["beyond_reach_pixels"]) == [(beyond & (codes == c)).sum() for c in result.areas["code"]]
    assert all(cog_validate(path, strict=True)[0] for path in result.files.values())


@pytest.mark.parametrize("options", [
    replace(OPTIONS, jobs=2), replace(OPTIONS, jobs=3, block_px=17), replace(OPTIONS, block_px=512),
])  # fmt: skip
def test_workers_and_block_sizes_do_not_change_a_byte(made, tmp_path, options):
    map_into = made[-1]
    map_into(tmp_path / "one")
    map_into(tmp_path / "other", options)
    assert contents(tmp_path / "one") == contents(tmp_path / "other")
    assert {path.name for path in (tmp_path / "other").iterdir()} == set(FILES)


def test_reading_does_not_run_ahead_of_slow_work(made, monkeypatch):
    _, model, scene, _ = made
    begun, ahead = [], []

    class Watched(blocks.BlockWork):
        def read(self, window):
            begun.append(window)
            return super().read(window)

        def compute(self, *arguments):
            time.sleep(0.03)
            return super().compute(*arguments)

    monkeypatch.setattr(engines, "LOOK_UP_S", 0.005)
    windows = list(enumerate(scene.grid.blocks(24)))
    for received, _ in enumerate(engines.Threads(2).run(Watched(model, scene), windows)):
        ahead.append(len(begun) - received)
    assert len(ahead) == len(windows) == 20
    assert max(ahead) <= 4


@pytest.mark.parametrize(
    ("tile_px", "block_px"), [(128, 512), (512, 512), (1024, 1024), (384, 768), (2048, 512), (0, 512)]
)
def test_blocks_are_whole_tiles_of_the_files(made, tmp_path, tile_px, block_px):
    scene = made[2]
    tiling = {"tiled": True, "blockxsize": tile_px, "blockysize": tile_px} if tile_px else {}
    with rasterio.open(
        tmp_path / "b.tif", "w", driver="GTiff", count=1, dtype="uint8", height=2100, width=2100, crs=scene.grid.crs,
        transform=scene.grid.transform, sparse_ok=True, **tiling,
    ):  # fmt: skip
        pass
    grid = Grid(scene.grid.crs, scene.grid.transform, 2100, 2100)
    band = replace(scene.bands[0], path=str(tmp_path / "b.tif"), native=grid)
    assert block_side_px(replace(scene, grid=grid, bands=(band,))) == block_px


def test_an_interrupted_run_goes_on_where_it_was(made, tmp_path):
    map_into = made[-1]
    map_into(tmp_path / "straight")
    for after in (1, 5, 11):
        with pytest.raises(KeyboardInterrupt):
            map_into(tmp_path / "halting", progress=Interrupting(after))
        assert not (tmp_path / "halting" / "cover.tif").exists()
    result = map_into(tmp_path / "halting")
    assert result.resumed_blocks >= 11
    assert contents(tmp_path / "straight") == contents(tmp_path / "halting")
    assert not (tmp_path / "halting" / FOLDER).exists()


def test_stored_blocks_that_are_torn_or_changed_are_made_again(made, tmp_path):
    map_into = made[-1]
    map_into(tmp_path / "straight")
    with pytest.raises(KeyboardInterrupt):
        map_into(tmp_path / "halting", progress=Interrupting(8))
    unfinished = tmp_path / "halting" / FOLDER
    journal = unfinished / "journal.jsonl"
    stored = len(journal.read_text().splitlines()) - 1
    journal.write_text(journal.read_text()[:-20])
    with (unfinished / "cover.bytes").open("r+b") as stream:
        stream.write(b"\x07")
    assert map_into(tmp_path / "halting").resumed_blocks == stored - 2
    assert contents(tmp_path / "straight") == contents(tmp_path / "halting")


def test_what_was_made_from_something_else_is_made_anew(made, tmp_path):
    _, _, scene, map_into = made
    with pytest.raises(KeyboardInterrupt):
        map_into(tmp_path, progress=Interrupting(8))
    bands = tuple(replace(band, offset=band.offset + 0.01) for band in scene.bands)
    changed = replace(scene, bands=bands)
    assert map_into(tmp_path, scene=changed).resumed_blocks == 0
    with pytest.raises(KeyboardInterrupt):
        map_into(tmp_path, progress=Interrupting(8))
    assert map_into(tmp_path, replace(OPTIONS, block_px=16)).resumed_blocks == 0


def test_a_block_that_cannot_be_read_is_named_or_skipped_and_counted(made, tmp_path, trained_project):
    _, _, scene, map_into = made
    broken = tmp_path / "bands.tif"
    with rasterio.open(trained_project / "bands.tif") as source:
        profile = {**source.profile, "tiled": True, "blockxsize": 32, "blockysize": 32, "interleave": "pixel"}
        with rasterio.open(broken, "w", **profile) as target:
            target.write(source.read())
    with rasterio.open(broken) as target:
        offset = int(target.get_tag_item("BLOCK_OFFSET_1_2", "TIFF", bidx=1))
    with broken.open("r+b") as stream:
        stream.seek(offset)
        stream.write(b"\xff" * 40)
    bands = tuple(replace(band, path=str(broken)) for band in scene.bands)
    with pytest.raises(DataError, match=r"rows 64 to 95") as raised:
        map_into(tmp_path / "out", scene=replace(scene, bands=bands))
    assert raised.value.problems[0].where == str(broken)
    result = map_into(tmp_path / "out", replace(OPTIONS, skip_unreadable=True), scene=replace(scene, bands=bands))
    assert result.unmapped_pixels == 32 * 32 + 15 + 150  # a block, no data, masked
    assert "1 of 12 blocks (1024 pixels) could not be read" in result.warnings[0].what


def test_a_folder_that_cannot_be_written_and_a_full_disk_leave_nothing_half_done(made, tmp_path):
    map_into = made[-1]
    (tmp_path / "file").write_text("in the way")
    with pytest.raises(OutputError, match="cannot be written"):
        map_into(tmp_path / "file" / "map")
    limits = resource.getrlimit(resource.RLIMIT_FSIZE)
    previous = signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    try:
        resource.setrlimit(resource.RLIMIT_FSIZE, (4000, limits[1]))
        with pytest.raises(OutputError, match="cannot be written"):
            map_into(tmp_path / "full")
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, limits)
        signal.signal(signal.SIGXFSZ, previous)
    assert not set(FILES) & {path.name for path in (tmp_path / "full").rglob("*")}
    map_into(tmp_path / "full")


def test_a_grid_beyond_all_reason_is_refused_before_work_starts(made, tmp_path):
    _, _, scene, map_into = made
    huge = Grid(scene.grid.crs, scene.grid.transform, 2_000_000, 2_000_000)
    with pytest.raises(DataError, match="2000000 rows"):
        map_into(tmp_path, scene=replace(scene, grid=huge))
    assert not list(tmp_path.iterdir())


def test_a_tidied_map_keeps_the_raw_one_and_is_what_areas_and_polygons_tell_of(made, tmp_path):
    map_into = made[-1]
    options = replace(OPTIONS, tidy=TidyOptions(minimum_unit_m2=600.0, majority_px=15), polygons=True)
    map_into(tmp_path / "plain")
    result = map_into(tmp_path / "tidied", options)
    with rasterio.open(result.files["raw"]) as raw, rasterio.open(tmp_path / "plain" / "cover.tif") as plain:
        before = plain.read(1)
        np.testing.assert_array_equal(raw.read(1), before)
    with rasterio.open(result.cover) as cover:
        after = cover.read(1)
        assert cover.tags()["TIDIED"].startswith("majority of 15 x 15 pixels, then minimum mapping unit 0.06 ha")
    assert (before != after).sum() > 10
    assert list(result.areas["pixels"]) == [(after == code).sum() for code in result.areas["code"]]
    polygons = gpd.read_file(result.files["polygons"])
    assert polygons.groupby("code")["pixels"].sum().to_dict() == {
        row.code: row.pixels for row in result.areas.itertuples() if row.pixels
    }
    # A later plain map leaves nothing of the tidied one behind.
    map_into(tmp_path / "tidied")
    assert contents(tmp_path / "tidied") == contents(tmp_path / "plain")
    assert {path.name for path in (tmp_path / "tidied").iterdir()} == set(FILES)


def test_a_project_that_is_renamed_or_wants_less_leaves_nothing_old_behind(tmp_path):
    folder = make_small_project(tmp_path / "miniature")
    run(Job(load_project(folder)), ["train", "classify"])
    maps, written = folder / "outputs" / "map", (folder / "project.toml").read_text(encoding="utf-8")
    item, cover = read_json(maps / "item.json"), (maps / "cover.tif").stat().st_mtime_ns
    renamed = written.replace("A miniature of the Sorrel Basin", "Sorrel in small")
    (folder / "project.toml").write_text(renamed, encoding="utf-8")
    assert run(Job(load_project(folder)), ["classify"]) == {"classify": None}
    now = read_json(maps / "item.json")
    assert (now["id"], now["properties"].pop("title")) == ("Sorrel-in-small", "Sorrel in small")
    del item["id"], item["properties"]["title"], now["id"]
    assert now == item
    assert (maps / "cover.tif").stat().st_mtime_ns == cover
    assert [s.state for s in status(load_project(folder)) if s.name == "classify"] == ["done"]
    (folder / "project.toml").write_text(renamed + "[map]\nconfidence = false\nreach = false\n", encoding="utf-8")
    assert run(Job(load_project(folder)), ["classify"])["classify"] is not None
    assert {path.name for path in maps.iterdir()} == {"cover.tif", "cover.tif.aux.xml", "areas.csv", "item.json"}


def run_killed(map_into, out, after_lines, pause_s):
    """Map in a forked process and kill it once its journal has so many lines. Returns whether it was killed."""
    process = multiprocessing.get_context("fork").Process(
        target=map_into, args=(out, replace(OPTIONS, block_px=8, jobs=2)), daemon=True
    )
    process.start()
    journal = out / FOLDER / "journal.jsonl"
    while process.is_alive():
        if journal.exists() and journal.read_bytes().count(b"\n") >= after_lines:
            time.sleep(pause_s)
            break
        time.sleep(0.001)
    process.kill()
    process.join()
    return process.exitcode != 0


@pytest.mark.skipif(sys.platform == "win32", reason="forks")
@pytest.mark.filterwarnings("ignore:This process:DeprecationWarning")
@pytest.mark.parametrize(("block_px", "stored", "times"), [(96, 0, 1), (16, 2, 1), (16, 2, 2)])
def test_ctrl_c_ends_soon_and_keeps_what_is_done(made, tmp_path, block_px, stored, times):
    _, model, _, map_into = made
    map_into(tmp_path / "first")  # compiles what is not yet compiled
    # A model so slow that a block of 96 pixels takes a quarter of a minute.
    slow = model.predict_both

    def predict_both(pixels):
        time.sleep(len(pixels) / 800)
        return slow(pixels)

    def interrupted():
        # Whoever runs the tests in the background has Ctrl-C ignored in all that is begun from here.
        signal.signal(signal.SIGINT, signal.default_int_handler)
        with suppress(KeyboardInterrupt):
            map_into(tmp_path, replace(OPTIONS, block_px=block_px, jobs=2))
            os._exit(0)
        os._exit(1)

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(blocks, "_ROWS", 200)
        patch.setattr(type(model), "predict_both", lambda self, pixels: predict_both(pixels))
        process = multiprocessing.get_context("fork").Process(target=interrupted, daemon=True)
        process.start()
        journal = tmp_path / FOLDER / "journal.jsonl"
        while not (journal.exists() and journal.read_bytes().count(b"\n") > stored):
            assert process.is_alive()
            time.sleep(0.01)
        time.sleep(0.5)
        start = time.monotonic()
        for _ in range(times):
            os.kill(process.pid, signal.SIGINT)
            time.sleep(0.05)
        process.join(20)
        assert time.monotonic() - start < 2
        assert process.exitcode == 1
    assert not (tmp_path / "cover.tif").exists()
    done = map_into(tmp_path, replace(OPTIONS, block_px=block_px))
    assert done.resumed_blocks >= stored
    assert (tmp_path / "cover.tif").exists()


def test_an_error_in_one_block_ends_the_work_while_others_wait(made, tmp_path):
    _, _, scene, map_into = made
    lost = replace(scene, bands=tuple(replace(band, path="/nowhere/b.tif") for band in scene.bands))
    with pytest.raises(DataError, match="no such file"):
        map_into(tmp_path, replace(OPTIONS, jobs=2), scene=lost)


@pytest.mark.skipif(sys.platform == "win32", reason="forks")
@pytest.mark.filterwarnings("ignore:This process:DeprecationWarning")
@pytest.mark.parametrize("kills", [12, pytest.param(100, marks=pytest.mark.study)])
def test_killed_at_random_moments_the_map_is_the_same(made, tmp_path, kills):
    map_into = made[-1]
    map_into(tmp_path / "straight")
    choose = random.Random(5)
    killed = 0
    for after in sorted(choose.randrange(1, 12 * 15 + 2) for _ in range(kills)):
        killed += run_killed(map_into, tmp_path / "killed", after, choose.uniform(0, 0.02))
    assert killed >= 10
    map_into(tmp_path / "killed", replace(OPTIONS, block_px=8))
    assert contents(tmp_path / "straight") == contents(tmp_path / "killed")
    assert {path.name for path in (tmp_path / "killed").iterdir() if ".landassay-part" not in path.name} == set(FILES)
