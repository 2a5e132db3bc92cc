"""Published worked examples, to their printed digits, and general statistics libraries as referees."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from scipy import stats
from sklearn.metrics import accuracy_score, cohen_kappa_score, f1_score, precision_score, recall_score
from statsmodels.stats.inter_rater import cohens_kappa
from statsmodels.stats.proportion import proportion_confint

from classify.assessment import AssessmentOptions, assess, assess_matrix

# Olofsson, Foody, Herold, Stehman, Woodcock & Wulder 2014, "Good practices for estimating area and assessing accuracy
# of land change", Remote Sensing of Environment 148, 42-57, section 5. Counts and results from memory; the halves of
# the producer's accuracies are computed with the paper's equation 7, not recalled. No finite population correction.
LAND_CHANGE = ("deforestation", "forest gain", "stable forest", "stable non-forest")
LAND_CHANGE_COUNTS = [[66, 0, 5, 4], [0, 55, 8, 12], [1, 0, 153, 11], [2, 1, 9, 313]]
LAND_CHANGE_PIXELS = [200_000, 150_000, 3_200_000, 6_450_000]
AS_PUBLISHED = AssessmentOptions(interval="normal", finite_population=False, area_unit="ha", pixel_area=0.09)

# Congalton & Green, "Assessing the Accuracy of Remotely Sensed Data"; from memory: overall 74 %, kappa 0.65.
FOUR_CLASSES = ("deciduous", "conifer", "agriculture", "shrub")
FOUR_CLASSES_COUNTS = [[65, 4, 22, 24], [6, 81, 5, 8], [0, 11, 85, 19], [4, 7, 3, 90]]


def matrix(names, counts):
    table = pd.DataFrame(counts, columns=list(names))
    table.insert(0, "map", list(names))
    return table


def points_of(names, counts):
    """The same counts, one row per point, strata = map classes."""
    rows = [(names[i], names[i], names[j]) for i, row in enumerate(counts) for j, n in enumerate(row) for _ in range(n)]
    return pd.DataFrame(rows, columns=["stratum", "map", "reference"])


def land_change_strata():
    return pd.DataFrame({"stratum": LAND_CHANGE, "pixels": LAND_CHANGE_PIXELS})


@pytest.fixture(params=["matrix", "points"])
def land_change(request):
    if request.param == "matrix":
        return assess_matrix(matrix(LAND_CHANGE, LAND_CHANGE_COUNTS), land_change_strata(), AS_PUBLISHED)
    return assess(points_of(LAND_CHANGE, LAND_CHANGE_COUNTS), land_change_strata(), AS_PUBLISHED)


def printed(estimates, digits=2):
    half = [1.96 * e.standard_error for e in estimates]
    return [(round(e.estimate, digits), round(h, digits)) for e, h in zip(estimates, half, strict=True)]


def test_land_change_accuracies_to_the_printed_digits(land_change):
    assert printed([land_change.overall_accuracy]) == [(0.95, 0.02)]
    assert printed(land_change.users_accuracy.values()) == [(0.88, 0.07), (0.73, 0.10), (0.93, 0.04), (0.96, 0.02)]
    assert printed(land_change.producers_accuracy.values()) == [(0.75, 0.21), (0.85, 0.25), (0.93, 0.03), (0.96, 0.02)]


def test_land_change_areas_to_the_printed_hectares(land_change):
    assert land_change.total_area == pytest.approx(900_000)
    found = printed([land_change.area[c].estimated for c in LAND_CHANGE], 0)
    assert found == [(21_158, 6_158), (11_686, 3_756), (285_770, 15_510), (581_386, 16_282)]
    assert [land_change.area[c].mapped for c in LAND_CHANGE] == pytest.approx([18_000, 13_500, 288_000, 580_500])
    assert land_change.warnings == ()


def test_area_proportions_follow_the_published_estimator(land_change):
    """Olofsson et al. 2014, eq. 4: p_ij = W_i n_ij / n_i+."""
    counts, weights = np.array(LAND_CHANGE_COUNTS), np.array(LAND_CHANGE_PIXELS) / sum(LAND_CHANGE_PIXELS)
    np.testing.assert_array_equal(land_change.matrix_counts, counts)
    expected = weights[:, None] * counts / counts.sum(axis=1, keepdims=True)
    np.testing.assert_allclose(land_change.matrix_area_proportions, expected, rtol=1e-12)


def test_producers_standard_error_is_the_published_equation(land_change):
    """Olofsson et al. 2014, eq. 7, written out as printed, is what linearisation gives when strata are map classes."""
    n, N_i = np.array(LAND_CHANGE_COUNTS, dtype=float), np.array(LAND_CHANGE_PIXELS, dtype=float)
    n_i = n.sum(axis=1)
    for j, name in enumerate(LAND_CHANGE):
        N_j = (N_i / n_i * n[:, j]).sum()
        users, producers = n[j, j] / n_i[j], N_i[j] * n[j, j] / n_i[j] / N_j
        others = [i for i in range(4) if i != j]
        own = N_i[j] ** 2 * (1 - producers) ** 2 * users * (1 - users) / (n_i[j] - 1)
        rest = sum(N_i[i] ** 2 * n[i, j] / n_i[i] * (1 - n[i, j] / n_i[i]) / (n_i[i] - 1) for i in others)
        variance = (own + producers**2 * rest) / N_j**2
        assert land_change.producers_accuracy[name].standard_error == pytest.approx(np.sqrt(variance), rel=1e-12)


def test_kappa_of_the_published_matrix_and_its_variance():
    found = assess_matrix(matrix(FOUR_CLASSES, FOUR_CLASSES_COUNTS))
    assert round(found.overall_accuracy.estimate, 2) == 0.74
    assert round(found.kappa.estimate, 2) == 0.65
    referee = cohens_kappa(np.array(FOUR_CLASSES_COUNTS))
    assert found.kappa.estimate == pytest.approx(referee.kappa, rel=1e-12)
    assert found.kappa.standard_error == pytest.approx(referee.std_kappa, rel=1e-12)
    assert (found.kappa.lower, found.kappa.upper) == pytest.approx((referee.kappa_low, referee.kappa_upp), rel=1e-6)


def test_simple_random_sample_agrees_with_general_libraries():
    points = points_of(FOUR_CLASSES, FOUR_CLASSES_COUNTS).drop(columns="stratum")
    found = assess(points)
    truth, guess, labels = points["reference"], points["map"], list(found.classes)
    assert found.overall_accuracy.estimate == pytest.approx(accuracy_score(truth, guess))
    assert found.kappa.estimate == pytest.approx(cohen_kappa_score(truth, guess))
    for measure, referee in ((found.users_accuracy, precision_score), (found.producers_accuracy, recall_score)):
        expected = referee(truth, guess, labels=labels, average=None)
        np.testing.assert_allclose([measure[c].estimate for c in labels], expected)
    np.testing.assert_allclose(
        [found.f1[c].estimate for c in labels], f1_score(truth, guess, labels=labels, average=None)
    )


@pytest.mark.parametrize(("right", "n"), [(9, 10), (1, 40), (0, 30), (30, 30)])
def test_wilson_interval_of_a_simple_random_sample(right, n):
    """With a t quantile close to the normal one, the interval is Wilson's on n - 1, the unbiased variance's size."""
    points = pd.DataFrame({"map": ["a"] * n, "reference": ["a"] * right + ["b"] * (n - right)})
    found = assess(points, options=AssessmentOptions(interval="wilson")).overall_accuracy

    size = n if right in (0, n) else n - 1
    size *= (stats.norm.ppf(0.975) / stats.t.ppf(0.975, n - 1)) ** 2
    lower, upper = proportion_confint(right / n * size, size, method="wilson")
    assert (found.lower, found.upper) == pytest.approx((lower, upper), abs=1e-12)
    assert found.interval == "wilson"


def test_normal_interval_is_clipped_and_says_so():
    points = pd.DataFrame({"map": ["a"] * 10, "reference": ["a"] * 9 + ["b"]})
    found = assess(points, options=AssessmentOptions(interval="normal")).overall_accuracy
    assert found.upper == 1.0
    assert found.interval == "normal, clipped to 0..1"
