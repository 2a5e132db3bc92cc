"""The sample project: planted faults are found, a clean copy raises few alarms, reach knows what it never saw."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import rasterio
from scipy.ndimage import maximum_filter, minimum_filter

from classify.features import build_recipe
from classify.models import inspect_training
from classify.models.reach import fit_reach
from classify.raster.grid import Window
from classify.raster.scene import Scene, open_scene
from classify.settings import Project, load_project
from classify.training import TrainingSet, extract_pixels, read_polygons
from classify.training.draws import even_draw
from classify.training.review import TrainingReview

FOLDER = Path(__file__).parent.parent / "sample_project"
FAULTS = json.loads((FOLDER / "planted_faults.json").read_text())["faults"]


def review_of(training: TrainingSet, project: Project) -> TrainingReview:
    """With fewer pixels and trees than users have, which makes the task harder and the test quick."""
    few = project.model_copy(update={"model": project.model.model_copy(update={"trees": 15})})
    return inspect_training(training.subset(even_draw(training.polygon, 2_500, 0)), few)


@pytest.fixture(scope="module")
def sample() -> tuple[Project, Scene, TrainingSet]:
    project = load_project(FOLDER)
    scene = open_scene(project.scene, project)
    recipe = build_recipe(project.features, scene.roles)
    return project, scene, extract_pixels(read_polygons(project, scene.grid), scene, recipe, 2)


def test_all_planted_faults_are_among_the_first_five_suspects(sample: tuple[Project, Scene, TrainingSet]) -> None:
    project, _, training = sample
    review = review_of(training, project)
    first = {suspect.polygon: suspect for suspect in review.suspects[:5]}
    reasons = {"mislabelled": "held out", "overlap with conflicting labels": "conflict", "half under cloud": "masked"}
    assert {fault["fault"] for fault in FAULTS} == set(reasons)
    for fault in FAULTS:
        assert fault["polygon"] in first, fault
        assert reasons[fault["fault"]] in first[fault["polygon"]].reasons
    wrong = next(fault for fault in FAULTS if fault["fault"] == "mislabelled")
    names = {c.code: c.name for c in project.classes}
    assert names[first[wrong["polygon"]].looks_like or 0] == wrong["true"]


def test_a_clean_copy_raises_at_most_one_alarm_in_thirty(sample: tuple[Project, Scene, TrainingSet]) -> None:
    project, scene, _ = sample
    polygons = read_polygons(project, scene.grid)
    frame = polygons.frame
    codes = {c.name: c.code for c in project.classes}
    for fault in FAULTS:
        row = frame["polygon"] == fault["polygon"]
        if fault["fault"] == "mislabelled":
            frame.loc[row, ["code", "class_name"]] = [codes[fault["true"]], fault["true"]]
        else:
            frame = frame[~row]
    recipe = build_recipe(project.features, scene.roles)
    clean = extract_pixels(replace(polygons, frame=frame.reset_index(drop=True)), scene, recipe, 2)
    review = review_of(clean, project)
    assert len(clean.table) > 90
    assert len(review.suspects) <= len(clean.table) / 30, [suspect.sentence for suspect in review.suspects]


def test_reach_flags_a_class_that_training_left_out(sample: tuple[Project, Scene, TrainingSet]) -> None:
    """Away from mixed pixels at edges, over the whole scene, against the truth that no stage reads."""
    project, scene, training = sample
    with rasterio.open(FOLDER / "truth.tif") as source:
        truth = source.read(1)
    pure = maximum_filter(truth, 5) == minimum_filter(truth, 5)
    recipe = build_recipe(project.features, scene.roles)
    with scene.open() as reader:
        window = Window(0, 0, *scene.grid.shape_yx)
        features = recipe.compute(reader.read(window, recipe.needs, recipe.halo_px)).reshape(len(recipe.names), -1).T
    usable = np.flatnonzero(np.isfinite(features).all(axis=1) & pure.ravel())
    usable = np.random.default_rng(0).choice(usable, 15_000, replace=False)
    pixels, truth = features[usable], truth.ravel()[usable]
    sound = training.subset(~np.isin(training.polygon, [fault["polygon"] for fault in FAULTS]))
    for entry in project.classes:
        reach = fit_reach(sound.subset(sound.codes != entry.code))
        assert reach is not None
        beyond = reach.of(pixels) > 1
        assert beyond[truth == entry.code].mean() >= 0.8, entry.name
        assert beyond[truth != entry.code].mean() <= 0.05, entry.name
