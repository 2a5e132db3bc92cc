"""The project file: every problem at once, with key path, offending value and nearest valid name."""

from __future__ import annotations

import copy
import json
import re
from pathlib import Path

import jsonschema
import pytest
from hypothesis import given
from hypothesis import strategies as st

from classify.errors import SettingsError
from classify.settings import configs_folder, load_preset, load_project, parse_project, preset_names, project_schema
from classify.settings.starter import project_text

VALID = {
    "project": {"title": "Ground cover, Sorrel Basin", "seed": 7},
    "scene": {"bands": {"red": "red.tif", "nir": {"file": "nir.tif", "scale": 0.0001}}},
    "class": [{"code": 1, "name": "Pasture"}, {"code": 2, "name": "Water", "colour": "#0072b2"}],
    "training": {"polygons": "training.gpkg", "label": "cover"},
}
FILE = Path("/somewhere/project.toml")


def changed(path: str, value: object) -> dict:
    """VALID with one key set (or removed when value is None)."""
    data = copy.deepcopy(VALID)
    *parents, last = path.split("/")
    place = data
    for part in parents:
        place = place[int(part)] if isinstance(place, list) else place.setdefault(part, {})
    if value is None:
        del place[last]
    else:
        place[last] = value
    return data


def problems_of(data: dict) -> list:
    with pytest.raises(SettingsError) as caught:
        parse_project(data, FILE)
    return list(caught.value.problems)


def test_valid_file_gives_defaults_and_absolute_paths():
    project = parse_project(VALID, FILE)
    assert project.model.kind == "random forest"
    assert project.report.confidence_level == 0.95
    assert project.scene.bands["red"].file == "red.tif"
    assert project.path("red.tif") == str(Path("/somewhere/red.tif").absolute())
    assert project.path("/vsicurl/https://example.org/a.tif").startswith("/vsicurl/")
    assert project.path("s3://bucket/a.tif") == "s3://bucket/a.tif"


def test_missing_colours_are_filled_without_repeating_a_given_one():
    project = parse_project(VALID, FILE)
    colours = [c.colour for c in project.classes]
    assert colours[1] == "#0072b2"
    assert len(set(colours)) == 2


@pytest.mark.parametrize(
    ("path", "value", "where", "what"),
    [
        ("project/seed", -1, "project.seed", "-1"),
        ("project/title", None, "project.title", "missing"),
        ("project/titel", "x", "project.titel", "not known"),
        ("class/0/code", 0, "class[1].code", "found 0"),
        ("class/0/code", 256, "class[1].code", "found 256"),
        ("class/0/colour", "green", "class[1].colour", "'green'"),
        ("class", [{"code": 1, "name": "Only"}], "class", "at least 2"),
        ("class", [{"code": 1, "name": "A"}, {"code": 1, "name": "B"}], "class", "code 1"),
        ("class", [{"code": 1, "name": "A"}, {"code": 2, "name": "a"}], "class", "name 'a'"),
        ("model/kind", "forest", "model.kind", "'forest'"),
        ("scene/grid", "blue", "scene", "'blue'"),
        ("scene/bands", {"2nir": "a.tif"}, "scene.bands", "'2nir'"),
        ("report/confidence_level", 1.5, "report.confidence_level", "1.5"),
        ("report/area_unit", "acres", "report.area_unit", "'acres'"),
        ("features/formulas", {"my ratio": "nir"}, "features.formulas", "'my ratio'"),
    ],
)
def test_each_problem_names_its_key_and_value(path, value, where, what):
    found = problems_of(changed(path, value))
    assert len(found) == 1, [str(problem) for problem in found]
    assert found[0].where == f"project.toml: {where}"
    assert what in found[0].what


def test_nearest_valid_name_is_offered():
    assert "'title'" in problems_of(changed("project/titel", "x"))[0].fix
    assert "'colour'" in problems_of(changed("class/1/color", "#000000"))[0].fix
    assert "'scale'" in next(p.fix for p in problems_of(changed("scene/bands/nir/scal", 1)) if "not known" in p.what)
    assert "'random forest'" in problems_of(changed("model/kind", "random forrest"))[0].fix


def test_all_problems_are_reported_at_once():
    data = changed("project/seed", "many")
    data["class"][0]["code"] = 0
    data["training"].pop("label")
    data["extra"] = {}
    assert {p.where.split(": ")[1] for p in problems_of(data)} == {
        "project.seed", "class[1].code", "training.label", "extra",
    }  # fmt: skip


def test_reading_from_disk_names_the_file_and_the_line(tmp_path):
    with pytest.raises(SettingsError, match="no project file"):
        load_project(tmp_path)
    file = tmp_path / "project.toml"
    file.write_text("[project]\ntitle = \nseed = 1", encoding="utf-8")
    with pytest.raises(SettingsError, match=r"(?s)project\.toml.*line 2"):
        load_project(tmp_path)
    file.write_bytes(b"[project]\ntitle = '\xff'")
    with pytest.raises(SettingsError, match="UTF-8"):
        load_project(file)


# Values that TOML can hold, nested.
anything = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=12),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=8), inner, max_size=3),
    max_leaves=6,
)


SECTIONS = ("project", "scene", "class", "training", "features", "model", "map", "reference", "report")


@given(section=st.sampled_from(SECTIONS), value=anything)
def test_whatever_a_section_holds_only_our_error_comes_out(section, value):
    data = copy.deepcopy(VALID)
    data[section] = value
    try:
        parse_project(data, FILE)
    except SettingsError as error:
        assert all(problem.where.startswith("project.toml") for problem in error.problems)


def test_schema_accepts_what_the_program_accepts_and_refuses_unknown_keys():
    schema = project_schema()
    jsonschema.Draft202012Validator.check_schema(schema)
    validator = jsonschema.Draft202012Validator(schema)
    assert validator.is_valid(VALID)
    assert not validator.is_valid(changed("project/titel", "x"))
    assert not validator.is_valid(changed("class/0/code", 0))


def test_presets_are_copies_whatever_the_case_and_unknown_ones_list_the_valid(tmp_path):
    assert (configs_folder() / "sensors").is_dir()
    name = preset_names("sensors")[0]
    first = load_preset("sensors", name.upper())
    first["changed"] = True
    assert "changed" not in load_preset("sensors", name)
    with pytest.raises(SettingsError, match=f"(?s)'no such sensor'.*{name}"):
        load_preset("sensors", "no such sensor")


AT_REST = [number for number, line in enumerate(project_text().splitlines()) if re.match(r"# [a-z_]+ = ", line)]


@pytest.mark.parametrize("number", AT_REST)
def test_every_setting_at_rest_in_a_new_project_can_be_taken_into_use(number, tmp_path):
    """With the # of one line taken away, or of its whole section where that is at rest, the file is still a project."""
    lines = project_text().splitlines()
    start = next(n for n in range(number, 0, -1) if lines[n].startswith(("[", "# [")))
    end = next(n for n in range(number, len(lines)) if not lines[n])
    wake = range(start, end) if lines[start].startswith("# [") else [number]
    text = "\n".join(line.removeprefix("# ") if n in wake else line for n, line in enumerate(lines))
    (tmp_path / "project.toml").write_text(text, encoding="utf-8")
    project = load_project(tmp_path)
    assert lines[number].split()[1] in json.dumps(project.model_dump(exclude_unset=True, mode="json"))
