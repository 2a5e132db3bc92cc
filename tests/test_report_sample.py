"""Points of the report's map: shown where they lie, or not at all."""

from __future__ import annotations

import shutil

import geopandas as gpd
import pytest

from classify.files import read_json
from classify.report.sample import sample_facts
from classify.settings import load_project


@pytest.fixture
def project(finished_project, tmp_path):
    return load_project(shutil.copytree(finished_project, tmp_path / "copy"))


def facts(project):
    outputs = project.folder / "outputs"
    return sample_facts(project, outputs, read_json(outputs / "assessment" / "assessment.json"))


def test_each_point_lies_where_its_file_says(project):
    sample, points = facts(project)
    frame = gpd.read_file(project.folder / "reference.gpkg").set_index("id")
    assert sample is not None
    assert len(points) > 100
    left, right = 500_000, 501_200
    for point in points:
        assert point.reference == frame.loc[int(point.id), "observed"]
        assert point.at_yx[1] == pytest.approx((frame.loc[int(point.id)].geometry.x - left) / (right - left))


def test_where_points_cannot_be_matched_none_is_shown(project):
    # As many points drop out as come in twice: rows no longer match, though their number does.
    file = project.folder / "reference.gpkg"
    frame = gpd.read_file(file)
    frame.loc[:9, "geometry"] = frame.geometry[:10].translate(1_000_000, 0)
    frame.loc[len(frame) - 10 :, ["id", "observed"]] = frame.loc[10:19, ["id", "observed"]].to_numpy()
    frame.loc[len(frame) - 10 :, "geometry"] = frame.geometry[10:20].to_numpy()
    file.unlink()
    frame.to_file(file, layer="reference")
    sample, points = facts(project)
    assert sample is not None
    placed = {point.id for point in points}
    for point in points:
        found = frame[frame["id"].astype(str) == point.id].iloc[0]
        assert point.reference == found["observed"]
    assert not placed or len(placed) == len(points)
