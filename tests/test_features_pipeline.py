"""Features in a whole project: neighbourhoods, ground, dates and fitted components reach the map without a seam."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
import rasterio
from small_project import CRS, HEIGHT, PROJECT, TRANSFORM, WIDTH, make_small_project

from classify.features import build_recipe, fit_recipe, scene_facts
from classify.mapping.classify_scene import MapOptions, classify_scene
from classify.models import fit_model, load_model, save_model
from classify.raster.scene import open_scene
from classify.settings import load_project
from classify.training import extract_pixels, read_polygons

FEATURES = """
indices = ["ndvi"]
formulas = { wetter = "ndwi@wet - ndwi", rough = "nir_standard_deviation_5 / (nir + 0.01)" }
texture = [
  { of = "nir", statistic = "standard deviation", size = 5 },
  { of = "ndvi", statistic = "entropy", size = 3 },
]
terrain = [{ statistic = "slope" }, { statistic = "topographic position", size = 7 }]
components = { count = 2 }
"""
WET = """
[scene.ancillary]
elevation = "dem.tif"

[[scene.dates]]
name = "wet"
scale = 0.0001
nodata = 0
bands = { green = { file = "bands.tif", band = 2 }, nir = { file = "bands.tif", band = 3 } }

[[class]]
code = 1
"""


@pytest.fixture(scope="module")
def project(tmp_path_factory: pytest.TempPathFactory):
    text = (
        PROJECT.replace("trees = 30", "trees = 8")
        .replace('indices = ["ndvi"]', FEATURES)
        .replace("[[class]]\ncode = 1\n", WET, 1)
    )
    folder = make_small_project(tmp_path_factory.mktemp("features"), project=text)
    rows, cols = np.mgrid[:HEIGHT, :WIDTH]
    ground = (400 + 3 * rows - 2 * cols + 10 * np.sin(cols / 7)).astype(np.float32)
    with rasterio.open(
        folder / "dem.tif", "w", driver="GTiff", count=1, height=HEIGHT, width=WIDTH, dtype="float32", crs=CRS,
        transform=TRANSFORM,
    ) as target:  # fmt: skip
        target.write(ground, 1)
    return load_project(folder)


@pytest.fixture(scope="module")
def trained(project, tmp_path_factory: pytest.TempPathFactory):
    scene = open_scene(project.scene, project)
    recipe = fit_recipe(build_recipe(project.features, scene.roles, scene_facts(scene)), scene, project.project.seed)
    training = extract_pixels(read_polygons(project, scene.grid), scene, recipe)
    folder = tmp_path_factory.mktemp("model")
    save_model(fit_model(training, project, recipe), folder)
    return scene, recipe, training, folder


def test_training_pixels_have_the_features_of_the_whole_scene(trained):
    scene, recipe, training, _ = trained
    with scene.open() as reader:
        whole = recipe.compute(reader.read(scene.grid.window, recipe.needs, halo_px=recipe.halo_px))
    assert recipe.halo_px == 3
    assert training.feature_names == recipe.names
    np.testing.assert_array_equal(training.features, whole[:, training.rows, training.cols].T)


def test_the_map_has_the_same_bytes_whatever_the_block_and_the_jobs(project, trained, tmp_path: Path):
    scene, recipe, _, folder = trained
    model = load_model(folder)
    assert model.recipe == recipe
    maps = []
    for block_px, jobs in ((64, 1), (256, 2), (1000, 1), (37, 2)):
        out = tmp_path / f"{block_px}"
        classify_scene(model, scene, out, classes=project.classes, options=MapOptions(jobs=jobs, block_px=block_px))
        with rasterio.open(out / "cover.tif") as cover, rasterio.open(out / "confidence.tif") as confidence:
            maps.append((cover.read(1), confidence.read(1)))
    for codes, percent in maps[1:]:
        np.testing.assert_array_equal(codes, maps[0][0])
        np.testing.assert_array_equal(percent, maps[0][1])
    assert set(np.unique(maps[0][0])) == {0, 1, 2, 5}


def test_the_model_file_says_all_that_the_features_rest_on(trained):
    _, recipe, _, folder = trained
    card = json.loads((folder / "model.json").read_text(encoding="utf-8"))
    assert card["features"] == list(recipe.names)
    assert set(card["needs"]) == set(recipe.needs) >= {"green@wet", "elevation"}
    steps = {step["kind"]: step for step in card["recipe"]["steps"]}
    assert set(steps) == {"formula", "texture", "terrain", "components"}
    assert len(steps["components"]["projection"]["weights"]) == 2
