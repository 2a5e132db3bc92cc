"""Reach: the index by its definition, the threshold on classes left out, and that size of a request changes nothing."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.spatial.distance import cdist
from sklearn.covariance import LedoitWolf
from training_sets import training_set

from classify.models.folds import group_folds
from classify.models.reach import Reach, fit_reach


def test_index_and_threshold_are_those_of_the_definition() -> None:
    """Meyer & Pebesma 2021, equations 1-3 (from memory), computed densely with scipy on every training pixel, with
    distances in features whitened by scikit-learn's shrunk covariance within classes (Mahalanobis distances)."""
    training = training_set(polygons=(6, 6, 6), pixels=20, between=0.03)
    reach = fit_reach(training, folds=4, seed=2)
    assert reach is not None and len(reach.points) == 360
    x = training.features.astype(np.float64)
    centred = x / x.std(axis=0)
    for code in (1, 2, 3):
        centred[training.codes == code] -= centred[training.codes == code].mean(axis=0)
    inverse = np.linalg.inv(LedoitWolf(assume_centered=True).fit(centred).covariance_)

    def distances(a: np.ndarray, b: np.ndarray) -> np.ndarray:
        return cdist(a / x.std(axis=0), b / x.std(axis=0), "mahalanobis", VI=inverse)

    among = distances(x, x)
    mean_distance = among[np.triu_indices(len(x), 1)].mean()
    new = np.random.default_rng(4).uniform(-0.2, 0.7, (200, 4)).astype(np.float32)
    np.testing.assert_allclose(reach.index(new), distances(new, x).min(axis=1) / mean_distance, rtol=1e-4)
    fold = group_folds(training.codes, training.polygon, 4, 2).fold
    among[fold[:, None] == fold[None, :]] = np.inf
    own = among.min(axis=1) / mean_distance
    low, high = np.quantile(own, [0.25, 0.75])
    assert reach.threshold == pytest.approx(own[own <= high + 1.5 * (high - low)].max(), rel=1e-3)


@pytest.mark.parametrize("left_out", [1, 2, 3])
def test_a_class_left_out_is_beyond_and_held_out_polygons_are_within(left_out: int) -> None:
    """Polygons of known classes that took no part: one in twenty beyond reach at most, on average over three sets."""
    beyond = []
    for seed in (6, 7, 8):
        training = training_set(polygons=(16, 16, 16), pixels=30, between=0.006, seed=seed)
        known = training.codes != left_out
        held = (training.polygon % 4 == 0) & known
        reach = fit_reach(training.subset(known & ~held))
        assert reach is not None
        assert np.mean(reach.of(training.features[~known]) > 1) >= 0.8
        beyond.append(np.mean(reach.of(training.features[held]) > 1))
    assert np.mean(beyond) <= 0.05


def test_percent_and_invalid_pixels() -> None:
    training = training_set()
    reach = fit_reach(training)
    assert reach is not None
    features = np.vstack([training.features[:3], [[np.nan, 0, 0, 0], [9e3, 0, 0, 0]]]).astype(np.float32)
    share, percent = reach.of(features), reach.percent(features)
    assert np.isnan(share[3]) and percent[3] == 255
    assert percent[4] == 254
    assert (percent[:3] <= 100).all() and (percent >= 1).all()
    many = np.random.default_rng(0).uniform(0, 0.6, (1000, 4)).astype(np.float32)
    assert np.array_equal(reach.percent(many) > 100, reach.of(many) > 1)


def test_a_pixel_has_one_value_however_many_are_asked_for() -> None:
    reach = fit_reach(training_set())
    assert reach is not None
    features = np.random.default_rng(0).uniform(0, 0.6, (1000, 4)).astype(np.float32)
    whole = reach.of(features)
    for start in (1, 77, 640):
        assert np.array_equal(reach.of(features[start : start + 131]), whole[start : start + 131])


def test_round_trip_and_sets_without_spread() -> None:
    training = training_set()
    reach = fit_reach(training)
    assert reach is not None
    back = Reach.from_bytes(reach.to_bytes(), 4)
    assert np.array_equal(back.of(training.features), reach.of(training.features))
    flat = training_set(between=0, within=0)
    flat.features[:] = 1.0
    assert fit_reach(flat) is None
    assert fit_reach(training_set(polygons=(1, 1))) is None


def test_the_threshold_is_taken_towards_other_blocks() -> None:
    """Neighbours that are alike make the gap to other polygons look small, unless their block is kept whole."""
    training = training_set(polygons=(12, 12), pixels=10)
    block = ((training.polygon - 1) // 2).astype(np.int32)
    random = np.random.default_rng(3)
    features = training.codes[:, None] + random.normal(0, 0.5, (12, 4))[block] + random.normal(0, 0.01, (240, 4))
    paired = replace(training, features=features.astype(np.float32))
    by_polygon, blocked = fit_reach(paired, folds=12), fit_reach(paired, folds=12, groups=block)
    assert by_polygon is not None and blocked is not None
    assert blocked.threshold > 3 * by_polygon.threshold


def test_the_card_says_what_is_not_as_published() -> None:
    reach = fit_reach(training_set())
    assert reach is not None
    card = reach.to_json()
    assert "adapted from Meyer & Pebesma 2021" in card["method"]
    assert "whitened" in card["differs"] and "not weighted by importance" in card["differs"]
