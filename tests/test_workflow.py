"""Stages know when they are stale; the same inputs give the same bytes; a failed stage loses nothing."""

from __future__ import annotations

import shutil

import geopandas as gpd
import numpy as np
import pytest
import rasterio
from small_project import read_json

from classify.errors import DataError
from classify.files import sha256
from classify.settings import load_project
from classify.workflow import Job, run, status

MADE = ("training/pixels.parquet", "model/model.skops", "map/cover.tif", "map/confidence.tif", "map/areas.csv",
        "assessment/assessment.json")  # fmt: skip


def states(folder):
    return {stage.name: stage.state for stage in status(load_project(folder))}


@pytest.fixture
def finished(finished_project, tmp_path):
    """A copy of a finished project that a test may change."""
    return shutil.copytree(finished_project, tmp_path / "copy")


def edit(folder, old, new):
    file = folder / "project.toml"
    text = file.read_text(encoding="utf-8")
    assert old in text
    file.write_text(text.replace(old, new), encoding="utf-8")


def test_everything_is_done_after_a_run_and_nothing_is_run_again(finished):
    assert set(states(finished).values()) == {"done"}
    assert set(run(Job(load_project(finished))).values()) == {None}


def test_touching_a_file_without_changing_it_leaves_stages_done(finished):
    (finished / "training.gpkg").touch()
    assert set(states(finished).values()) == {"done"}


@pytest.mark.parametrize(
    ("old", "new", "stale"),
    [
        ("trees = 30", "trees = 31", {"train", "classify", "assess", "report"}),
        ('indices = ["ndvi"]', "", {"review", "train", "classify", "assess", "report"}),
        ('label = "observed"', 'label = "observed"\n[map]\nconfidence = false', {"classify", "assess", "report"}),
        ('client = "Sorrel Basin Water Board"', 'client = "Another"', {"report"}),
    ],
)
def test_a_changed_setting_makes_stale_what_reads_it_and_what_follows(finished, old, new, stale):
    edit(finished, old, new)
    assert {name for name, state in states(finished).items() if state == "stale"} == stale


def test_a_changed_label_in_the_reference_sample_makes_only_assessment_and_report_stale(finished):
    points = gpd.read_file(finished / "reference.gpkg")
    points.loc[0, "observed"] = "Water"
    points.to_file(finished / "reference.gpkg", layer="reference")
    assert {name for name, state in states(finished).items() if state == "stale"} == {"assess", "report"}


def test_a_missing_output_is_made_again_with_the_same_bytes(finished):
    before = sha256(finished / "outputs" / "map" / "cover.tif")
    (finished / "outputs" / "map" / "cover.tif").unlink()
    assert states(finished)["classify"] == "missing"
    run(Job(load_project(finished)))
    assert sha256(finished / "outputs" / "map" / "cover.tif") == before


def test_the_same_bytes_whatever_the_number_of_jobs(finished, small_project):
    run(Job(load_project(small_project), jobs=3))
    for name in MADE:
        assert sha256(small_project / "outputs" / name) == sha256(finished / "outputs" / name), name


def test_the_record_names_inputs_as_written_with_their_hashes(finished):
    record, cover = read_json(finished / "outputs" / "run.json"), finished / "outputs" / "map" / "cover.tif"
    assert record["inputs"]["bands.tif"]["sha256"] == sha256(finished / "bands.tif")
    assert not any(str(finished.parent) in str(value) for value in (record["inputs"], record["stages"]))
    assert record["settings"]["model"]["trees"] == 30
    assert record["stages"]["classify"]["outputs"]["map/cover.tif"] == sha256(cover)


def test_a_damaged_record_only_makes_stages_stale(finished):
    (finished / "outputs" / "run.json").write_text("{ half", encoding="utf-8")
    assert set(states(finished).values()) == {"stale"}


def test_a_later_stage_alone_says_what_it_needs(small_project):
    with pytest.raises(DataError, match=r"(?s)'classify' needs the result of 'train'.*landassay train"):
        run(Job(load_project(small_project)), ["classify"])
    assert not (small_project / "outputs").exists()


def test_a_stage_run_alone_on_a_stale_one_says_so_and_is_done_again_after_it(finished):
    before = sha256(finished / "outputs" / "map" / "cover.tif")
    edit(finished, "trees = 30", "trees = 7")
    edit(finished, 'client = "Sorrel Basin Water Board"', 'client = "Another"')
    alone = run(Job(load_project(finished)), ["classify"], force=True)["classify"]
    assert any("'train' is stale" in warning.what for warning in alone.warnings)
    assert sha256(finished / "outputs" / "map" / "cover.tif") == before
    assert states(finished)["classify"] == "stale"
    after = run(Job(load_project(finished)))
    assert after["review"] is None
    # Assessment rests on the map alone: whether it is done again depends on whether the map came out another.
    assert all(after[name] is not None for name in ("train", "classify", "report"))
    assert read_json(finished / "outputs" / "model" / "model.json")["settings"]["trees"] == 7
    assert set(states(finished).values()) == {"done"}


def test_what_a_stage_made_besides_is_missed_when_it_is_gone(finished):
    (finished / "outputs" / "map" / "confidence.tif").unlink()
    assert states(finished)["classify"] == "missing"


def test_a_stage_that_fails_keeps_the_map_of_the_run_before(finished):
    before = sha256(finished / "outputs" / "map" / "cover.tif")
    (finished / "bands.tif").write_bytes(b"no raster at all")
    with pytest.raises(DataError, match=r"bands\.tif"):
        run(Job(load_project(finished)))
    assert sha256(finished / "outputs" / "map" / "cover.tif") == before


def test_masked_and_missing_pixels_are_no_data_in_map_and_confidence(finished_project):
    with rasterio.open(finished_project / "outputs" / "map" / "cover.tif") as cover:
        codes = cover.read(1)
    with rasterio.open(finished_project / "outputs" / "map" / "confidence.tif") as confidence:
        percent = confidence.read(1)
    expected = np.zeros(codes.shape, dtype=bool)
    expected[:3, :5] = True
    expected[70:80, 90:105] = True
    np.testing.assert_array_equal(codes == 0, expected)
    np.testing.assert_array_equal(percent == 255, expected)
    assert percent[~expected].max() <= 100
