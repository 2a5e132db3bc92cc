"""Files appear whole or not at all."""

from __future__ import annotations

import hashlib
import json
import os
from pathlib import Path

import pytest

from classify.errors import DataError, OutputError
from classify.files import TEMPORARY_SUFFIX, read_json, remove_leftovers, replacing, sha256, write_json, write_text

FULL = Path("/dev/full")


def test_a_failure_midway_keeps_the_old_file_and_leaves_nothing_behind(tmp_path):
    target = tmp_path / "areas.csv"
    write_text(target, "old")
    with pytest.raises(ZeroDivisionError), replacing(target) as temporary:
        temporary.write_text("half")
        raise ZeroDivisionError
    assert target.read_text() == "old"
    assert list(tmp_path.iterdir()) == [target]


def test_temporary_name_lies_beside_the_target_with_its_extension(tmp_path):
    with replacing(tmp_path / "deep" / "cover.tif") as temporary:
        assert temporary.parent == tmp_path / "deep"
        assert temporary.suffix == ".tif"
        assert TEMPORARY_SUFFIX in temporary.name
        temporary.write_bytes(b"new")
    assert (tmp_path / "deep" / "cover.tif").read_bytes() == b"new"


def test_a_folder_that_cannot_be_made_is_a_clear_error(tmp_path):
    (tmp_path / "outputs").write_text("a file in the way")
    with pytest.raises(OutputError, match="cannot be written"):
        write_text(tmp_path / "outputs" / "a.txt", "x")
    assert (tmp_path / "outputs").read_text() == "a file in the way"


@pytest.mark.skipif(not FULL.exists(), reason="needs a device that is always full")
def test_a_full_disk_is_a_clear_error_and_keeps_the_old_file(tmp_path):
    target = tmp_path / "a.txt"
    write_text(target, "old")
    with pytest.raises(OutputError, match=r"(?i)no space"), replacing(target), FULL.open("wb", 0) as full:
        full.write(b"x")
    assert target.read_text() == "old"


def test_json_round_trip_and_refusal_of_nan(tmp_path):
    write_json(tmp_path / "a.json", {"name": "Bélier", "value": 0.1})
    assert read_json(tmp_path / "a.json") == {"name": "Bélier", "value": 0.1}
    with pytest.raises(ValueError, match="JSON"):
        write_json(tmp_path / "a.json", {"value": float("nan")})
    assert json.loads((tmp_path / "a.json").read_text(encoding="utf-8"))["value"] == 0.1


def test_broken_json_names_file_and_line(tmp_path):
    (tmp_path / "a.json").write_text('{"a": 1,\n "b": }')
    with pytest.raises(DataError, match=r"(?s)a\.json.*line 2"):
        read_json(tmp_path / "a.json")
    (tmp_path / "a.json").write_text("[1]")
    with pytest.raises(DataError, match="JSON object"):
        read_json(tmp_path / "a.json")


def test_leftovers_of_a_killed_run_are_removed_and_nothing_else(tmp_path):
    (tmp_path / f".cover.12ab{TEMPORARY_SUFFIX}.tif").write_bytes(b"half")
    (tmp_path / "cover.tif").write_bytes(b"whole")
    assert remove_leftovers(tmp_path) == 1
    assert [path.name for path in tmp_path.iterdir()] == ["cover.tif"]


def test_sha256_agrees_with_the_standard_library(tmp_path):
    content = os.urandom(3_000_000)
    (tmp_path / "a").write_bytes(content)
    assert sha256(tmp_path / "a") == hashlib.sha256(content).hexdigest()
