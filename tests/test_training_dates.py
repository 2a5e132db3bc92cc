"""Training on several dates, a composite and an ancillary layer: each layer keeps its own wavelength, or none."""

from __future__ import annotations

import numpy as np
import pytest
from small_project import PROJECT, make_small_project

from classify.features import build_recipe, scene_facts
from classify.models.importance import feature_groups
from classify.raster.scene import open_scene
from classify.settings import load_project
from classify.training import extract_pixels, read_polygons
from classify.workflow import Job, run

BANDS = "".join(
    f'{role} = {{ file = "bands.tif", band = {n}, scale = 0.0001, nodata = 0, wavelength_nm = {nm} }}\n'
    for n, (role, nm) in enumerate([("blue", 490), ("green", 560), ("red", 665), ("nir", 842)], start=1)
)
WET = f"""
[[scene.dates]]
name = "wet"
[scene.dates.bands]
{BANDS}
[scene.ancillary]
elevation = {{ file = "mask.tif" }}
"""
COMPOSITE = '\n[scene.composite]\nmethod = "median"\n'


@pytest.fixture(params=["", COMPOSITE], ids=["dates", "composite"])
def project(tmp_path, request):
    text = PROJECT.replace("\n[[class]]", WET + request.param + "\n[[class]]", 1)
    text = text.replace("[scene.bands]", '[scene]\ndate = "dry"\n\n[scene.bands]', 1)
    text = text.replace('indices = ["ndvi"]', 'indices = ["ndvi", "ndvi@wet"]').replace("importance = false\n", "")
    return load_project(make_small_project(tmp_path / "dates", project=text))


def test_wavelengths_stay_with_their_roles(project):
    scene = open_scene(project.scene, project)
    recipe = build_recipe(project.features, scene.roles, scene_facts(scene))
    training = extract_pixels(read_polygons(project, scene.grid), scene, recipe)
    known = dict(zip(training.roles, training.wavelengths_nm, strict=True))
    assert {role: known[role] for role in ("blue", "green", "red", "nir")} == {
        "blue": 490, "green": 560, "red": 665, "nir": 842,
    }  # fmt: skip
    assert np.isnan(known["elevation"])
    assert all(np.isnan(nm) for role, nm in known.items() if "@" in role)
    assert "nir" in feature_groups(recipe, training)["near-infrared bands"]


def test_a_model_is_trained_and_its_features_weighed(project):
    result = run(Job(project), ["train"])["train"]
    assert result is not None
    assert result.summary["screening"]["screening_accuracy"] > 0.9
