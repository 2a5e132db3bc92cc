"""What counts as finished rests on what lies there: inputs that change meanwhile, results that were changed, clocks."""

from __future__ import annotations

import os
import shutil

import geopandas as gpd
import numpy as np
import pytest
import rasterio
from rasterio.windows import Window
from small_project import read_json

from classify import workflow
from classify.files import sha256
from classify.mapping.unfinished import FOLDER
from classify.settings import load_project
from classify.workflow import Job, run, status


def states(folder):
    return {stage.name: stage.state for stage in status(load_project(folder))}


@pytest.fixture
def finished(finished_project, tmp_path):
    """A copy of a finished project that a test may change."""
    return shutil.copytree(finished_project, tmp_path / "copy")


def other_polygons(folder):
    polygons = gpd.read_file(folder / "training.gpkg").iloc[:-2]
    (folder / "training.gpkg").unlink()
    polygons.to_file(folder / "training.gpkg", layer="training")


def other_scene(folder):
    with rasterio.open(folder / "mask.tif", "r+") as mask:
        mask.write(np.full((1, 5, 5), 3, dtype=np.uint8), window=Window(20, 20, 5, 5))


def other_settings(folder):
    file = folder / "project.toml"
    file.write_text(file.read_text(encoding="utf-8").replace("trees = 30", "trees = 31"), encoding="utf-8")


@pytest.fixture
def meanwhile(monkeypatch):
    """Do something while training reads its polygons, once."""

    def arrange(happening):
        read = workflow.read_polygons
        todo = [happening]

        def reading(*args):
            found = read(*args)
            if todo:
                todo.pop()()
            return found

        monkeypatch.setattr(workflow, "read_polygons", reading)

    return arrange


@pytest.mark.parametrize(("change", "name"), [(other_polygons, "training.gpkg"), (other_scene, "mask.tif")])
def test_an_input_replaced_while_it_is_read_is_said_and_the_stage_stays_stale(finished, meanwhile, change, name):
    meanwhile(lambda: change(finished))
    before = (finished / name).read_bytes()
    result = run(Job(load_project(finished)), ["review"], force=True)["review"]
    assert any(name in warning.where and "changed while" in warning.what for warning in result.warnings)
    assert states(finished)["review"] == "stale"
    # Nor may it count as done when the old file comes back: nobody knows which of the two was read.
    (finished / name).write_bytes(before)
    assert states(finished)["review"] == "stale"


def test_settings_replaced_while_a_run_goes_on_are_those_of_the_next_run(finished, meanwhile):
    meanwhile(lambda: other_settings(finished))
    run(Job(load_project(finished)), ["review", "train"], force=True)
    assert read_json(finished / "outputs" / "run.json")["settings"]["model"]["trees"] == 30
    assert states(finished)["review"] == "done"
    assert states(finished)["train"] == "stale"


def test_a_result_that_was_changed_by_hand_is_known_and_made_again(finished):
    areas = finished / "outputs" / "map" / "areas.csv"
    before = areas.read_bytes()
    areas.write_bytes(before.replace(b"Pasture", b"Pastures"))
    found = {stage.name: stage for stage in status(load_project(finished))}
    assert found["classify"].state == "stale"
    assert "outputs/map/areas.csv" in found["classify"].why
    assert {name for name, stage in found.items() if stage.state == "done"} == {"review", "train"}
    run(Job(load_project(finished)))
    assert areas.read_bytes() == before
    assert set(states(finished).values()) == {"done"}


def test_half_of_another_map_does_not_count_as_this_one_when_the_settings_come_back(finished):
    """A run with other settings is killed after it has delivered one file; then the old settings come back."""
    confidence = finished / "outputs" / "map" / "confidence.tif"
    before = sha256(confidence)
    with rasterio.open(confidence, "r+", IGNORE_COG_LAYOUT_BREAK=True) as other:
        other.write(np.full((1, 5, 5), 17, dtype=np.uint8), window=Window(50, 50, 5, 5))
    assert states(finished)["classify"] == "stale"
    run(Job(load_project(finished)))
    assert sha256(confidence) == before
    assert set(states(finished).values()) == {"done"}


def test_a_file_replaced_within_one_step_of_the_clock_is_not_taken_for_the_old_one(small_project, meanwhile):
    """Disks whose clocks step by seconds give two contents of the same length the same time of change."""
    file = small_project / "training.gpkg"
    file.touch()
    stamp = file.stat().st_mtime_ns

    def replace():
        content = bytearray(file.read_bytes())
        content[-1] ^= 1
        file.write_bytes(content)
        os.utime(file, ns=(stamp, stamp))

    meanwhile(replace)
    result = run(Job(load_project(small_project)), ["review"])["review"]
    assert any("training.gpkg" in warning.where for warning in result.warnings)
    assert states(small_project)["review"] == "stale"


@pytest.mark.parametrize("years", [-30, 30])
def test_times_of_files_long_ago_or_in_the_future_change_nothing(small_project, years):
    """A clock that was set back or forward: times of change are compared for being the same, never for order."""
    for path in small_project.iterdir():
        stamp = path.stat().st_mtime + years * 365 * 86_400
        os.utime(path, (stamp, stamp))
    run(Job(load_project(small_project)), ["review"])
    assert states(small_project)["review"] == "done"
    for path in small_project.rglob("*"):
        stamp = path.stat().st_mtime - 86_400
        os.utime(path, (stamp, stamp))
    assert states(small_project)["review"] == "done"
    other_scene(small_project)
    assert states(small_project)["review"] == "stale"


def test_what_an_interrupted_map_had_kept_goes_once_the_map_is_up_to_date(finished):
    scratch = finished / "outputs" / "map" / FOLDER
    scratch.mkdir()
    (scratch / "cover.bytes").write_bytes(b"half a map")
    run(Job(load_project(finished)))
    assert not scratch.exists()
