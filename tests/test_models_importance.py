"""Importance: against scikit-learn's own, on held-out polygons, by feature and by group."""

from __future__ import annotations

import json
from dataclasses import replace

import numpy as np
import pytest
from sklearn.inspection import permutation_importance
from training_sets import project_of, recipe_of, training_set

from classify.features import build_recipe
from classify.models.folds import group_folds
from classify.models.importance import feature_groups, measure_importance
from classify.models.kinds import make_estimator
from classify.models.validate import ScreenOptions, fit_side
from classify.settings import FeatureSettings
from classify.training import TrainingSet


def forest(seed: int) -> object:
    return make_estimator("random forest", {"n_estimators": 25}, features=4, seed=seed)


def one_useful(seed: int = 2) -> TrainingSet:
    """Only red tells the classes apart; green repeats it; blue and nir are noise."""
    training = training_set(polygons=(10, 10), pixels=20)
    features = np.random.default_rng(seed).normal(0, 1, training.features.shape)
    features[:, 2] += 3.0 * (training.codes == 2)
    features[:, 1] = features[:, 2] + 0.05 * features[:, 1]
    return replace(training, features=features.astype(np.float32))


GROUPS = {"pair": ("green", "red"), "noise": ("blue", "nir")}


def test_the_group_shows_what_single_features_hide() -> None:
    found = measure_importance(one_useful(), forest, GROUPS, ScreenOptions(folds=4, seed=1))
    assert found is not None and found.base > 0.85
    single = max(found.features[name][0] for name in ("green", "red"))
    assert found.groups["pair"][0] > single + 0.05
    for name in ("blue", "nir"):
        assert abs(found.features[name][0]) < 0.05
    assert found.dropped["pair"] == pytest.approx(0.5, abs=0.12)
    assert found.dropped["noise"] == pytest.approx(found.base, abs=0.05)
    content = found.to_json()
    assert [row["name"] for row in content["groups"]] == ["pair", "noise"]
    assert content["groups"][0]["without_it"] == found.dropped["pair"]


def test_same_as_scikit_learn_within_its_spread() -> None:
    training = one_useful()
    found = measure_importance(training, forest, {}, ScreenOptions(folds=4, seed=1))
    assert found is not None
    folds = group_folds(training.codes, training.polygon, 4, 1)
    theirs = []
    for number in range(folds.count):
        held = folds.held_out(number)
        fitted = forest(1).fit(training.features[~held], training.codes[~held])  # type: ignore[attr-defined]
        theirs.append(
            permutation_importance(
                fitted,
                training.features[held],
                training.codes[held],
                scoring="balanced_accuracy",
                n_repeats=10,
                random_state=0,
            ).importances_mean
        )
    for place, name in enumerate(training.feature_names):
        mean, spread = found.features[name]
        assert mean == pytest.approx(np.mean(theirs, axis=0)[place], abs=max(2 * spread, 0.02))


def test_jobs_change_nothing_and_nothing_to_hold_out_is_none() -> None:
    training = one_useful()
    one, three = (measure_importance(training, forest, GROUPS, ScreenOptions(seed=1, jobs=jobs)) for jobs in (1, 3))
    assert one is not None and three is not None and one.to_json() == three.to_json()
    assert measure_importance(training_set(polygons=(1, 1)), forest, {}, ScreenOptions()) is None


def test_groups_follow_wavelengths_steps_and_dates() -> None:
    training = training_set()
    recipe = build_recipe(FeatureSettings(indices=["ndvi"]), training.roles)
    assert feature_groups(recipe, training) == {
        "visible bands": ("blue", "green", "red"), "near-infrared bands": ("nir",), "indices and formulas": ("ndvi",),
    }  # fmt: skip
    dated = replace(training, roles=("red", "nir", "red@june", "nir@june"), wavelengths_nm=(660.0, 840.0, 660.0, 840.0))
    groups = feature_groups(build_recipe(FeatureSettings(bands=list(dated.roles)), dated.roles), dated)
    assert groups["date june"] == ("red@june", "nir@june") and groups["date main"] == ("red", "nir")
    assert recipe_of(project_of(training)).names == training.roles


def by_block() -> tuple[TrainingSet, np.ndarray]:
    """Pairs of polygons of one class, which their block's reflectance does not foretell: only a neighbour knows it."""
    training = training_set(polygons=(24, 24), pixels=6)
    block = ((training.polygon - 1) // 2).astype(np.int32)
    features = np.random.default_rng(3).normal(0, 1, (24, 4))[block]
    features += np.random.default_rng(4).normal(0, 0.01, features.shape)
    return replace(training, features=features.astype(np.float32)), block


def test_blocks_are_held_out_whole() -> None:
    training, block = by_block()
    by_polygon = measure_importance(training, forest, {}, ScreenOptions(folds=4, seed=1))
    options = ScreenOptions(folds=4, seed=1, kept_whole="blocks of 50 m")
    blocked = measure_importance(training, forest, {}, options, kept_whole=block)
    assert by_polygon is not None and by_polygon.base > 0.8
    assert blocked is not None and blocked.base < 0.65
    assert blocked.to_json()["kept_whole"] == "blocks of 50 m"


def test_a_class_missing_on_the_training_side_is_no_gap() -> None:
    """A side thinned to fewer pixels than polygons may lose a class, here the first: its pixels count as wrong."""
    training = training_set(polygons=(2, 30), pixels=6)
    options = ScreenOptions(folds=2, seed=1, most_pixels=4)
    for number in range(2):
        held = group_folds(training.codes, training.polygon, 2, 1).held_out(number)
        assert fit_side(training, ~held, forest, options).classes_.tolist() == [2]
    found = measure_importance(training, forest, GROUPS, options)
    assert found is not None and found.base == pytest.approx(0.5)
    json.dumps(found.to_json(), allow_nan=False)
