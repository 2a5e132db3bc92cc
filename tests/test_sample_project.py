"""The sample project, whole: what a newcomer gets from the first command, held against the truth it was made from."""

from __future__ import annotations

import re

import golden
import numpy as np
import pandas as pd
import pytest
import rasterio
from click.testing import CliRunner
from rio_cogeo.cogeo import cog_validate
from small_project import read_json

from classify.cli.main import cli


@pytest.fixture(scope="module")
def finished(tmp_path_factory):
    """The sample project after `landassay run`, in a folder without the truth."""
    folder = golden.copy_sample(tmp_path_factory.mktemp("sorrel basin"))
    result = CliRunner().invoke(
        cli, ["run", "--project", str(folder), "--quiet", "--jobs", "2"], catch_exceptions=False
    )
    assert result.exit_code == 0
    return folder


@pytest.fixture(scope="module")
def assessment(finished):
    return read_json(finished / "outputs" / "assessment" / "assessment.json")


@pytest.fixture(scope="module")
def mapped_and_true(finished):
    """Codes of the map and of the truth where the map has a class."""
    with (
        rasterio.open(finished / "outputs" / "map" / "cover.tif") as cover,
        rasterio.open(golden.SAMPLE / "truth.tif") as truth,
    ):
        codes, true = cover.read(1), truth.read(1)
    return codes[codes > 0], true[codes > 0]


def test_the_interval_of_overall_accuracy_holds_the_true_accuracy(assessment, mapped_and_true):
    codes, true = mapped_and_true
    overall = assessment["overall_accuracy"]
    assert overall["lower"] < (codes == true).mean() < overall["upper"]
    assert overall["upper"] - overall["lower"] < 0.08


def test_estimated_areas_are_nearer_to_the_truth_than_their_intervals_are_wide(assessment, mapped_and_true):
    _, true = mapped_and_true
    total = assessment["total_area"]
    held = 0
    for code, name in enumerate(assessment["classes"], start=1):
        area = assessment["area"][name]
        true_area = total * (true == code).mean()
        held += area["lower"] <= true_area <= area["upper"]
        # Interpreters make mistakes that no interval covers; one per cent of the basin leaves room for them.
        assert abs(area["estimate"] - true_area) < 3 * area["standard_error"] + 0.01 * total, name
    assert held >= 5


def test_areas_add_up_to_the_mapped_ground(finished, assessment):
    areas = pd.read_csv(finished / "outputs" / "map" / "areas.csv")
    assert assessment["total_area"] == pytest.approx(areas["area"].sum(), rel=1e-6)
    assert {name: a["mapped"] for name, a in assessment["area"].items()} == pytest.approx(
        dict(zip(areas["name"], areas["area"], strict=True))
    )
    assert sum(a["estimate"] for a in assessment["area"].values()) == pytest.approx(assessment["total_area"])
    assert areas["area_m2"].sum() / areas["pixels"].sum() == pytest.approx(100, rel=2e-3)


def test_dry_grass_and_soils_part_only_with_the_short_wave_infrared(mapped_and_true):
    codes, true = mapped_and_true
    alike = np.isin(true, (3, 4, 5)) & np.isin(codes, (3, 4, 5))
    assert (codes[alike] == true[alike]).mean() > 0.85


def test_maps_are_valid_cloud_optimised_geotiffs(finished):
    for name in ("cover", "confidence"):
        valid, errors, _ = cog_validate(finished / "outputs" / "map" / f"{name}.tif")
        assert valid, errors


def test_planted_faults_of_the_training_polygons_are_said(finished):
    warnings = " ".join(read_json(finished / "outputs" / "run.json")["stages"]["train"]["warnings"])
    assert re.search(r"polygon 96\b.*masked", warnings)
    assert re.search(r"polygons 84 and 95\b", warnings)


def test_the_report_is_one_file_that_names_its_evidence(finished):
    page = (finished / "outputs" / "report" / "report.html").read_text(encoding="utf-8")
    assert not re.search(r"""(?:src|href)\s*=\s*["']?(?:https?:)?//""", page)
    assert "screening accuracy" in page.casefold()
    assert "Sorrel Basin Water Board" in page


def test_results_have_not_drifted(finished):
    found = golden.drift(read_json(golden.FILE), golden.results(finished), golden.versions())
    assert not found, "\n".join([*found, "If this is meant: python tests/golden.py --reason '...'"])


def test_drift_is_seen_strictly_with_the_same_versions_and_loosely_with_others():
    kept = {"versions": {"numpy": "1.0"}, "results": {"a": {"b": 0.5, "c": 1000}, "sound": True}}

    def drifted(b=0.5, c=1000, sound=True, **versions):
        return len(golden.drift(kept, {"a": {"b": b, "c": c}, "sound": sound}, versions or kept["versions"]))

    assert drifted() == drifted(numpy="2.0") == 0
    assert drifted(b=0.5000001) == drifted(c=1001) == drifted(sound=False) == 1
    assert drifted(b=0.51, c=1040, numpy="2.0") == 0
    assert drifted(b=0.53, c=1060, sound=False, numpy="2.0") == 3
    assert len(golden.drift(kept, {"a": {"b": 0.5}}, {})) == 1
