"""Polygons and points from strangers, and maps that pretend: told or taken, in bounded time, and never trusted."""

from __future__ import annotations

import json
import struct
import time
from contextlib import suppress
from pathlib import Path

import geopandas as gpd
import numpy as np
import pytest
from click.testing import CliRunner
from listener import listening
from shapely.geometry import Polygon
from small_project import CRS, make_small_project
from test_hostile_rasters import claimed, virtual

from classify.cli.main import cli
from classify.errors import LandassayError
from classify.raster.scene import open_scene
from classify.raster.vectors import read_places
from classify.settings import load_project
from classify.training.polygons import read_polygons

X, Y = 500_100.0, 4_199_900.0


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return make_small_project(tmp_path_factory.mktemp("layers") / "miniature")


def told(folder: Path, path: Path, most_s: float = 10.0):
    """Read as training polygons: the set, or the error; never another one, and not for long."""
    project = load_project(folder)
    grid = open_scene(project.scene, project).grid
    training = project.training.model_copy(update={"polygons": str(path)})
    before = time.monotonic()
    try:
        return read_polygons(project.model_copy(update={"training": training}), grid)
    except LandassayError as error:
        return error
    finally:
        assert time.monotonic() - before < most_s


def square(x: float, y: float, size: float = 100) -> list[list[float]]:
    return [[x, y], [x + size, y], [x + size, y - size], [x, y - size], [x, y]]


