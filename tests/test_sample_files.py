"""A drawn sample in its folder: what people entered in its files stays, whatever is drawn later."""

from __future__ import annotations

import json
import sqlite3
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
import pyogrio
import pytest
from click.testing import CliRunner
from interpret_projects import drawn_project
from shapely.geometry import Point

from classify.assessment.drawn_sample import read_drawn
from classify.cli.main import cli
from classify.errors import DataError, OutputError, SampleError


@pytest.fixture
def project(tmp_path: Path) -> Path:
    return drawn_project(tmp_path / "miniature")


def draw(folder: Path, *args: str) -> dict:
    result = CliRunner().invoke(
        cli, ["draw", "--project", str(folder), "--json", "--quiet", *args], catch_exceptions=False
    )
    assert result.exit_code == 0, result.output
    return json.loads(result.stdout)


def contents(folder: Path) -> dict[str, bytes]:
    return {path.name: path.read_bytes() for path in folder.iterdir()}


def label_csv(path: Path) -> None:
    pd.read_csv(path).assign(observed="Water").to_csv(path, index=False)


def label_geojson(path: Path) -> None:
    found = json.loads(path.read_text())
    found["features"][0]["properties"]["observed"] = "Water"
    path.write_text(json.dumps(found))


def note_in_gpx(path: Path) -> None:
    path.write_text(path.read_text().replace("</name>", "</name><cmt>two trees</cmt>", 1))


@pytest.mark.parametrize("more", [["--add", "12"], ["--add-to", "Water=5"], ["--replace", "5", "--reason", "flooded"]])
@pytest.mark.parametrize(
    ("name", "enter"),
    [("points.csv", label_csv), ("points.geojson", label_geojson), ("points.gpx", note_in_gpx)],
)
def test_labels_in_a_file_that_would_be_written_anew_are_not_lost(project: Path, name: str, enter, more: list[str]):
    folder = project / "outputs" / "sample"
    if "--replace" in more:
        again = project / "again"
        folder.rename(again)
        draw(project, "--points", "40", "--floor", "10", "--reserve", "3")
    enter(folder / name)
    before = contents(folder)
    with pytest.raises(OutputError, match=rf"{name}: this file was changed since it was written here"):
        draw(project, *more)
    assert contents(folder) == before
    # What the message advises: moved away, the labels come in by an import, and the drawing goes on.
    (folder / name).rename(project / f"field-{name}")
    draw(project, *more)
    assert (project / f"field-{name}").read_bytes() == before[name]
    draw(project, "--add", "12")
    table = pd.read_csv(folder / "points.csv")
    assert list(table["id"]) == read_drawn(folder).active_ids and table["observed"].isna().all()


def test_labels_of_a_moved_table_come_in(project: Path):
    folder = project / "outputs" / "sample"
    label_csv(folder / "points.csv")
    (folder / "points.csv").rename(project / "field.csv")
    draw(project, "--add", "12")
    args = ["interpret", "--project", str(project), "--import", str(project / "field.csv"), "--interpreter", "Ada"]
    result = CliRunner().invoke(cli, args, catch_exceptions=False)
    assert "40 labels taken in for Ada" in result.stdout


def test_everything_in_the_geopackage_stays(project: Path):
    path = project / "outputs" / "sample" / "points.gpkg"
    points = geopandas.read_file(path)
    labelled = points.assign(observed=[f"class {i}" for i in points["id"]], slope=points["id"] * 0.5)
    # Saved by a GIS in another CRS, with a column and layers of its own: shapes, and a table without places.
    path.unlink()
    roads = geopandas.GeoDataFrame({"name": ["track"]}, geometry=[Point(3, 4).buffer(5)], crs=points.crs)
    roads.to_file(path, layer="a_roads")
    labelled.to_crs(4326).to_file(path, layer="points", mode="a")
    pyogrio.write_dataframe(pd.DataFrame({"style": ["<dots/>"]}), path, layer="looks", append=True)
    design = draw(project, "--add", "12")
    assert sum(s["n"] for s in design["strata"]) == 52
    assert set(pyogrio.list_layers(path)[:, 0]) == {"a_roads", "points", "looks"}
    assert geopandas.read_file(path, layer="a_roads").geom_equals(roads.geometry).all()
    assert pyogrio.read_dataframe(path, layer="looks")["style"].tolist() == ["<dots/>"]
    after = geopandas.read_file(path, layer="points").set_index("id")
    assert after.loc[points["id"], "observed"].tolist() == labelled["observed"].tolist()
    assert after.loc[points["id"], "slope"].tolist() == labelled["slope"].tolist()
    assert after.loc[41:, "observed"].isna().all() and len(after) == 52
    # The new points lie where the table of the draw has them.
    table = pd.read_csv(path.with_name("points.csv")).set_index("id")
    there = after.to_crs(points.crs).geometry
    np.testing.assert_allclose(np.stack([there.x, there.y]), table.loc[there.index, ["x", "y"]].T, atol=1e-3)
    draw(project, "--add", "12")


