"""A model used on another scene: what it needs must be there, and values must be of the kind it was trained on."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from classify.errors import ModelError
from classify.features import build_recipe
from classify.models import TrainedModel, check_scene, fit_model
from classify.models.checks import distribution_shift
from classify.raster.scene import Scene, open_scene
from classify.settings import load_project
from classify.training import extract_pixels, read_polygons


@pytest.fixture
def trained(small_project: Path) -> tuple[TrainedModel, Scene]:
    text = (small_project / "project.toml").read_text().replace("trees = 30", "trees = 5")
    (small_project / "project.toml").write_text(text)
    project = load_project(small_project)
    scene = open_scene(project.scene, project)
    recipe = build_recipe(project.features, scene.roles)
    training = extract_pixels(read_polygons(project, scene.grid), scene, recipe)
    return fit_model(training, project, recipe), scene


def test_its_own_scene_raises_nothing(trained: tuple[TrainedModel, Scene]) -> None:
    assert check_scene(*trained) == ()


def test_order_of_bands_does_not_matter_and_a_missing_one_is_refused(trained: tuple[TrainedModel, Scene]) -> None:
    model, scene = trained
    assert check_scene(model, replace(scene, bands=scene.bands[::-1])) == ()
    with pytest.raises(ModelError, match=r"needs nir, which this scene does not have"):
        check_scene(model, replace(scene, bands=scene.bands[:3]))


def test_another_scale_is_reported_feature_by_feature(trained: tuple[TrainedModel, Scene]) -> None:
    model, scene = trained
    as_stored = replace(scene, bands=tuple(replace(band, scale=1.0, offset=0.0) for band in scene.bands))
    text = "\n".join(map(str, check_scene(model, as_stored)))
    for role in ("blue", "green", "red", "nir"):
        assert f"feature '{role}' lies elsewhere than in training" in text
    assert "'ndvi'" not in text, "a ratio does not change with scale"


def test_another_library_version_is_a_warning(trained: tuple[TrainedModel, Scene]) -> None:
    model, scene = trained
    old = replace(model, card={**model.card, "versions": {"scikit-learn": "1.0.2"}})
    (problem,) = check_scene(old, scene)
    assert problem.severity == "warning" and "scikit-learn 1.0.2" in problem.what


def test_shift_by_hand() -> None:
    quantiles = {"levels": [0.01, 0.25, 0.5, 0.75, 0.99], "values": {"a": [0, 1, 2, 3, 4], "b": [0, 1, 2, 3, 4]}}
    features = np.array([[2, np.nan], [-1.9, np.nan], [6.1, np.nan], [-2.1, np.nan]], dtype=np.float32)
    found = distribution_shift(quantiles, features)
    assert found["b"] is None
    assert found["a"] == {"beyond": 0.5, "middle": pytest.approx(0.05), "expected": 2.0}
