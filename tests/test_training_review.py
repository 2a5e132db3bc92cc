"""Separability by closed forms and by numerical integration; outliers and suspects on sets with a known fault."""

from __future__ import annotations

import json
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import integrate, stats
from training_sets import project_of, training_set

from classify.models import inspect_training
from classify.training.review import Evidence, review_training
from classify.training.separability import Normal, jeffries_matusita, separability, transformed_divergence
from classify.training.suspects import class_distances, held_out_by_polygon


def one(value: float) -> np.ndarray:
    return np.array([value])


def square(value: float) -> np.ndarray:
    return np.array([[value]])


@given(gap=st.floats(-5, 5), sd_a=st.floats(0.2, 3), sd_b=st.floats(0.2, 3))
@settings(max_examples=50)
def test_jeffries_matusita_is_its_defining_integral(gap: float, sd_a: float, sd_b: float) -> None:
    """JM = sqrt(integral of (sqrt(p) - sqrt(q))^2) (Swain & Davis 1978), integrated numerically by scipy."""
    p, q = stats.norm(0, sd_a), stats.norm(gap, sd_b)
    # Steps of a tenth of the smallest deviation: exact to rounding for a smooth function that dies away.
    x = np.linspace(-41, 41, 4_101)
    integral = integrate.trapezoid((np.sqrt(p.pdf(x)) - np.sqrt(q.pdf(x))) ** 2, x)
    found = jeffries_matusita(Normal.of(one(0), square(sd_a**2)), Normal.of(one(gap), square(sd_b**2)))
    assert found**2 == pytest.approx(integral, abs=1e-8)


@given(gap=st.floats(-4, 4), sd_a=st.floats(0.4, 2), sd_b=st.floats(0.4, 2))
@settings(max_examples=50)
def test_divergence_is_the_sum_of_both_relative_entropies(gap: float, sd_a: float, sd_b: float) -> None:
    """Divergence (Swain & Davis 1978) = KL(p|q) + KL(q|p), by scipy's entropy of fine histograms."""
    x = np.linspace(-25, 25, 5_001)
    p, q = stats.norm(0, sd_a).pdf(x), stats.norm(gap, sd_b).pdf(x)
    floor = 1e-300
    divergence = stats.entropy(p + floor, q + floor) + stats.entropy(q + floor, p + floor)
    found = transformed_divergence(Normal.of(one(0), square(sd_a**2)), Normal.of(one(gap), square(sd_b**2)))
    assert found == pytest.approx(2 * (1 - np.exp(-divergence / 8)), abs=1e-4)


def test_limits_of_both_measures() -> None:
    """Jeffries-Matusita 0..sqrt(2), transformed divergence 0..2; the maximum for classes that do not overlap."""
    same = Normal.of(np.zeros(3), np.eye(3))
    far = Normal.of(np.full(3, 1e3), np.eye(3))
    assert jeffries_matusita(same, same) == transformed_divergence(same, same) == 0
    assert jeffries_matusita(same, far) == pytest.approx(np.sqrt(2))
    assert transformed_divergence(same, far) == pytest.approx(2)


@given(seed=st.integers(0, 500))
@settings(max_examples=50)
def test_both_measures_are_symmetric_and_blind_to_units(seed: int) -> None:
    random = np.random.default_rng(seed)
    a, b = (random.normal(size=(9, 4)) for _ in range(2))
    mean_a, mean_b = random.normal(size=4), random.normal(size=4)
    first, second = Normal.of(mean_a, a.T @ a / 9), Normal.of(mean_b, b.T @ b / 9)
    units = random.normal(size=(4, 4)) + 3 * np.eye(4)
    turned = [Normal.of(units @ one.mean, units @ one.covariance @ units.T) for one in (first, second)]
    for measure in (jeffries_matusita, transformed_divergence):
        assert measure(first, second) == pytest.approx(measure(second, first), abs=1e-9)
        assert measure(first, second) == pytest.approx(measure(*turned), abs=1e-6)


def test_pairs_are_ranked_and_the_parting_feature_is_named() -> None:
    training = training_set(polygons=(20, 20, 20, 20), between=0.001, within=0.012)
    random = np.random.default_rng(1)
    features = random.normal(0, 1, training.features.shape)
    features[:, 2] += np.where(training.codes == 2, 4.0, 0.0)
    features[:, 3] += np.where(training.codes == 3, 40.0, 0.0)
    pairs = separability(replace(training, features=features.astype(np.float32)))
    assert (pairs[0].a, pairs[0].b) == (1, 4)
    assert pairs[0].verdict == "weak"
    found = {(pair.a, pair.b): pair for pair in pairs}
    assert found[1, 2].best_features[0][0] == "red"
    # Two unit normals four apart in one feature: B = 16 / 8.
    assert found[1, 2].jeffries_matusita == pytest.approx(np.sqrt(2 * (1 - np.exp(-2))), rel=0.02)
    assert found[2, 3].best_features[0][0] == "nir" and found[2, 3].verdict == "good"


