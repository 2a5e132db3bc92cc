"""Compiled support vector machines against scikit-learn itself: the same labels, decision values to rounding."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import StandardScaler
from sklearn.svm import SVC, LinearSVC

from classify.errors import ModelError
from classify.models.compiled import compile_estimator
from classify.models.kernel_svm import CompiledSvm


def both_sides(decision):
    return np.stack([-decision, decision], axis=1) if decision.ndim == 1 else decision


def agree(estimator, features):
    compiled = CompiledSvm.from_sklearn(estimator)
    labels = np.asarray(estimator.classes_)[compiled.predict_index(features)]
    np.testing.assert_array_equal(labels, estimator.predict(features))
    np.testing.assert_allclose(
        compiled.scores(features), both_sides(estimator.decision_function(features)), rtol=0, atol=1e-8
    )


def pixels(random, count, features, classes):
    codes = random.integers(0, classes, count)
    codes[: 2 * classes] = np.tile(np.arange(classes), 2)
    centres = random.normal(0, 1, (classes, features))
    return (centres[codes] + random.normal(0, 1, (count, features))).astype(np.float32), codes * 3 + 1


@st.composite
def machines(draw):
    """A fitted machine of either kernel, any class count, weights and scale of features, and a source of chance."""
    random = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    classes = draw(st.integers(2, 7))
    x, y = pixels(random, draw(st.integers(20, 150)), draw(st.integers(1, 20)), classes)
    if draw(st.booleans(), label="far from the origin"):
        x = (x * 0.05 + np.float32(0.4)).astype(np.float32)
    machine = SVC(
        kernel=draw(st.sampled_from(["rbf", "linear"])),
        C=draw(st.sampled_from([0.01, 1.0, 100.0])),
        gamma=draw(st.sampled_from(["scale", "auto", 0.001, 20.0])),
        class_weight=draw(st.sampled_from([None, "balanced"])),
        break_ties=draw(st.booleans()),
    )
    estimator = make_pipeline(StandardScaler(), machine) if draw(st.booleans(), label="scaled") else machine
    return estimator.fit(x, y), x, random


@settings(max_examples=80, deadline=None)
@given(machines(), st.integers(1, 600))
def test_random_machines_agree(made, count):
    estimator, x, random = made
    agree(estimator, (random.normal(0, 1.5, (count, x.shape[1])) * x.std() + x.mean()).astype(np.float32))
    agree(estimator, x)


@settings(max_examples=30, deadline=None)
@given(machines())
def test_pixels_between_two_classes_agree(made):
    """Halfway points found by bisection lie within float32, some within float64, rounding of a decision of zero."""
    estimator, x, random = made
    low, high = (random.choice(x, 40).astype(np.float64) for _ in range(2))
    first = estimator.predict(low.astype(np.float32))
    for _ in range(40):
        middle = (low + high) / 2
        same = estimator.predict(middle.astype(np.float32)) == first
        low[same], high[~same] = middle[same], middle[~same]
    agree(estimator, np.concatenate([low, high]).astype(np.float32))


@pytest.mark.parametrize("kernel", ["rbf", "linear"])
def test_a_decision_of_nought_is_left_to_scikit_learn(kernel):
    mirrored = np.array([[1.0, 0.5], [-1.0, 0.5], [1.0, -0.5], [-1.0, -0.5]], dtype=np.float32)
    estimator = SVC(kernel=kernel, gamma=0.5).fit(mirrored, [1, 2, 1, 2])
    between = np.stack([np.zeros(50), np.linspace(-3, 3, 50)], axis=1).astype(np.float32)
    assert (np.abs(estimator.decision_function(between)) < 1e-12).all()
    agree(estimator, between)


def test_equal_votes_are_resolved_as_the_machine_says():
    random = np.random.default_rng(12)
    x, y = random.normal(0, 1, (300, 2)).astype(np.float32), random.integers(0, 5, 300)
    probes = random.normal(0, 1, (3000, 2)).astype(np.float32)
    labels = []
    for break_ties in (False, True):
        estimator = SVC(gamma=3.0, C=5.0, break_ties=break_ties).fit(x, y)
        agree(estimator, probes)
        labels.append(estimator.predict(probes))
    assert (labels[0] != labels[1]).sum() > 20


def test_many_support_vectors_and_pixels_span_blocks():
    random = np.random.default_rng(3)
    x, y = random.normal(0, 1, (1200, 8)).astype(np.float32), random.integers(0, 3, 1200)
    estimator = make_pipeline(StandardScaler(), SVC(C=10, class_weight="balanced", break_ties=True)).fit(x, y)
    assert estimator[-1].n_support_.max() > 256
    many = random.normal(0, 1.4, (1300, 8)).astype(np.float32)
    agree(estimator, many)
    compiled = CompiledSvm.from_sklearn(estimator)
    np.testing.assert_array_equal(compiled.scores(many)[700:703], compiled.scores(many[700:703]))


def test_pixels_far_from_all_training_data():
    x, y = pixels(np.random.default_rng(3), 200, 4, 4)
    for kernel in ("rbf", "linear"):
        estimator = SVC(kernel=kernel).fit(x, y)
        agree(estimator, (x * 1000).astype(np.float32))
    agree(SVC(kernel="rbf").fit(x, y), (x * 1e30).astype(np.float32))


def test_bounds_hold_and_float32_decides_most_pixels():
    random = np.random.default_rng(3)
    x, y = pixels(random, 800, 8, 5)
    compiled = CompiledSvm.from_sklearn(make_pipeline(StandardScaler(), SVC(C=10)).fit(x, y))
    rows = compiled._prepared(random.normal(0, 1.4, (2000, 8)).astype(np.float32))
    rough, fine = (compiled._decide(rows, kind) for kind in (np.float32, np.float64))
    off = np.abs(rough.values - fine.values)
    assert (off <= rough.bounds).all()
    assert off.max() > 1e-7
    assert compiled._to_labels(rough)[1].mean() > 0.9


def test_what_is_not_finite_is_refused_as_by_scikit_learn():
    x, y = pixels(np.random.default_rng(3), 60, 4, 3)
    compiled = CompiledSvm.from_sklearn(SVC().fit(x, y))
    for value in (np.nan, np.inf):
        x[4, 1] = value
        for ask in (compiled.scores, compiled.predict_index):
            with pytest.raises(ValueError, match=r"NaN|infinity"):
                ask(x)
    with pytest.raises(ModelError, match="takes 4 features"):
        compiled.predict_index(x[:, :2])


def test_other_machines_are_left_to_scikit_learn():
    x, y = pixels(np.random.default_rng(3), 60, 4, 3)
    assert compile_estimator(SVC(kernel="poly").fit(x, y)) is None
    assert compile_estimator(SVC(break_ties=True, decision_function_shape="ovo").fit(x, y)) is None
    assert compile_estimator(make_pipeline(StandardScaler(), LinearSVC()).fit(x, y)) is None
    assert isinstance(compile_estimator(make_pipeline(StandardScaler(), SVC()).fit(x, y)), CompiledSvm)
