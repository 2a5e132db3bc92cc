"""Many scenes with one model: each mapped as it would be alone, a bad one reported, all described as STAC."""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import numpy as np
import pandas as pd
import pystac
import pytest
import rasterio
from click.testing import CliRunner
from small_project import make_small_project

from classify.cli.main import cli
from classify.errors import DataError
from classify.mapping.many import find_scenes
from classify.raster.stac import item_files
from classify.settings import load_project
from classify.workflow import Job, map_scenes, run


@pytest.fixture(scope="module")
def trained(tmp_path_factory):
    folder = make_small_project(tmp_path_factory.mktemp("many") / "miniature")
    run(Job(load_project(folder)), ["train", "classify"])
    return folder


@pytest.fixture
def project(trained):
    return load_project(trained)


@pytest.fixture
def scenes(trained, tmp_path):
    """A folder with the scene itself as `same`, one turned upside down, and one with a file missing."""
    folder = tmp_path / "scenes"
    for name in ("same", "turned", "cut"):
        (folder / name).mkdir(parents=True)
        shutil.copy(trained / "mask.tif", folder / name)
    shutil.copy(trained / "bands.tif", folder / "same")
    with rasterio.open(trained / "bands.tif") as source:
        for part, values in (("turned/bands.tif", source.read()[:, ::-1]),):
            with rasterio.open(folder / part, "w", **source.profile) as target:
                target.write(values)
    return folder


def test_each_scene_is_mapped_as_it_would_be_alone_and_a_bad_one_reported(trained, project, scenes, tmp_path):
    result = map_scenes(Job(project), [str(scenes)], tmp_path / "maps")
    assert result.mapped == ("same", "turned")
    assert set(result.failed) == {"cut"}
    assert "bands.tif" in result.failed["cut"][0].where
    for name in ("cover.tif", "confidence.tif", "reach.tif", "areas.csv"):
        alone, among = trained / "outputs" / "map" / name, tmp_path / "maps" / "same" / name
        assert alone.read_bytes() == among.read_bytes()
    table = pd.read_csv(tmp_path / "maps" / "areas.csv")
    for name, rows in table.groupby("scene"):
        with rasterio.open(tmp_path / "maps" / name / "cover.tif") as cover:
            codes = cover.read(1)
        assert dict(zip(rows["code"], rows["pixels"], strict=True)) == {c: (codes == c).sum() for c in (1, 2, 5)}


def test_the_collection_and_its_items_are_valid_stac_with_classes(project, scenes, tmp_path):
    map_scenes(Job(project), [str(scenes)], tmp_path / "maps")
    collection = pystac.Collection.from_file(str(tmp_path / "maps" / "collection.json"))
    items = list(collection.get_items())
    assert [item.id for item in items] == ["same", "turned"]
    for item in items:
        classes = item.assets["cover"].extra_fields["classification:classes"]
        assert [(c["value"], c["title"]) for c in classes] == [
            (0, "No data"), (1, "Pasture"), (2, "Bare soil"), (5, "Water")
        ]  # fmt: skip
        assert len({c["name"] for c in classes}) == 4
        with rasterio.open(item.assets["cover"].get_absolute_href()) as cover:
            assert list(cover.shape) == item.properties["proj:shape"]
            assert list(cover.transform)[:6] == item.properties["proj:transform"]
            longitude, latitude = rasterio.warp.transform(cover.crs, "EPSG:4326", *[[v] for v in cover.xy(48, 60)])
        west, south, east, north = item.bbox
        assert west < longitude[0] < east
        assert south < latitude[0] < north
        assert item.properties["proj:code"] == "EPSG:32633"
        assert item.datetime is not None


def test_the_map_of_a_project_has_an_item_too(trained):
    item = pystac.Item.from_file(str(trained / "outputs" / "map" / "item.json"))
    assert item.properties["title"] == "A miniature of the Sorrel Basin"
    assert {asset.get_absolute_href() for asset in item.assets.values()} == {
        str(trained / "outputs" / "map" / name) for name in ("cover.tif", "confidence.tif", "reach.tif", "areas.csv")
    }


def test_maps_that_are_there_are_kept_and_others_replaced_only_when_told(project, scenes, tmp_path):
    maps = tmp_path / "maps"
    shutil.rmtree(scenes / "cut")
    map_scenes(Job(project), [str(scenes)], maps)
    again = map_scenes(Job(project), [str(scenes)], maps)
    assert (again.mapped, again.kept) == ((), ("same", "turned"))
    before = (maps / "same" / "cover.tif").read_bytes()
    shutil.copy(scenes / "turned" / "bands.tif", scenes / "same" / "bands.tif")
    refused = map_scenes(Job(project), [str(scenes)], maps)
    assert set(refused.failed) == {"same"}
    assert "--overwrite" in refused.failed["same"][0].fix
    assert (maps / "same" / "cover.tif").read_bytes() == before
    assert map_scenes(Job(project), [str(scenes)], maps, overwrite=True).mapped == ("same",)
    assert (maps / "same" / "cover.tif").read_bytes() != before


