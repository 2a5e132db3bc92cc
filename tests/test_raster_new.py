"""`landassay new`: a complete, valid, commented project file, never written over one that is there."""

from __future__ import annotations

import json
import re
import tomllib
from dataclasses import replace
from pathlib import Path

import pytest
from click.testing import CliRunner
from hypothesis import given
from hypothesis import strategies as st

from classify.cli.new import command
from classify.errors import OutputError
from classify.settings import load_project, parse_project, project_schema
from classify.settings.starter import BandDraft, MaskDraft, SceneDraft, project_text, start_project
from classify.text import unseen


def test_a_plain_new_project_is_valid_and_says_that_nothing_was_read(tmp_path):
    result = CliRunner().invoke(command, [str(tmp_path / "deep" / "map"), "--seed", "41"])
    assert result.exit_code == 0, result.output
    assert "Nothing was read" in result.output
    project = load_project(tmp_path / "deep" / "map")
    assert project.project.seed == 41
    assert project.scene.sensor == "sentinel-2-l2a"
    assert project.features.indices == ["ndvi", "ndti"]


def test_a_project_that_is_there_is_left_alone(tmp_path):
    file = tmp_path / "project.toml"
    file.write_text("mine", encoding="utf-8")
    with pytest.raises(OutputError, match="left as it is"):
        start_project(tmp_path)
    assert file.read_text(encoding="utf-8") == "mine"
    assert list(tmp_path.iterdir()) == [file]


def test_the_schema_is_printed_and_nothing_written(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    result = CliRunner().invoke(command, ["--schema"])
    assert json.loads(result.output) == project_schema()
    assert not list(tmp_path.iterdir())


def test_every_setting_at_rest_is_valid_when_it_is_woken():
    main = SceneDraft("Sorrel Basin", (BandDraft("red", "a.tif"), BandDraft("nir", "b.tif")), grid="red", date="dry")
    draft = replace(main, dates=(replace(main, date="wet", grid=None),))
    resting = re.compile(r"^# (\[[a-z_.]+\]|\w+ = .*)$")
    lines = [resting.sub(r"\1", line) for line in project_text(draft).splitlines()]
    woken = tomllib.loads("\n".join(lines))
    assert "reject" in woken["scene"]["mask"]
    project = parse_project(woken, Path("project.toml"))
    assert project.reference is not None
    assert project.scene.composite is not None
    assert project.scene.ancillary["geology"].categorical
    assert project.features.texture
    assert project.training.exclude


# What a project file may hold: text that can be seen.
text = st.text(min_size=1, max_size=20).filter(lambda s: s.strip() == s and s and unseen(s) is None)
number = st.none() | st.floats(-1e6, 1e6, allow_nan=False)
band = st.builds(
    BandDraft, role=st.from_regex(r"[a-z_][a-z0-9_]{0,8}", fullmatch=True), file=text, band=st.integers(1, 300),
    scale=number, offset=number, nodata=number, wavelength_nm=st.none() | st.floats(0.1, 1e5),
    note=st.text(max_size=20),
)  # fmt: skip


@given(
    draft=st.builds(
        SceneDraft, title=text, bands=st.lists(band, min_size=1, max_size=5, unique_by=lambda b: b.role).map(tuple),
        sensor=st.none() | st.just("sentinel-2-l2a"), scale=number, offset=number, nodata=number,
        assumptions=st.lists(st.text(max_size=30), max_size=2).map(tuple),
        mask=st.none() | st.builds(MaskDraft, file=text, band=st.integers(1, 9), reject=st.just(("cloud",))),
    )
)  # fmt: skip
def test_whatever_was_found_is_read_back_as_it_was(tmp_path_factory, draft):
    if draft.mask and not draft.sensor:
        return
    project = parse_project(tomllib.loads(project_text(draft)), tmp_path_factory.getbasetemp() / "project.toml")
    assert project.project.title == draft.title
    assert (project.scene.scale, project.scene.offset, project.scene.nodata) == (
        draft.scale,
        draft.offset,
        draft.nodata,
    )
    assert list(project.scene.bands) == [b.role for b in draft.bands]
    for found in draft.bands:
        read = project.scene.bands[found.role]
        for key in ("file", "band", "scale", "offset", "nodata", "wavelength_nm"):
            assert getattr(read, key) == getattr(found, key)
    if draft.mask:
        assert (project.scene.mask.file, project.scene.mask.band) == (draft.mask.file, draft.mask.band)
