"""Points of the report's map: shown where they lie, or not at all."""

from __future__ import annotations

import shutil

import geopandas as gpd
import numpy as np
import pytest

from classify.assessment import read_reference
from classify.assessment.reference import codes_at
from classify.files import read_json
from classify.report.sample import _aligned, sample_facts
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


def test_points_in_another_order_than_the_sample_are_noticed(project):
    outputs = project.folder / "outputs"
    sample = read_reference(project, outputs / "map" / "cover.tif", outputs)
    codes = codes_at(outputs / "map" / "cover.tif", gpd.read_file(project.folder / "reference.gpkg").geometry)
    codes = codes[codes != 0]
    assert _aligned(sample, codes)
    assert not _aligned(sample, np.roll(codes, 1))
