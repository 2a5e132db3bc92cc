"""Reach: the index by its definition, the threshold on classes left out, and that size of a request changes nothing."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from scipy.spatial.distance import cdist
from sklearn.covariance import LedoitWolf
from training_sets import training_set

from classify.models.folds import group_folds
from classify.models.nearest import group_points
from classify.models.reach import Reach, fit_reach


def test_index_and_threshold_are_those_of_the_definition() -> None:
    """Simplified local outlier factor (Schubert, Zimek & Kriegel 2014, from memory) by scipy's dense distances, in
    features whitened by scikit-learn's shrunk covariance within polygons (Mahalanobis distances)."""
    training = training_set(polygons=(6, 6, 6), pixels=20, between=0.03)
    reach = fit_reach(training, folds=4, seed=2)
    assert reach is not None and len(reach.points) == 360 and reach.neighbours == 10
    x = training.features.astype(np.float64)
    centred = x.copy()
    for number in np.unique(training.polygon):
        centred[training.polygon == number] -= centred[training.polygon == number].mean(axis=0)
    scale = centred.std(axis=0)
    centred /= scale
    inverse = np.linalg.inv(LedoitWolf(assume_centered=True).fit(centred).covariance_)

    def index(pixels: np.ndarray, known: np.ndarray) -> np.ndarray:
        def distances(a: np.ndarray) -> np.ndarray:
            return cdist(a / scale, known / scale, "mahalanobis", VI=inverse)

        spacing = np.sort(distances(known), axis=1)[:, 10]
        away = distances(pixels)
        nearest = np.argsort(away, axis=1)[:, :10]
        return np.take_along_axis(away, nearest, 1)[:, -1] / spacing[nearest].mean(axis=1)

    new = np.random.default_rng(4).uniform(-0.2, 0.7, (200, 4)).astype(np.float32)
    np.testing.assert_allclose(reach.index(new), index(new, x), rtol=1e-4)
    fold = group_folds(training.codes, training.polygon, 4, 2).fold
    held = np.concatenate([index(x[fold == number], x[fold != number]) for number in range(4)])
    assert reach.threshold == pytest.approx(np.quantile(held, 0.95), rel=1e-3)


@given(
    points=arrays(np.float32, st.tuples(st.integers(1, 400), st.integers(1, 6)), elements=st.floats(-50, 50, width=32)),
    count=st.integers(1, 12),
)
def test_the_search_finds_what_scipy_finds(points: np.ndarray, count: int) -> None:
    """Ties and repeated points included; as many groups as a set that size has."""
    pixels = np.vstack([points[:40] + np.float32(0.5), points[:3]])
    far, mean = group_points(points, np.arange(len(points), dtype=np.float32)).nearest(pixels, count)
    expected = np.sort(cdist(pixels, points), axis=1)
    if count > len(points):
        assert np.isinf(far).all()
        return
    np.testing.assert_allclose(far, expected[:, count - 1], rtol=1e-4, atol=1e-4)
    clear = np.append(np.diff(expected, axis=1), np.full((len(pixels), 1), 1.0), axis=1)[:, count - 1] > 1e-3
    places = np.argsort(cdist(pixels, points), axis=1, kind="stable")[:, :count]
    np.testing.assert_allclose(mean[clear], places[clear].mean(axis=1), rtol=1e-5)


@pytest.mark.parametrize("left_out", [1, 2, 3])
def test_a_class_left_out_is_beyond_and_held_out_polygons_are_within(left_out: int) -> None:
    """Polygons of known classes that took no part: one in twenty beyond reach, on average over sets."""
    beyond = []
    for seed in range(6, 12):
        training = training_set(polygons=(16, 16, 16), pixels=30, between=0.006, seed=seed)
        known = training.codes != left_out
        held = (training.polygon % 8 == 0) & known
        reach = fit_reach(training.subset(known & ~held))
        assert reach is not None
        assert np.mean(reach.of(training.features[~known]) > 1) >= 0.8
        beyond.append(np.mean(reach.of(training.features[held]) > 1))
    assert 0.01 <= np.mean(beyond) <= 0.08


def test_of_many_features_the_directions_that_part_polygons_are_kept() -> None:
    """Four features that say something among 96 of noise, which by themselves would fill the directions thrice."""
    training = training_set(polygons=(16, 16, 16), pixels=30, between=0.006)
    noise = np.random.default_rng(2).normal(0, 1, (len(training.codes), 96))
    features = np.hstack([noise[:, :48], training.features, noise[:, 48:]]).astype(np.float32)
    many = replace(training, features=features, feature_names=tuple(f"f{n}" for n in range(100)))
    known = many.codes != 3
    reach = fit_reach(many.subset(known))
    assert reach is not None and reach.points.shape[1] == 32
    assert np.mean(reach.of(features[~known]) > 1) >= 0.8
    assert np.mean(reach.of(features[known]) > 1) <= 0.05


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


def test_pixels_that_repeat_each_other_do_not_put_all_else_infinitely_far() -> None:
    training = training_set(polygons=(8, 8), pixels=30)
    still = (training.codes == 1) & (training.polygon % 2 == 0)
    training.features[still] = training.features[still][0]
    reach = fit_reach(training)
    assert reach is not None and (reach.spacing > 0).all() and np.isfinite(reach.threshold)
    assert np.mean(reach.of(training.features) > 1) < 0.1


def test_polygons_of_a_pixel_are_measured_by_their_classes() -> None:
    training = training_set(polygons=(60, 60), pixels=1)
    reach = fit_reach(training)
    assert reach is not None
    assert np.mean(reach.of(training.features) > 1) < 0.1
    assert reach.of(np.full((1, 4), 0.9, np.float32))[0] > 2


def test_the_card_says_what_the_index_is() -> None:
    reach = fit_reach(training_set())
    assert reach is not None
    card = reach.to_json()
    assert "Schubert, Zimek & Kriegel 2014" in card["method"] and "Meyer & Pebesma 2021" in card["method"]
    assert card["held_out_beyond"] == 0.05 and card["neighbours"] == 10
