"""Polygons from every format and CRS, and every way in which a user's file can be wrong."""

from __future__ import annotations

from pathlib import Path

import geopandas as gpd
import numpy as np
import pyproj
import pytest
import shapely
from affine import Affine
from hypothesis import given
from hypothesis import strategies as st
from rasterio.crs import CRS

from classify.errors import DataError, TrainingError
from classify.raster.grid import Grid
from classify.settings import Project, parse_project
from classify.training import PolygonSet, read_polygons
from classify.training.draws import even_draw

GRID = Grid(CRS.from_epsg(32633), Affine(10, 0, 500_000, 0, -10, 4_600_000), 100, 100)


def project(folder: Path, **training: object) -> Project:
    """A project whose only part of interest is [training]."""
    data = {
        "project": {"title": "t"},
        "scene": {"bands": {"red": "red.tif"}},
        "class": [{"code": 3, "name": "Dry grass"}, {"code": 7, "name": "Clay loam"}],
        "training": {"polygons": "p.gpkg", "label": "cover", **training},
    }
    return parse_project(data, folder / "project.toml")


def squares(labels: list[object], **columns: object) -> gpd.GeoDataFrame:
    boxes = [shapely.box(500_100 + 60 * i, 4_599_500, 500_140 + 60 * i, 4_599_540) for i in range(len(labels))]
    return gpd.GeoDataFrame({"cover": labels, **columns}, geometry=boxes, crs="EPSG:32633")


def read(folder: Path, frame: gpd.GeoDataFrame, name: str = "p.gpkg", **training: object) -> PolygonSet:
    path = folder / name
    if path.suffix == ".parquet":
        frame.to_parquet(path)
    else:
        frame.to_file(path)
    return read_polygons(project(folder, polygons=name, **training), GRID)


@pytest.mark.parametrize("name", ["p.gpkg", "p.shp", "p.geojson", "p.parquet"])
@pytest.mark.parametrize("crs", ["EPSG:32633", "EPSG:4326", "EPSG:3857", "EPSG:3035"])
def test_any_format_and_crs_gives_the_same_polygons(tmp_path: Path, name: str, crs: str) -> None:
    original = squares(["Dry grass", "Clay loam", "7", "3"])
    found = read(tmp_path, original.to_crs(crs), name)
    assert found.problems == ()
    assert found.frame["code"].tolist() == [3, 7, 7, 3]
    assert found.frame["class_name"].tolist() == ["Dry grass", "Clay loam", "Clay loam", "Dry grass"]
    assert found.frame["polygon"].tolist() == [1, 2, 3, 4]
    far = shapely.hausdorff_distance(found.frame.geometry.to_numpy(), original.geometry.to_numpy())
    assert far.max() < 0.02
    # pyproj's Geod is the referee of ground areas; UTM squares of 40 m near the central meridian shrink by 0.08 %.
    lonlat = original.to_crs("EPSG:4326").geometry[0]
    assert found.frame["area_m2"][0] == pytest.approx(
        abs(pyproj.Geod(ellps="WGS84").geometry_area_perimeter(lonlat)[0]), rel=1e-3
    )
    assert found.frame["area_m2"][0] == pytest.approx(1600 / 0.9996**2, rel=1e-3)


@pytest.mark.parametrize("codes", [[3, 7], [3.0, 7.0], ["3", " 7 "], ["3.0", "7"]])
def test_codes_as_numbers_or_text(tmp_path: Path, codes: list[object]) -> None:
    assert read(tmp_path, squares(codes)).frame["code"].tolist() == [3, 7]


def test_every_unknown_label_is_reported_at_once_with_the_nearest_name(tmp_path: Path) -> None:
    frame = squares(["dry grass", "Clay  loam", "Clay lom", "Permafrost", "Dry grass", 99])
    frame["cover"] = frame["cover"].astype(str)
    with pytest.raises(TrainingError) as caught:
        read(tmp_path, frame)
    text = str(caught.value)
    assert len(caught.value.problems) == 5
    assert "'dry grass' (polygon 1)" in text
    assert "'Dry grass' only by case or blanks" in text
    assert "'Clay loam' only by case or blanks" in text
    assert "did you mean 'Clay loam'?" in text
    assert "3 = Dry grass, 7 = Clay loam" in text


