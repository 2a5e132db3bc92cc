"""`landassay verify`: a delivered report passes; whatever is changed in it is found and named."""

from __future__ import annotations

import dataclasses
import json
import shutil
from pathlib import Path

import openpyxl
import pandas as pd
import pytest
from click.testing import CliRunner
from report_projects import change_project, screening_project

from classify.assessment import AssessmentOptions, assess
from classify.cli.main import cli
from classify.errors import DataError
from classify.files import sha256
from classify.report import gather_facts, verify, write_report
from classify.report.gather import accuracy_facts


@pytest.fixture(scope="module")
def delivered(tmp_path_factory) -> Path:
    folder = tmp_path_factory.mktemp("verify")
    write_report(gather_facts(change_project(folder), folder / "outputs"), folder / "outputs" / "report")
    return folder / "outputs" / "report"


@pytest.fixture
def copy(delivered, tmp_path) -> Path:
    return Path(shutil.copytree(delivered, tmp_path / "copy"))


def seal(folder: Path) -> None:
    """Make the manifest fit the files again, as a forger would."""
    manifest = json.loads((folder / "manifest.json").read_text("utf-8"))
    manifest["files"] = {name: sha256(folder / name) for name in manifest["files"]}
    (folder / "manifest.json").write_text(json.dumps(manifest), encoding="utf-8")


def test_a_report_as_delivered_is_sound_wherever_it_lies(copy):
    result = verify(copy)
    assert result.sound, result.findings
    assert result.derived > 300 and result.printed > 300 and result.notes == ()


def test_a_screening_report_is_sound(tmp_path):
    outputs = tmp_path / "outputs"
    write_report(gather_facts(screening_project(tmp_path), outputs), outputs / "report")
    assert verify(outputs / "report").sound


@pytest.mark.parametrize("name", ["report.html", "report.pdf", "tables.xlsx", "data/points.csv"])
def test_a_changed_file_is_named(copy, name):
    with (copy / name).open("ab") as stream:
        stream.write(b" ")
    assert name in {finding.where for finding in verify(copy).findings}


def test_a_missing_file_is_named(copy):
    (copy / "report.pdf").unlink()
    assert ("report.pdf", "the file is missing") in {(f.where, f.what) for f in verify(copy).findings}


@pytest.mark.parametrize("name", ["points.csv", "strata.csv", "areas.csv", "assessment.json", "method.json"])
@pytest.mark.parametrize("content", [b"", b"\x00\xff\xfe", b"a,b\n1\n", b"{}", b'"stratum\n'])
def test_a_mangled_table_is_listed_among_what_else_is_wrong(copy, name, content):
    (copy / "data" / name).write_bytes(content)
    seal(copy)
    assert any("again" in finding.what for finding in verify(copy).findings)


def test_a_point_relabelled_and_resealed_is_found_by_deriving_again(copy):
    points = pd.read_csv(copy / "data" / "points.csv", dtype=str, keep_default_na=False)
    points.loc[0, "reference"] = points["reference"].iloc[-1]
    points.to_csv(copy / "data" / "points.csv", index=False)
    seal(copy)
    places = [f.where for f in verify(copy).findings]
    assert any("overall_accuracy.estimate" in place for place in places)
    assert any("matrix_counts[0][0]" in place for place in places)


def test_a_better_number_on_the_page_is_found(copy):
    page = (copy / "report.html").read_text("utf-8")
    assert page.count(">88.0</td>") >= 1
    (copy / "report.html").write_text(page.replace(">88.0</td>", ">98.0</td>", 1), encoding="utf-8")
    seal(copy)
    findings = verify(copy).findings
    assert len(findings) == 1
    assert "accuracy, row 1" in findings[0].where and "'98.0'" in findings[0].what and "'88.0'" in findings[0].what


def test_a_better_number_in_the_workbook_is_found(copy):
    book = openpyxl.load_workbook(copy / "tables.xlsx")
    book["accuracy"]["B5"] = 0.98
    book.save(copy / "tables.xlsx")
    seal(copy)
    assert any(f.where.startswith("tables.xlsx: accuracy, row 1") for f in verify(copy).findings)


def test_a_manifest_cannot_point_outside_its_folder(copy):
    manifest = {"schema": 1, "files": {"../outside.txt": "00"}}
    (copy.parent / "outside.txt").write_text("x")
    (copy / "manifest.json").write_text(json.dumps(manifest), encoding="utf-8")
    assert "outside the folder" in verify(copy).findings[0].what


def test_a_folder_that_is_no_report_is_one_message(tmp_path):
    with pytest.raises(DataError, match=r"manifest\.json: there is no such file"):
        verify(tmp_path)


def test_command_exits_with_one_and_says_where(copy):
    runner = CliRunner()
    good = runner.invoke(cli, ["verify", str(copy)])
    assert good.exit_code == 0 and "nothing differs" in good.stdout
    (copy / "tables.xlsx").unlink()
    bad = runner.invoke(cli, ["verify", str(copy), "--json"])
    assert bad.exit_code == 1
    assert json.loads(bad.stdout)["sound"] is False


def test_regions_second_labels_and_unlabelled_points_are_reported_and_derived_again(tmp_path):
    facts = gather_facts(change_project(tmp_path), tmp_path / "outputs")
    points = facts.sample.points.copy()
    points["region"] = ["North" if i % 3 else "South" for i in range(len(points))]
    points["alternate"] = ["Stable forest" if i % 9 == 0 else "" for i in range(len(points))]
    points.loc[:5, "reference"] = ""
    method = {**facts.sample.method, "classes": tuple(facts.sample.method["classes"])}
    content = assess(points, facts.sample.strata, AssessmentOptions(**method)).to_json()
    sample = dataclasses.replace(facts.sample, points=points, assessment=content)
    facts = dataclasses.replace(facts, sample=sample, accuracy=accuracy_facts(content, Path("assessment.json")))
    folder = tmp_path / "outputs" / "report"
    write_report(facts, folder)
    assert verify(folder).sound
    page = (folder / "report.html").read_text("utf-8")
    assert 'id="table-regions"' in page and 'id="table-region_areas"' in page
    assert "6 points could not be labelled" in page and "first or second choice" in page