def item(name, assets, when="2024-06-11T10:00:00Z"):
    return {
        "type": "Feature", "stac_version": "1.0.0", "id": name, "geometry": None, "properties": {"datetime": when},
        "links": [], "assets": {key: {"href": href} for key, href in assets.items()},
    }  # fmt: skip


def test_scenes_are_found_in_items_lists_and_folders(project, scenes, tmp_path):
    whole = {"stack": "same/bands.tif", "mask": "same/mask.tif"}
    (scenes / "whole.json").write_text(json.dumps(item("whole item", whole)))
    (scenes / "part.json").write_text(json.dumps(item("part", {"mask": "same/mask.tif"})))
    (tmp_path / "list.txt").write_text("# scenes of June\nscenes/turned\n\nscenes/whole.json  # and an item\n")
    found = find_scenes([str(tmp_path / "list.txt"), str(scenes / "same")], project)
    assert [scene.name for scene in found] == ["turned", "whole-item", "same"]
    assert found[1].files == {name: str(scenes / "same" / name) for name in ("bands.tif", "mask.tif")}
    assert found[1].when.isoformat() == "2024-06-11T10:00:00+00:00"
    (part,) = find_scenes([str(scenes / "part.json")], project)
    assert "no asset for" in part.problems[0].what
    result = map_scenes(Job(project), [str(scenes / "part.json"), str(scenes / "whole.json")], tmp_path / "maps")
    assert set(result.failed) == {"part"}
    assert result.mapped == ("whole-item",)
    written = json.loads((tmp_path / "maps" / "whole-item" / "item.json").read_text())
    assert written["properties"]["datetime"] == "2024-06-11T10:00:00Z"


def test_bands_are_found_by_what_an_item_says_of_them(tmp_path):
    assets = {
        "coarse": {"href": "a.tif", "gsd": 20, "eo:bands": [{"common_name": "red"}]},
        "fine": {"href": "b.tif", "gsd": 10, "bands": [{"eo:common_name": "red"}]},
        "both": {"href": "c.tif", "eo:bands": [{"common_name": "nir"}, {"common_name": "green"}]},
        "water": {"href": "d.tif"},
    }
    described = {"type": "Feature", "id": "x", "properties": {}, "assets": assets}
    wanted = {"scene/r.tif": "red", "scene/n.tif": "nir", "scene/water.tif": None}
    files, problems = item_files(described, str(tmp_path / "x.json"), wanted)
    assert files == {"scene/r.tif": str(tmp_path / "b.tif"), "scene/water.tif": str(tmp_path / "d.tif")}
    assert [problem.what for problem in problems] == ["the item has no asset for nir"]


@pytest.mark.parametrize(
    "href",
    ["/etc/passwd", "../../elsewhere/bands.tif", "/vsicurl/http://127.0.0.1/bands.tif", "http://10.0.0.1/bands.tif",
     "https://169.254.169.254/bands.tif", "file:///etc/passwd"],
)  # fmt: skip
def test_an_item_leads_nowhere_that_the_user_did_not_name(project, tmp_path, href):
    names = {Path(band.file).name for band in project.scene.bands.values()} | {"mask.tif"}
    assets = {name: {"href": href if name == "bands.tif" else name} for name in names} | {"odd": 7}
    item = {"type": "Feature", "id": "stranger", "assets": assets, "properties": "none"}
    path = tmp_path / "stranger.json"
    path.write_text(json.dumps(item), encoding="utf-8")
    (scene,) = find_scenes([str(path)], project)
    assert "outside its own folder" in scene.problems[0].what
    assert not any(href in file for file in scene.files.values())


def test_sources_that_lead_nowhere_are_all_listed(project, tmp_path):
    (tmp_path / "empty").mkdir()
    (tmp_path / "list.txt").write_text("nothing-here\n")
    (tmp_path / "broken.json").write_text("{")
    sources = [str(tmp_path / name) for name in ("empty", "list.txt", "broken.json", "absent")]
    with pytest.raises(DataError) as raised:
        find_scenes(sources, project)
    assert [problem.where for problem in raised.value.problems] == sources
    assert "bands.tif" in raised.value.problems[0].fix


def test_the_command_maps_many_and_ends_with_1_if_one_failed(trained, scenes, tmp_path):
    arguments = ["classify", str(scenes), "--project", str(trained), "--out", str(tmp_path / "maps"), "--json"]
    result = CliRunner().invoke(cli, arguments)
    assert result.exit_code == 1
    told = json.loads(result.stdout)
    assert told["mapped"] == ["same", "turned"]
    assert "bands.tif" in told["failed"]["cut"][0]
    assert np.sum([row["pixels"] for row in told["areas"]]) > 0