GEOMETRIES = {
    "bow tie": {"type": "Polygon", "coordinates": [[[X, Y], [X + 90, Y - 90], [X + 90, Y], [X, Y - 90], [X, Y]]]},
    "nothing": None,
    "empty": {"type": "Polygon", "coordinates": []},
    "line": {"type": "LineString", "coordinates": [[X, Y], [X + 50, Y]]},
    "two points": {"type": "Polygon", "coordinates": [[[X, Y], [X, Y]]]},
    "flat": {"type": "Polygon", "coordinates": [[[X, Y], [X + 90, Y], [X + 30, Y], [X, Y]]]},
    "far": {"type": "Polygon", "coordinates": [square(1e300, -1e300)]},
    "huge": {"type": "Polygon", "coordinates": [square(-1e12, 1e12, 2e12)]},
    "three dimensions": {"type": "Polygon", "coordinates": [[[*place, 12.5] for place in square(X, Y)]]},
    "collection": {
        "type": "GeometryCollection",
        "geometries": [{"type": "Polygon", "coordinates": [square(X, Y)]}] * 3,
    },
    "hole outside": {"type": "Polygon", "coordinates": [square(X, Y), square(X + 300, Y)]},
    "same ring twice": {"type": "Polygon", "coordinates": [square(X, Y), square(X, Y)]},
    "ten thousand lobes": {
        "type": "Polygon",
        "coordinates": [
            [[X + i / 20, Y - 60 * (i % 2)] for i in range(10_000)] + [[X + 500, Y - 30], [X, Y - 30], [X, Y]]
        ],
    },
    "ten thousand parts": {
        "type": "MultiPolygon",
        "coordinates": [[square(X + i % 100, Y - i // 100, 1)] for i in range(10_000)],
    },
}


@pytest.mark.parametrize("kind", GEOMETRIES)
def test_strange_shapes_beside_a_sound_one(folder: Path, tmp_path: Path, kind: str) -> None:
    """What is read lies on the grid, is valid and has a class; what is not is named."""
    shapes = [GEOMETRIES[kind], {"type": "Polygon", "coordinates": [square(X + 500, Y - 400)]}]
    document = {
        "type": "FeatureCollection",
        "crs": {"type": "name", "properties": {"name": "urn:ogc:def:crs:EPSG::32633"}},
        "features": [{"type": "Feature", "properties": {"cover": "Water"}, "geometry": shape} for shape in shapes],
    }
    path = tmp_path / "p.geojson"
    path.write_text(json.dumps(document))
    found = told(folder, path)
    if isinstance(found, LandassayError):
        assert "Traceback" not in str(found)
        return
    assert found.frame.geometry.is_valid.all() and np.isfinite(found.frame.total_bounds).all()
    assert len(found.frame) == 2 or found.problems


def test_metres_taken_for_degrees(folder: Path, tmp_path: Path) -> None:
    """A document that says nothing of its CRS is in degrees: these places are nowhere on earth."""
    shape = {"type": "Polygon", "coordinates": [square(X, Y)]}
    document = {
        "type": "FeatureCollection",
        "features": [{"type": "Feature", "properties": {"cover": "Water"}, "geometry": shape}],
    }
    path = tmp_path / "p.geojson"
    path.write_text(json.dumps(document))
    found = told(folder, path)
    assert "outside the scene" in str(found if isinstance(found, LandassayError) else found.problems)


@pytest.mark.parametrize("text", ["NaN", "Infinity", "1e400", '"500100"', "null", "[1]", "true"])
def test_coordinates_that_are_no_numbers(folder: Path, tmp_path: Path, text: str) -> None:
    ring = json.dumps(square(X, Y)).replace("500200.0", text)
    path = tmp_path / "p.geojson"
    path.write_text(
        '{"type": "FeatureCollection", "crs": {"type": "name", "properties": {"name": "urn:ogc:def:crs:EPSG::32633"}}, '
        '"features": [{"type": "Feature", "properties": {"cover": "Water"}, "geometry": {"type": "Polygon", '
        f'"coordinates": [{ring}]}}}}]}}'
    )
    found = told(folder, path)
    assert isinstance(found, LandassayError) or np.isfinite(found.frame.total_bounds).all()


@pytest.mark.parametrize(
    "opening",
    ["[", '{"a":', '{"type": "FeatureCollection", "features": [', '{"type": "GeometryCollection", "geometries": ['],
)
def test_a_document_without_a_floor(folder: Path, tmp_path: Path, opening: str) -> None:
    path = tmp_path / "p.geojson"
    path.write_text(opening * 100_000)
    assert isinstance(told(folder, path), LandassayError)


def test_a_polygon_of_a_million_corners(folder: Path, tmp_path: Path) -> None:
    angle = np.linspace(0, 2 * np.pi, 1_000_000, endpoint=False)
    ring = np.column_stack([X + 300 + 200 * np.cos(angle), Y - 300 + 200 * np.sin(angle)])
    path = tmp_path / "p.gpkg"
    gpd.GeoDataFrame({"cover": ["Water"]}, geometry=[Polygon(ring)], crs=CRS).to_file(path)
    found = told(folder, path, most_s=60)
    assert isinstance(found, LandassayError) or len(found.frame) == 1


def test_a_head_that_claims_two_billion_records(tmp_path: Path) -> None:
    """A shapefile whose table claims as many rows as its field can hold, and has three."""
    path = tmp_path / "p.shp"
    frame = gpd.GeoDataFrame({"cover": ["Water"] * 3}, geometry=gpd.points_from_xy([X] * 3, [Y] * 3), crs=CRS)
    frame.to_file(path)
    for name, place in (("p.dbf", 4), ("p.shx", 24)):
        raw = bytearray((tmp_path / name).read_bytes())
        raw[place : place + 4] = struct.pack("<I" if name.endswith("dbf") else ">I", 2**31 - 1)
        (tmp_path / name).write_bytes(raw)
    before = time.monotonic()
    with suppress(LandassayError):
        assert len(read_places(path, "points")) <= 3
    assert time.monotonic() - before < 10


# --- maps that pretend, wherever the program takes one --------------------------------------------------------------


@pytest.mark.parametrize("name", ["bands.tif", "mask.tif", "outputs/map/cover.tif"])
def test_a_raster_of_a_million_a_side_is_refused_by_every_command(tmp_path: Path, name: str) -> None:
    folder = make_small_project(tmp_path / "miniature")
    (folder / name).parent.mkdir(parents=True, exist_ok=True)
    claimed(folder / name, 10**6, 10**6)
    commands = [["check"], ["train"], ["classify"], ["run"], ["report"]]
    if name.startswith("outputs"):
        commands = [
            ["plan", "--se", "0.02"],
            ["draw", "--points", "30"],
            ["assess"],
            ["report"],
            ["compare", "--map", str(folder / name)],
        ]
    for command in commands:
        before = time.monotonic()
        result = CliRunner().invoke(cli, [*command, "--project", str(folder), "--quiet"])
        assert result.exit_code != 0 and (
            result.exception is None or isinstance(result.exception, (LandassayError, SystemExit))
        ), (
            command,
            result.exception,
        )
        assert time.monotonic() - before < 60


def test_a_map_that_leads_elsewhere_is_not_followed(tmp_path: Path) -> None:
    with listening(tmp_path) as inner:
        folder = make_small_project(tmp_path / "miniature")
        (folder / "outputs" / "map").mkdir(parents=True)
        (folder / "outputs" / "map" / "cover.tif").write_text(virtual(f"http://{inner.host}/a.tif", relative=0))
        for command in (
            ["draw", "--points", "30"],
            ["assess"],
            ["report"],
            ["compare", "--map", str(folder / "outputs/map/cover.tif")],
        ):
            result = CliRunner().invoke(cli, [*command, "--project", str(folder), "--quiet"])
            assert result.exit_code != 0 and isinstance(result.exception, (LandassayError, SystemExit)), (
                command,
                result.exception,
            )
        assert inner.asked == []