def test_a_geopackage_that_is_open_elsewhere_is_left(project: Path):
    path = project / "outputs" / "sample" / "points.gpkg"
    elsewhere = sqlite3.connect(path)
    elsewhere.execute("PRAGMA journal_mode = WAL")
    elsewhere.execute("CREATE TABLE looks (style TEXT)")
    elsewhere.commit()
    with pytest.raises(OutputError, match=r"points\.gpkg is open in another program"):
        draw(project, "--add", "12")
    elsewhere.close()
    draw(project, "--add", "12")
    after = sqlite3.connect(path)
    assert after.execute("SELECT count(*) FROM looks").fetchone() == (0,)
    after.close()


def test_points_without_a_crs_are_refused(project: Path):
    path = project / "outputs" / "sample" / "points.gpkg"
    points = geopandas.read_file(path).set_crs(None, allow_override=True)
    path.unlink()
    with pytest.warns(UserWarning, match="crs"):
        points.to_file(path, layer="points")
    with pytest.raises(DataError, match="no coordinate reference system"):
        draw(project, "--add", "12")


@pytest.mark.parametrize("left", ["points.csv", "points.geojson", "labels.sqlite"])
def test_what_is_left_of_a_sample_is_not_drawn_over(project: Path, left: str):
    folder = project / "outputs" / "sample"
    (folder / "labels.sqlite").touch()
    for path in folder.iterdir():
        if path.name != left:
            path.unlink()
    before = contents(folder)
    with pytest.raises(OutputError, match=f"{left}: a sample was drawn already"):
        draw(project, "--points", "40")
    assert contents(folder) == before


def test_numbers_that_tell_are_cautioned_of(project: Path):
    assert "numbers" not in " ".join(draw(project, "--add", "12")["cautions"])
    cautions = draw(project, "--add-to", "Water=5")["cautions"]
    assert "have the highest numbers" in cautions[-1]
    assert draw(project, "--add-to", "Water=5")["cautions"] == cautions


@pytest.mark.parametrize(
    ("args", "message"),
    [
        (["--add", "9", "--reserve", "2", "--segment", "3"], "--reserve, --segment: only for a first draw"),
        (["--add-to", "Water=9", "--points", "40"], "--points: only for a first draw"),
        (["--replace", "3", "--reason", "x", "--seed", "5"], "--seed: only for a first draw"),
        (["--add", "9", "--reason", "late"], "--reason: only with --replace"),
        (["--points", "40", "--kind", "simple", "--floor", "9"], "--floor: only with --kind stratified"),
        (["--floor", "9"], "--floor: only with --points"),
        (["--in", "Water=9", "--allocation", "equal"], "--allocation: only with --points"),
        (["--points", "40", "--allocation", "equal", "--floor", "9"], "--floor: only with --allocation floor"),
    ],
)
def test_options_that_change_nothing_are_refused(tmp_path: Path, args: list[str], message: str):
    result = CliRunner().invoke(cli, ["draw", "--project", str(tmp_path), *args])
    assert result.exit_code == 2 and message in result.output


def test_points_that_were_moved_are_refused_by_all(project: Path):
    """The design tells grid and CRS of its map, so that places are checked also where that map is gone."""
    path = project / "outputs" / "sample" / "points.gpkg"
    design = json.loads((path.parent / "design.json").read_text())
    assert design["map"]["crs"] == "EPSG:32633"
    points = geopandas.read_file(path)
    label_csv(path.with_name("points.csv"))
    path.with_name("points.csv").rename(project / "field.csv")
    (project / "outputs" / "map" / "cover.tif").unlink()
    imports = ["interpret", "--project", str(project), "--import", str(project / "field.csv"), "--interpreter"]
    points.to_crs(4326).to_file(path, layer="points")
    assert CliRunner().invoke(cli, [*imports, "Ada"], catch_exceptions=False).exit_code == 0
    points.translate(20, 0).to_frame("geometry").assign(id=points["id"]).to_file(path, layer="points")
    with pytest.raises(SampleError, match="40 points do not lie where they were drawn"):
        CliRunner().invoke(cli, [*imports, "Bea"], catch_exceptions=False)
    design["map"]["crs"] = "EPSG:0"
    (path.parent / "design.json").write_text(json.dumps(design))
    with pytest.raises(DataError, match=r"design\.json: map: the grid of the map is not readable"):
        read_drawn(path.parent)
