"""Compiled forests against scikit-learn itself: the same labels, and the same probabilities to the last bit."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sklearn.ensemble import ExtraTreesClassifier, GradientBoostingClassifier, RandomForestClassifier

from classify.errors import ModelError
from classify.models import forest_kernels
from classify.models.compiled import compile_estimator
from classify.models.forest import CompiledForest


def agree(estimator, features):
    """Whether labels and probabilities are scikit-learn's."""
    compiled = CompiledForest.from_sklearn(estimator)
    np.testing.assert_array_equal(compiled.scores(features), estimator.predict_proba(features))
    np.testing.assert_array_equal(estimator.classes_[compiled.predict_index(features)], estimator.predict(features))


def pixels(random, count, features, classes, spread=1.0):
    """Features float32 around one centre per class, and codes from 1 with gaps."""
    codes = random.integers(0, classes, count)
    codes[:classes] = np.arange(classes)
    centres = random.normal(0, 1, (classes, features))
    return (centres[codes] + random.normal(0, spread, (count, features))).astype(np.float32), codes * 3 + 1


@st.composite
def forests(draw):
    """A fitted forest of any depth, class count, weighting and feature count, and a source of chance."""
    random = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    count = draw(st.integers(12, 150))
    x, y = pixels(random, count, draw(st.integers(1, 40)), draw(st.integers(1, 11)))
    if draw(st.booleans(), label="coarse"):
        x = np.round(x * 2) / 2
    maker = draw(st.sampled_from([RandomForestClassifier, ExtraTreesClassifier]))
    estimator = maker(
        n_estimators=draw(st.integers(1, 12)),
        max_depth=draw(st.sampled_from([None, 1, 2, 5])),
        min_samples_leaf=draw(st.sampled_from([1, 3, 20])),
        class_weight=draw(st.sampled_from([None, "balanced", "balanced_subsample"])),
        max_features=draw(st.sampled_from(["sqrt", None])),
        random_state=draw(st.integers(0, 1000)),
    )
    weight = random.integers(1, 5, count) if draw(st.booleans(), label="weighted") else None
    return estimator.fit(x, y, sample_weight=weight), x, random


@settings(max_examples=60, deadline=None)
@given(forests(), st.integers(1, 300))
def test_random_forests_give_the_same_bits(made, count):
    estimator, x, random = made
    agree(estimator, random.normal(0, 1.5, (count, x.shape[1])).astype(np.float32))
    agree(estimator, x)


@settings(max_examples=30, deadline=None)
@given(forests())
def test_features_that_meet_thresholds_or_miss_them_by_the_least_possible(made):
    estimator, x, random = made
    thresholds = np.concatenate([e.tree_.threshold[e.tree_.children_left >= 0] for e in estimator.estimators_])
    nearest = np.append(thresholds, 0).astype(np.float32)
    around = [np.nextafter(nearest, np.float32(limit)) for limit in (-9, 9)]
    values = np.concatenate([nearest, *around, [-0.0, 0.0, 1e-45, -1e-45]])
    agree(estimator, random.choice(values, (200, x.shape[1])).astype(np.float32))


@pytest.mark.parametrize("huge", [3.0e38, 1e-40])
def test_features_at_the_ends_of_the_number_range(huge):
    random = np.random.default_rng(4)
    x = (random.choice([-1, -0.5, 0, 0.5, 1], (200, 3)) * huge).astype(np.float32)
    agree(RandomForestClassifier(20, random_state=1).fit(x, random.integers(0, 3, 200)), x)


def test_equal_votes_give_the_first_class():
    x = np.array([[0.0], [1.0]], dtype=np.float32)
    tied = RandomForestClassifier(2, random_state=0).fit(x, [5, 9])
    # Two trees that contradict each other on every pixel.
    tied.estimators_ = [
        RandomForestClassifier(1, bootstrap=False, random_state=0).fit(x, codes).estimators_[0]
        for codes in ([9, 5], [5, 9])
    ]
    assert (tied.predict_proba(x) == 0.5).all()
    agree(tied, x)
    assert CompiledForest.from_sklearn(tied).predict_index(x).tolist() == [0, 0]
    assert len(CompiledForest.from_sklearn(tied).scores(x[:0])) == 0


def test_more_pixels_than_a_block_in_every_order():
    random = np.random.default_rng(8)
    x, y = pixels(random, 600, 6, 5, spread=1.5)
    estimator = RandomForestClassifier(60, random_state=2).fit(x, y)
    many = random.normal(0, 1.5, (2 * forest_kernels.BLOCK + 77, 6)).astype(np.float32)
    agree(estimator, many)
    agree(estimator, np.asfortranarray(many[:100]))
    agree(estimator, many[:300:3])


def test_many_features_and_classes():
    random = np.random.default_rng(9)
    x, y = pixels(random, 400, 300, 80)
    agree(RandomForestClassifier(15, random_state=2).fit(x, y), x[:150] + np.float32(0.2))


def test_missing_features_go_where_scikit_learn_sends_them_and_infinite_ones_are_refused():
    random = np.random.default_rng(5)
    x, y = pixels(random, 200, 4, 3)
    holes = x.copy()
    holes[random.random(x.shape) < 0.2] = np.nan
    for trained_on in (x, holes):
        agree(RandomForestClassifier(20, random_state=3).fit(trained_on, y), holes)
    compiled = CompiledForest.from_sklearn(RandomForestClassifier(20, random_state=3).fit(x, y))
    x[7, 2] = np.inf
    for ask in (compiled.scores, compiled.predict_index):
        with pytest.raises(ValueError, match="infinity"):
            ask(x)


def test_a_wrong_number_of_features_is_refused():
    x, y = pixels(np.random.default_rng(5), 50, 4, 3)
    compiled = CompiledForest.from_sklearn(RandomForestClassifier(3, random_state=3).fit(x, y))
    with pytest.raises(ModelError, match="takes 4 features"):
        compiled.scores(x[:, :3])


def test_other_estimators_are_left_to_scikit_learn():
    x, y = pixels(np.random.default_rng(5), 60, 4, 3)
    assert compile_estimator(GradientBoostingClassifier(n_estimators=2).fit(x, y)) is None
    assert CompiledForest.from_sklearn(RandomForestClassifier(2).fit(x, np.stack([y, y], axis=1))) is None
    assert isinstance(compile_estimator(RandomForestClassifier(2).fit(x, y)), CompiledForest)