def test_an_outlier_lies_far_and_the_others_do_not() -> None:
    training = training_set(polygons=(15, 15, 15), between=0.01)
    features = training.features.copy()
    features[training.polygon == 4] += 0.15
    distances = class_distances(replace(training, features=features))
    assert max(distances, key=lambda number: distances[number]) == 4
    assert distances[4] > 8
    assert sorted(distances.values())[-2] < 4
    assert class_distances(training_set(polygons=(3, 3))) == {}


def test_distance_is_blind_to_units() -> None:
    training = training_set(polygons=(8, 8))
    scaled = replace(training, features=(training.features * np.array([1, 10, 100, 1e4]) + 7).astype(np.float32))
    first, second = class_distances(training), class_distances(scaled)
    assert first.keys() == second.keys()
    for number, value in first.items():
        assert second[number] == pytest.approx(value, rel=1e-2)


def test_held_out_shares_by_polygon() -> None:
    training = training_set(polygons=(1, 1), pixels=4)
    rounds = np.array([[1, 1, 2, 2, 0, 0, 0, 0], [1, 2, 2, 2, 0, 0, 0, 0]], dtype=np.uint8)
    found = held_out_by_polygon(training, rounds)
    assert set(found) == {1}
    assert found[1].right == pytest.approx(3 / 8)
    assert found[1].others == {2: pytest.approx(5 / 8)}


def test_a_mislabelled_polygon_leads_the_suspects_with_its_reason() -> None:
    training = training_set(polygons=(12, 12, 12))
    wrong = training.polygon == 7
    codes = np.where(wrong, 3, training.codes).astype(np.uint8)
    table = training.table.copy()
    table.loc[table["polygon"] == 7, ["code", "class_name"]] = [3, "class 3"]
    faulty = replace(training, codes=codes, table=table)
    review = inspect_training(faulty, project_of(faulty, trees=10))
    first = review.suspects[0]
    assert first.polygon == 7 and first.looks_like == 1
    assert "gave 100% of its pixels to class 1" in first.sentence
    assert len(review.suspects) == 1
    content = json.loads(json.dumps(review.to_json(), allow_nan=False))
    assert content["suspects"][0]["looks_like"] == "class 1"
    assert [band["role"] for band in content["bands"]] == ["blue", "green", "red", "nir"]
    row = next(row for row in content["polygons"] if row["polygon"] == 7)
    assert row["held_out_right"] == 0
    np.testing.assert_allclose(row["mean"], training.reflectance[wrong].mean(axis=0), rtol=1e-5)
    signature = content["classes"][0]["signature"]
    np.testing.assert_allclose(signature["mean"], faulty.reflectance[codes == 1].mean(axis=0), rtol=1e-5)
    curve = content["learning_curve"]
    assert [point["polygons"] for point in curve["classes"][0]["points"]] == sorted(
        point["polygons"] for point in curve["classes"][0]["points"]
    )
    assert all(point["low"] <= point["mean"] <= point["high"] for point in curve["overall"])


def test_a_review_of_data_that_cannot_be_screened_is_still_made() -> None:
    training = training_set(polygons=(2, 2))
    only = training.subset(training.codes == 1)
    review = inspect_training(only, project_of(training))
    assert any("one class only" in problem.what for problem in review.problems)
    content = json.loads(json.dumps(review.to_json(), allow_nan=False))
    assert content["screening"] is None and content["learning_curve"] is None
    assert content["classes"][1]["signature"] is None


def test_distance_of_a_polygon_is_in_robust_standard_deviations() -> None:
    """By scipy's median absolute deviation, scaled to the standard deviation of a normal distribution."""
    training = training_set(polygons=(9, 12), between=0.03)
    found = class_distances(training)
    frame = pd.DataFrame(training.features.astype(np.float64)).assign(polygon=training.polygon, code=training.codes)
    means = frame.groupby(["code", "polygon"]).mean()
    spread = {code: stats.median_abs_deviation(part, scale="normal") for code, part in means.groupby(level=0)}
    common = np.median(list(spread.values()), axis=0)
    for code, part in means.groupby(level=0):
        z = (part - part.median()) / np.maximum(spread[code], common)
        expected = np.sqrt((z**2).mean(axis=1))
        assert [found[number] for _, number in expected.index] == pytest.approx(expected.tolist(), rel=1e-4)


@pytest.mark.filterwarnings("error")
@pytest.mark.parametrize("polygons", [(1, 1), (2, 1), (3, 2, 1)])
def test_classes_of_few_polygons_are_reviewed_without_a_warning_of_numpy(polygons: tuple[int, ...]) -> None:
    training = training_set(polygons=polygons)
    review = inspect_training(training, project_of(training))
    json.dumps(review.to_json(), allow_nan=False)
    assert any("one usable polygon" in problem.what for problem in review.problems)


def test_conflicts_and_clouds_make_suspects_by_themselves() -> None:
    training = training_set(polygons=(5, 5))
    table = training.table.assign(
        conflicting=np.where(training.table["polygon"] == 2, 5, 0),
        invalid=np.where(training.table["polygon"] == 9, 15, 0),
    )
    review = review_training(replace(training, table=table), project_of(training), Evidence.none(len(training.codes)))
    assert [(suspect.polygon, suspect.reasons) for suspect in review.suspects] == [(9, ("masked",)), (2, ("conflict",))]
    assert "60% of its pixels are masked" in review.suspects[0].sentence
