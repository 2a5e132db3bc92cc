"""Fitting and screening: against scikit-learn, against leakage, and with data that cannot support what is asked."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from sklearn.metrics import accuracy_score, balanced_accuracy_score, confusion_matrix
from training_sets import project_of, recipe_of, training_set

from classify.errors import TrainingError
from classify.models import ScreenOptions, TrainedModel, fit_model, screen
from classify.models.calibrate import Calibration, calibrate
from classify.models.folds import spatial_blocks
from classify.models.kinds import make_estimator, to_probabilities
from classify.models.reach import fit_reach
from classify.models.screening import Screening
from classify.models.tuning import Candidate, choose, draw_settings, load_space, simplest_within_error
from classify.training import TrainingSet


def forest(seed: int, trees: int = 20) -> object:
    return make_estimator("random forest", {"n_estimators": trees}, features=4, seed=seed)


def fit(training: TrainingSet, jobs: int = 1, **model: object) -> TrainedModel:
    project = project_of(training, **{"repeats": 1, "folds": 3, "importance": False, **model})
    return fit_model(training, project, recipe_of(project), jobs=jobs)


def test_screening_counts_are_those_of_scikit_learn() -> None:
    training = training_set(between=0.05)
    found = screen(training, forest, ScreenOptions(folds=4, repeats=2, seed=3))
    labels = found.rounds[0]
    assert (labels > 0).all()
    assert (found.rounds[0] != found.rounds[1]).any(), "repeats are dealt anew"
    assert np.array_equal(found.counts, confusion_matrix(training.codes, labels))
    for (overall, balanced), labels in zip(found.repeats, found.rounds, strict=True):
        assert overall == pytest.approx(accuracy_score(training.codes, labels))
        assert balanced == pytest.approx(balanced_accuracy_score(training.codes, labels))
    content = found.to_json()
    assert content["screening_accuracy"] == pytest.approx(found.repeats[:, 0].mean())
    assert content["screening_accuracy_spread"] == pytest.approx(found.repeats[:, 0].std(ddof=1))
    assert content["evidence"] == "held-out training polygons" and "not the accuracy of the map" in content["meaning"]


def test_a_split_of_pixels_claims_what_polygons_do_not_hold() -> None:
    """Labels that say nothing, on polygons that differ: held-out polygons show it, held-out pixels do not."""
    training = training_set(polygons=(12, 12), between=0.05, within=0.002)
    codes = np.random.default_rng(8).permutation(np.repeat([1, 2], 12))[training.polygon - 1].astype(np.uint8)
    centred = replace(
        training, features=training.features - np.repeat([[0.0], [1.0]], 12 * 25, axis=0).astype(np.float32)
    )
    found = screen(replace(centred, codes=codes), forest, ScreenOptions(folds=4, repeats=3, seed=1))
    assert found.leaky is not None and found.leaky > 0.95
    assert found.balanced is not None and found.balanced < 0.75


def test_jobs_change_nothing() -> None:
    one, three = (screen(training_set(), forest, ScreenOptions(seed=2, jobs=jobs)) for jobs in (1, 3))
    assert np.array_equal(one.scores, three.scores)
    assert np.array_equal(one.repeats, three.repeats)


def test_a_class_with_one_polygon_is_mapped_and_said_to_be_unscreened() -> None:
    model = fit(training_set(polygons=(6, 6, 1)))
    assert model.card["screening"]["unscreened_codes"] == [3]
    assert model.card["screening"]["counts"][2] == [0, 0, 0]
    assert model.card["screening"]["share_found"][2] is None
    assert any("class 'class 3' has one usable polygon" in text for text in model.card["warnings"])
    assert model.class_codes.tolist() == [1, 2, 3]


def test_every_class_with_one_polygon() -> None:
    model = fit(training_set(polygons=(1, 1)))
    assert model.card["screening"]["screening_accuracy"] is None
    assert model.card["calibration"]["source"] == "none"


def test_what_cannot_be_learnt_is_one_clear_error() -> None:
    training = training_set(polygons=(3, 3))
    with pytest.raises(TrainingError, match=r"one class only \(class 1\)"):
        fit(training.subset(training.codes == 1))
    few = training.subset((training.codes == 1) | (np.cumsum(training.codes == 2) <= 3) & (training.codes == 2))
    with pytest.raises(TrainingError, match=r"'class 2' has 3 usable pixels; at least 5"):
        fit(few)
    broken = training.features.copy()
    broken[4, 2] = np.nan
    with pytest.raises(TrainingError, match="values that are not numbers in: red"):
        fit(replace(training, features=broken))


@pytest.mark.parametrize("kind", ["random forest", "support vector machine", "linear support vector machine"])
def test_constant_features_are_said_and_harmless(kind: str) -> None:
    training = training_set()
    constant = training.features.copy()
    constant[:, 1] = 0.5
    model = fit(replace(training, features=constant), kind=kind)
    assert any("the same value in every training pixel: green" in text for text in model.card["warnings"])
    assert np.mean(model.predict(constant) == training.codes) > 0.95


def test_labels_are_those_of_scikit_learn_and_of_the_highest_probability() -> None:
    training = training_set(between=0.06)
    features = np.random.default_rng(5).uniform(0, 0.5, (300, 4)).astype(np.float32)
    for kind in ("random forest", "support vector machine", "linear support vector machine"):
        model = fit(training, kind=kind)
        labels, probabilities = model.predict_both(features)
        assert np.array_equal(labels, model.estimator.predict(features))
        assert np.array_equal(labels, model.class_codes[probabilities.argmax(axis=1)])
        np.testing.assert_allclose(probabilities.sum(axis=1), 1, rtol=1e-5)
    features[7, 1] = np.nan
    labels, probabilities = model.predict_both(features)
    assert labels[7] == 0 and (probabilities[7] == 0).all() and (labels[:7] > 0).all()


def test_a_kernel_machine_is_fitted_on_a_stated_number_of_pixels() -> None:
    model = fit(training_set(polygons=(8, 8, 8), pixels=30), kind="support vector machine", svm_pixels=120)
    assert model.card["settings"]["pixels_fitted"] == 120
    assert model.estimator[-1].shape_fit_[0] == 120


def test_spatial_blocks_are_kept_whole() -> None:
    training = training_set(between=0.04)
    model = fit(training, block_m=1000.0, importance=True)
    assert model.card["screening"]["kept_whole"] == model.card["importance"]["kept_whole"] == "blocks of 1000 m"
    blocks = spatial_blocks(training.rows, training.cols, training.polygon, 100)
    expected = fit_reach(training, seed=5, groups=blocks)
    assert expected is not None and model.reach is not None
    assert model.reach.threshold == expected.threshold
    assert expected.threshold != fit_reach(training, seed=5).threshold  # type: ignore[union-attr]


def test_search_is_seeded_and_finds_the_setting_that_matters() -> None:
    space = load_space()
    drawn = draw_settings("support vector machine", 6, 4, space)
    assert (
        drawn
        == draw_settings("support vector machine", 6, 4, space)
        != draw_settings("support vector machine", 6, 5, space)
    )
    assert drawn[0] == {} and all(0.3 <= params["C"] <= 300 for params in drawn[1:])
    training = training_set(between=0.03)
    wanted = [("support vector machine", {"C": 10.0, "gamma_times_features": g}) for g in (1e5, 1.0)]
    options = ScreenOptions(seed=1)
    choice = choose(training, wanted, options)
    assert choice.best.params["gamma_times_features"] == 1.0
    other = choose(training, wanted, replace(options, jobs=3))
    assert [c.by_fold.tolist() for c in choice.tried] == [c.by_fold.tolist() for c in other.tried]


def test_the_simplest_within_one_standard_error_is_chosen() -> None:
    """Classes that a plane parts: the linear machine does as well as any, and is the simplest."""
    training = training_set(between=0.01)
    model = fit(training, kind="support vector machine", compare=["random forest", "linear support vector machine"])
    tuning = model.card["tuning"]
    chosen, best = tuning["chosen"], tuning["best"]
    assert model.card["kind"] == chosen["kind"] == "linear support vector machine"
    assert chosen["mean"] >= best["mean"] - best["standard_error"]
    assert len(tuning["tried"]) == 3
    assert any("chosen on the same polygons" in note for note in model.card["screening"]["notes"])


@pytest.mark.parametrize(
    ("simple", "other"),
    [
        (("linear support vector machine", {}), ("random forest", {})),
        (("random forest", {}), ("support vector machine", {})),
        (("random forest", {"min_samples_leaf": 8}), ("random forest", {"min_samples_leaf": 2})),
        (("random forest", {"max_features": 0.2}), ("random forest", {"max_features": 0.7})),
        (("support vector machine", {"C": 1.0}), ("support vector machine", {"C": 100.0})),
        (("support vector machine", {"gamma_times_features": 0.2}), ("support vector machine", {})),
    ],
)
def test_a_simpler_candidate_is_taken_within_one_standard_error_and_not_beyond(simple: Any, other: Any) -> None:
    """The better one has 0.90 with a standard error of 0.02; the other is just within, then just beyond."""
    folds = np.array([0.02, -0.02])
    best = Candidate(*other, 0.90 + folds)
    for order in (1, -1):
        near, far = Candidate(*simple, 0.881 + folds), Candidate(*simple, 0.879 + folds)
        assert simplest_within_error([best, near][::order]).chosen is near
        assert simplest_within_error([best, far][::order]).chosen is best
        better = Candidate(*simple, 0.95 + folds)
        assert simplest_within_error([best, better][::order]).chosen is better


def test_search_keeps_blocks_whole() -> None:
    """Labels that say nothing, on neighbours that are twins: found from the twin unless it is held out as well."""
    training = training_set(polygons=(16, 16), pixels=10)
    block = ((training.polygon - 1) // 2).astype(np.int32)
    random = np.random.default_rng(3)
    codes = random.permutation(np.repeat([1, 2], 8))[block].astype(np.uint8)
    features = random.normal(0, 0.5, (16, 4))[block] + random.normal(0, 0.01, (320, 4))
    twins = replace(training, codes=codes, features=features.astype(np.float32))
    wanted = [("random forest", {})]
    options = ScreenOptions(folds=8)
    assert choose(twins, wanted, options).best.mean > 0.9
    assert choose(twins, wanted, options, groups=block).best.mean < 0.8


def test_standard_error_of_a_candidate() -> None:
    found = Candidate("random forest", {}, np.array([0.8, 0.9, 0.85, np.nan]))
    assert found.mean == pytest.approx(0.85)
    assert found.error == pytest.approx(0.05 / np.sqrt(3))


def test_calibration_finds_the_temperature_that_made_the_labels() -> None:
    """Labels drawn from a softmax at temperature 2.5: least log loss must give it back, and reliable probabilities."""
    random = np.random.default_rng(3)
    scores = random.normal(0, 4, (20_000, 3))
    truth = to_probabilities(scores, "support vector machine", 2.5)
    drawn = (truth.cumsum(axis=1) > random.random((len(truth), 1))).argmax(axis=1)
    codes = (drawn + 1).astype(np.uint8)
    classes = np.array([1, 2, 3], dtype=np.uint8)
    labels = classes[scores.argmax(axis=1)]
    screening = Screening(classes, np.zeros((3, 3), np.int64), np.zeros((1, 2)), labels[None], scores, 5)
    polygon = np.repeat(np.arange(4000), 5).astype(np.int32)
    found = calibrate(screening, codes, polygon, "support vector machine")
    assert found.temperature == pytest.approx(2.5, rel=0.05)
    assert found.error is not None and found.raw_error is not None
    assert found.error < 0.015
    assert found.raw_error > 0.05
    assert all(abs(row["said"] - row["right"]) < 0.04 for row in found.reliability if row["pixels"] > 500)
    assert sum(row["share"] for row in found.reliability) == pytest.approx(1)


def test_calibration_counts_polygons_and_adds_up_what_is_off() -> None:
    """A polygon weighs the same however often its pixels are repeated; expected calibration error as its paper has it
    (Naeini, Cooper & Hauskrecht 2015, AAAI, from memory): the gaps of the bins, by share."""
    random = np.random.default_rng(5)
    classes = np.array([1, 2, 3], dtype=np.uint8)
    scores = random.normal(0, 2, (600, 3))
    codes = np.where(random.random(600) < 0.6, classes[scores.argmax(axis=1)], random.choice(classes, 600))
    codes = codes.astype(np.uint8)
    polygon = np.repeat(np.arange(60), 10).astype(np.int32)
    # One polygon that contradicts the others, once with its ten pixels and once with a thousand.
    codes[polygon == 0] = classes[scores[polygon == 0].argmin(axis=1)]
    repeated = np.concatenate([np.repeat(np.flatnonzero(polygon == 0), 100), np.flatnonzero(polygon != 0)])

    def of(rows: np.ndarray) -> Calibration:
        labels = classes[scores[rows].argmax(axis=1)]
        screening = Screening(classes, np.zeros((3, 3), np.int64), np.zeros((1, 2)), labels[None], scores[rows], 5)
        return calibrate(screening, codes[rows], polygon[rows], "support vector machine")

    once, often = of(np.arange(600)), of(repeated)
    assert once.temperature == pytest.approx(often.temperature, rel=2e-3)
    assert once.error == pytest.approx(often.error, abs=2e-3)
    gaps = [(row["said"] - row["right"], row["share"]) for row in once.raw]
    assert min(gap for gap, _ in gaps) < 0 < max(gap for gap, _ in gaps)
    assert once.raw_error == pytest.approx(sum(abs(gap) * share for gap, share in gaps))