def test_missing_things_are_named(tmp_path: Path) -> None:
    with pytest.raises(DataError, match=r"no column 'covr'.*\n.*did you mean 'cover'"):
        read(tmp_path, squares(["Dry grass"]), label="covr")
    with pytest.raises(DataError, match="no coordinate reference system"):
        read(tmp_path, squares(["Dry grass"]).set_crs(None, allow_override=True), "nocrs.gpkg")
    with pytest.raises(DataError, match="layer is empty"):
        read(tmp_path, squares([]), "empty.gpkg")
    with pytest.raises(DataError, match="no such file"):
        read_polygons(project(tmp_path, polygons="nowhere.gpkg"), GRID)
    (tmp_path / "broken.gpkg").write_bytes(b"not a database")
    with pytest.raises(DataError, match="cannot be read as polygons"):
        read_polygons(project(tmp_path, polygons="broken.gpkg"), GRID)
    with pytest.raises(TrainingError, match="every polygon lies outside the scene"):
        read(
            tmp_path,
            squares(["Dry grass"]).translate(50_000).to_frame("geometry").assign(cover="Dry grass"),
            "far.gpkg",
        )


def test_layer_must_be_named_where_there_are_several(tmp_path: Path) -> None:
    squares(["Dry grass"]).to_file(tmp_path / "two.gpkg", layer="first")
    squares(["Clay loam"]).to_file(tmp_path / "two.gpkg", layer="second")
    with pytest.raises(DataError, match=r"several layers\n.*first, second"):
        read_polygons(project(tmp_path, polygons="two.gpkg"), GRID)
    with pytest.raises(DataError, match=r"no layer 'third'"):
        read_polygons(project(tmp_path, polygons="two.gpkg", layer="third"), GRID)
    assert read_polygons(project(tmp_path, polygons="two.gpkg", layer="second"), GRID).frame["code"].tolist() == [7]


def test_broken_geometries_are_repaired_or_left_out_and_said_so(tmp_path: Path) -> None:
    frame = squares(["Dry grass"] * 6)
    bow_tie = shapely.Polygon([(500_100, 4_599_500), (500_140, 4_599_540), (500_140, 4_599_500), (500_100, 4_599_540)])
    flat = shapely.Polygon([(500_160, 4_599_500), (500_200, 4_599_500), (500_180, 4_599_500)])
    frame["geometry"] = [bow_tie, flat, None, shapely.Point(500_300, 4_599_500), frame.geometry[4], frame.geometry[5]]
    frame.loc[4, "cover"] = None
    found = read(tmp_path, frame, "broken.gpkg")
    assert found.frame["polygon"].tolist() == [1, 6]
    assert found.frame.geometry.is_valid.all()
    assert found.frame.geometry[0].area == pytest.approx(800)
    text = "\n".join(map(str, found.problems))
    assert "polygon 5 without a label" in text
    assert "polygon 3 without geometry" in text
    assert "polygon 4 that is not an area" in text
    assert "Self-intersection" in text and "polygons 1, 2 broken" in text
    assert "polygon 2 without any area" in text
    assert {problem.severity for problem in found.problems} == {"warning"}


def test_outside_and_partly_outside(tmp_path: Path) -> None:
    frame = squares(["Dry grass"] * 3)
    frame["geometry"] = [
        frame.geometry[0],
        shapely.box(499_990, 4_599_500, 500_030, 4_599_540),
        shapely.box(0, 0, 10, 10),
    ]
    found = read(tmp_path, frame)
    assert found.frame["polygon"].tolist() == [1, 2]
    text = "\n".join(map(str, found.problems))
    assert "polygon 3 outside the scene" in text
    assert "polygon 2 partly outside" in text


def test_exclude_keeps_numbers_and_inset_shrinks_by_ground_metres(tmp_path: Path) -> None:
    found = read(tmp_path, squares(["Dry grass"] * 3), exclude=[2, 9], inset_m=12.0)
    assert found.frame["polygon"].tolist() == [1, 3]
    assert "exclude names 9" in str(found.problems[0])
    assert np.sqrt(found.frame.geometry.area.to_numpy()) == pytest.approx(16, abs=0.05)
    narrow = squares(["Dry grass"] * 2)
    narrow.loc[1, "geometry"] = shapely.box(500_200, 4_599_500, 500_210, 4_599_600)
    found = read(tmp_path, narrow, "narrow.gpkg", inset_m=12.0)
    assert found.frame["polygon"].tolist() == [1]
    assert "polygon 2 too narrow" in str(found.problems[0])


@given(
    sizes=st.lists(st.integers(1, 40), min_size=1, max_size=12),
    most=st.integers(1, 200),
    seed=st.integers(0, 2**32 - 1),
)
def test_even_draw_takes_as_evenly_as_can_be(sizes: list[int], most: int, seed: int) -> None:
    polygon = np.random.default_rng(seed).permutation(np.repeat(np.arange(len(sizes), dtype=np.int32), sizes))
    keep = even_draw(polygon, most, seed)
    assert keep.sum() == min(most, len(polygon))
    taken = np.bincount(polygon[keep], minlength=len(sizes))
    # Nobody has more than one pixel more than anyone who still had some to give.
    not_empty = taken < np.array(sizes)
    if not_empty.any():
        assert taken.max() <= taken[not_empty].min() + 1
    assert np.array_equal(keep, even_draw(polygon, most, seed))
