"""Properties of the estimator: what may not matter does not, and special cases give their own well-known formulas."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from classify.assessment import AssessmentOptions, assess, assess_matrix
from classify.assessment import statistics as stat
from classify.assessment.agreement import area_matrix, kappa, kappa_values
from classify.assessment.bootstrap import bounds, ratios_of
from classify.assessment.estimate import linearise, tally
from classify.assessment.inputs import sample_from_points
from classify.assessment.options import INTERVALS

CLASSES = ("clay", "grass", "trees", "water")
PLAIN = AssessmentOptions(interval="normal")


@st.composite
def stratified_samples(draw, *, strata_are_classes=False, clusters=False, min_per_stratum=2):
    """Points and strata; each stratum has at least `min_per_stratum` units: points, or clusters if asked for."""
    k = draw(st.integers(2, 4))
    names = CLASSES[:k]
    strata = names if strata_are_classes else tuple(f"s{i}" for i in range(draw(st.integers(1, 4))))
    rows = []
    for stratum in strata:
        n = draw(st.integers(min_per_stratum, 12))
        for unit in range(n):
            for _ in range(draw(st.integers(1, 4)) if clusters else 1):
                mapped = stratum if strata_are_classes else draw(st.sampled_from(names))
                rows.append((stratum, mapped, draw(st.sampled_from(names)), f"{stratum}/{unit}"))
    points = pd.DataFrame(rows, columns=["stratum", "map", "reference", "cluster"])
    if not clusters:
        points = points.drop(columns="cluster")
    areas = [draw(st.floats(0.5, 1000)) for _ in strata]
    return points, pd.DataFrame({"stratum": strata, "area": areas})


def figures(assessment, *, of_area=1.0):
    """Every estimate and standard error, by measure and class; areas divided by `of_area`."""
    accuracy = assessment.accuracy_frame.set_index(["measure", "class"])[
        ["estimate", "standard_error", "lower", "upper"]
    ]
    area = assessment.area_frame.set_index("class")[["estimate", "standard_error", "lower", "upper"]] / of_area
    return pd.concat([accuracy, pd.concat({"area": area}, names=["measure"])]).sort_index()


@settings(max_examples=25, deadline=None)
@given(stratified_samples(), st.randoms(use_true_random=False), st.floats(0.01, 1e6))
def test_order_of_rows_and_scale_of_areas_do_not_matter(sample, random, factor):
    points, strata = sample
    before = figures(assess(points, strata), of_area=strata["area"].sum())
    order = list(range(len(points)))
    random.shuffle(order)
    changed = strata.assign(area=strata["area"] * factor).iloc[::-1]
    after = figures(assess(points.iloc[order].reset_index(drop=True), changed), of_area=changed["area"].sum())
    pd.testing.assert_frame_equal(before, after, rtol=1e-7, atol=1e-9)


@settings(max_examples=20, deadline=None)
@given(stratified_samples(), st.permutations(CLASSES))
def test_order_of_classes_does_not_matter(sample, order):
    points, strata = sample
    used = [name for name in order if name in set(points["map"]) | set(points["reference"])]
    found = assess(points, strata, AssessmentOptions(classes=tuple(used)))
    pd.testing.assert_frame_equal(figures(assess(points, strata)), figures(found), rtol=1e-7, atol=1e-9)


@settings(max_examples=25, deadline=None)
@given(stratified_samples(clusters=True))
def test_areas_add_up_and_the_matrix_with_them(sample):
    points, strata = sample
    found = assess(points, strata)
    total = strata["area"].sum()
    assert found.total_area == pytest.approx(total)
    areas = [found.area[c].estimated.estimate for c in found.classes]
    assert sum(areas) == pytest.approx(total)
    proportions = found.matrix_area_proportions
    assert proportions.sum() == pytest.approx(1)
    np.testing.assert_allclose(proportions.sum(axis=0) * total, areas)
    assert np.trace(proportions) == pytest.approx(found.overall_accuracy.estimate)
    d = found.disagreement
    assert d.quantity + d.allocation == pytest.approx(1 - found.overall_accuracy.estimate, abs=1e-12)
    assert d.quantity_by_class.sum() == pytest.approx(2 * d.quantity)
    assert d.allocation_by_class.sum() == pytest.approx(2 * d.allocation)
    with np.errstate(invalid="ignore"):
        users, producers = (
            np.diag(proportions) / proportions.sum(axis=1),
            np.diag(proportions) / proportions.sum(axis=0),
        )
    for i, name in enumerate(found.classes):
        for value, estimate in ((users[i], found.users_accuracy[name]), (producers[i], found.producers_accuracy[name])):
            assert estimate.estimate == pytest.approx(value) if np.isfinite(value) else estimate.estimate is None


@settings(max_examples=25, deadline=None)
@given(stratified_samples(strata_are_classes=True))
def test_strata_as_map_classes_give_the_published_formulas(sample):
    """Olofsson et al. 2014, Remote Sensing of Environment 148, 42-57, eqs. 5, 6 and 10, written out as printed."""
    points, strata = sample
    found = assess(points, strata, PLAIN)
    names = list(found.classes)
    n = (
        pd.crosstab(points["map"], points["reference"])
        .reindex(index=names, columns=names, fill_value=0)
        .to_numpy(float)
    )
    W = strata.set_index("stratum")["area"].reindex(names).to_numpy() / strata["area"].sum()
    n_i, U = n.sum(axis=1), np.diag(n) / n.sum(axis=1)
    assert found.overall_accuracy.standard_error == pytest.approx(
        np.sqrt((W**2 * U * (1 - U) / (n_i - 1)).sum()), abs=1e-9
    )
    for i, name in enumerate(names):
        assert found.users_accuracy[name].standard_error == pytest.approx(
            np.sqrt(U[i] * (1 - U[i]) / (n_i[i] - 1)), abs=1e-9
        )
        p_ik = W * n[:, i] / n_i
        error = np.sqrt(((W * p_ik - p_ik**2) / (n_i - 1)).sum())
        area = found.area[name].estimated
        assert area.standard_error == pytest.approx(error * found.total_area, abs=1e-6 * found.total_area)


@settings(max_examples=20, deadline=None)
@given(st.integers(3, 60).flatmap(lambda n: st.tuples(st.just(n), st.integers(0, n))))
def test_one_stratum_gives_the_binomial_formula(sizes):
    n, right = sizes
    points = pd.DataFrame({"map": ["a"] * n, "reference": ["a"] * right + ["b"] * (n - right)})
    found = assess(points).overall_accuracy
    p = right / n
    assert found.estimate == pytest.approx(p)
    assert found.standard_error == pytest.approx(np.sqrt(p * (1 - p) / (n - 1)), abs=1e-9)


@settings(max_examples=20, deadline=None)
@given(stratified_samples())
def test_a_census_leaves_nothing_to_chance(sample):
    points, strata = sample
    pixels = strata["stratum"].map(points["stratum"].value_counts())
    found = assess(points, strata[["stratum"]].assign(pixels=pixels), AssessmentOptions(pixel_area=2.0))
    for estimate in (found.overall_accuracy, found.kappa, *found.users_accuracy.values(), *found.f1.values()):
        if estimate.estimate is not None:
            assert estimate.standard_error == 0
            assert estimate.lower == pytest.approx(estimate.estimate) == estimate.upper
    truth = points["reference"].value_counts()
    assert {c: round(found.area[c].estimated.estimate / 2) for c in truth.index} == truth.to_dict()


@settings(max_examples=20, deadline=None)
@given(stratified_samples(), st.sampled_from(INTERVALS))
def test_intervals_hold_their_estimate_and_stay_within_bounds(sample, interval):
    points, strata = sample
    found = assess(points, strata, AssessmentOptions(interval=interval, replicates=60))
    bounded = (found.overall_accuracy, *found.users_accuracy.values(), *found.producers_accuracy.values())
    for estimate in bounded:
        if estimate.lower is not None:
            assert 0 <= estimate.lower <= estimate.upper <= 1
            if estimate.interval != "bootstrap":
                assert estimate.lower - 1e-12 <= estimate.estimate <= estimate.upper + 1e-12


# --- variances against brute force ----------------------------------------------------------------------------------


def jackknife(points, strata, statistic):
    """Stratified delete-one-unit jackknife (Cochran 1977, section 6.17): every unit is left out once and the whole
    estimate made anew."""
    unit = points["cluster"] if "cluster" in points else pd.Series(points.index, index=points.index)
    variance = np.zeros(1)
    for stratum in strata["stratum"]:
        here = points["stratum"] == stratum
        units = unit[here].unique()
        values = np.array([statistic(points[unit != u], strata) for u in units])
        variance = variance + (len(units) - 1) / len(units) * ((values - values.mean(axis=0)) ** 2).sum(axis=0)
    return np.sqrt(variance)


def plain_statistics(points, strata):
    """Accuracies, areas and kappa straight from their definitions, by weights per point."""
    n_h = points["stratum"].value_counts()
    weight = points["stratum"].map(strata.set_index("stratum")["area"] / n_h) / strata["area"].sum()
    right = points["map"] == points["reference"]
    first = points["map"] == CLASSES[0]
    true = points["reference"] == CLASSES[0]
    both = (weight * (first & true)).sum()
    table = pd.crosstab(points["map"], points["reference"], weight, aggfunc="sum", dropna=False)
    table = table.reindex(index=CLASSES[:3], columns=CLASSES[:3]).fillna(0).to_numpy()
    chance = table.sum(axis=0) @ table.sum(axis=1)
    return np.array([
        (weight * right).sum(), both / (weight * first).sum(), both / (weight * true).sum(),
        2 * both / ((weight * first).sum() + (weight * true).sum()), (weight * true).sum(),
        (np.trace(table) - chance) / (1 - chance),
    ])  # fmt: skip


def random_sample(seed, *, clusters):
    rng = np.random.default_rng(seed)
    rows = []
    for h, n in enumerate((30, 45, 60)):
        for unit in range(n):
            drift = rng.dirichlet(np.ones(3) * 3)
            for _ in range(rng.integers(2, 6) if clusters else 1):
                true = rng.choice(3, p=drift if clusters else [0.5, 0.3, 0.2])
                mapped = true if rng.random() < 0.75 else rng.integers(3)
                rows.append((f"s{h}", CLASSES[mapped], CLASSES[true], f"{h}/{unit}"))
    points = pd.DataFrame(rows, columns=["stratum", "map", "reference", "cluster"])
    strata = pd.DataFrame({"stratum": ["s0", "s1", "s2"], "area": [5.0, 20.0, 75.0]})
    return (points if clusters else points.drop(columns="cluster")), strata


@pytest.mark.parametrize("clusters", [False, True])
def test_linearised_errors_agree_with_a_jackknife(clusters):
    points, strata = random_sample(4, clusters=clusters)
    found = assess(points, strata, PLAIN)
    name = CLASSES[0]
    shown = (
        found.overall_accuracy, found.users_accuracy[name], found.producers_accuracy[name], found.f1[name],
        found.area[name].estimated.scaled(1 / found.total_area), found.kappa,
    )  # fmt: skip
    np.testing.assert_allclose([e.estimate for e in shown], plain_statistics(points, strata), rtol=1e-10)
    brute = jackknife(points, strata, plain_statistics)
    np.testing.assert_allclose([e.standard_error for e in shown], brute, rtol=0.05)


def test_clusters_of_one_point_are_points():
    points, strata = random_sample(8, clusters=False)
    of_points = figures(assess(points, strata))
    of_clusters = figures(assess(points.assign(cluster=points.index.astype(str)), strata))
    pd.testing.assert_frame_equal(of_points, of_clusters, rtol=1e-9)


def test_points_of_a_cluster_alike_count_as_one():
    """A cluster whose points all tell the same is worth one point: standard errors do not shrink by repeating it."""
    points, strata = random_sample(9, clusters=False)
    named = points.assign(cluster=points.index.astype(str))
    fivefold = pd.concat([named] * 5, ignore_index=True)
    once, repeated = assess(points, strata), assess(fivefold, strata)
    assert repeated.overall_accuracy.standard_error == pytest.approx(once.overall_accuracy.standard_error)
    assert repeated.kappa.standard_error == pytest.approx(once.kappa.standard_error)


def test_clusters_across_strata_are_post_stratified():
    """Särndal, Swensson & Wretman 1992, section 7.6: residuals about post-stratum means, summed per cluster, all
    clusters in one group."""
    points, strata = random_sample(10, clusters=True)
    points["cluster"] = (np.arange(len(points)) // 7).astype(str)  # most within a stratum, two across
    found = assess(points, strata, PLAIN).overall_accuracy.standard_error
    W = strata.set_index("stratum")["area"] / strata["area"].sum()
    right = (points["map"] == points["reference"]).astype(float)
    by_stratum = right.groupby(points["stratum"])
    residual = (right - by_stratum.transform("mean")) * points["stratum"].map(W) / by_stratum.transform("size")
    totals = residual.groupby(points["cluster"]).sum()
    m = len(totals)
    assert found == pytest.approx(np.sqrt(m / (m - 1) * ((totals - totals.mean()) ** 2).sum()), rel=1e-9)


@pytest.mark.parametrize("clusters", [False, True])
def test_bootstrap_spreads_like_the_linearised_errors(clusters):
    """Half the width of a percentile interval is 1.96 standard errors where statistics are nearly normal."""
    points, strata = random_sample(5, clusters=clusters)
    found = assess(points, strata, AssessmentOptions(interval="bootstrap", replicates=4000, seed=3))
    for estimate in (found.overall_accuracy, found.kappa, found.area[CLASSES[0]].estimated):
        assert estimate.interval == "bootstrap"
        assert (estimate.upper - estimate.lower) / 2 == pytest.approx(1.96 * estimate.standard_error, rel=0.07)


def test_bootstrap_is_right_for_strata_of_two_points():
    """Where drawing n of n units again would halve the variance (Rao & Wu 1988 draw n - 1)."""
    rng = np.random.default_rng(2)
    names = [f"s{i:02d}" for i in range(60)]
    points = pd.DataFrame({"stratum": names * 2, "map": "clay", "reference": rng.choice(CLASSES[:2], 120)})
    strata = pd.DataFrame({"stratum": names, "area": 1.0})
    found = assess(points, strata, AssessmentOptions(interval="bootstrap", replicates=4000)).overall_accuracy
    assert (found.upper - found.lower) / 2 == pytest.approx(1.96 * found.standard_error, rel=0.1)


def test_bootstrap_honours_the_finite_population_and_the_seed():
    points, strata = random_sample(6, clusters=False)
    pixels = pd.DataFrame({"stratum": ["s0", "s1", "s2"], "area": strata["area"], "pixels": [40, 60, 80]})
    options = AssessmentOptions(interval="bootstrap", replicates=3000, seed=1)
    found = assess(points, pixels, options).overall_accuracy
    assert (found.upper - found.lower) / 2 == pytest.approx(1.96 * found.standard_error, rel=0.07)
    without = assess(points, pixels, replace(options, finite_population=False)).overall_accuracy
    assert without.standard_error > 1.5 * found.standard_error
    assert assess(points, pixels, options).overall_accuracy == found
    assert assess(points, pixels, replace(options, seed=2)).overall_accuracy.lower != found.lower


def test_finite_population_correction_is_cochrans():
    """Cochran 1977, eq. 5.7, written out."""
    points, strata = random_sample(7, clusters=False)
    N = pd.Series({"s0": 50, "s1": 200, "s2": 70})
    found = assess(points, strata.assign(pixels=strata["stratum"].map(N)), PLAIN).overall_accuracy.standard_error
    right = (points["map"] == points["reference"]).astype(float).groupby(points["stratum"])
    W, n, s2 = strata.set_index("stratum")["area"] / strata["area"].sum(), right.size(), right.var(ddof=1)
    assert found == pytest.approx(np.sqrt((W**2 * (1 - n / N) * s2 / n).sum()), rel=1e-12)


def test_kappa_slope_is_its_derivative():
    """The linearised kappa under stratification: its variance against one from numerical derivatives of kappa."""
    points, strata = random_sample(11, clusters=False)
    t = tally(sample_from_points(points, strata, PLAIN), finite_population=False)
    k, step = 3, 1e-6
    slopes = []
    for cell in range(len(t.share)):
        moved = np.stack([t.share.copy(), t.share.copy()])
        moved[:, cell] += [-step, step]
        low, high = kappa_values(area_matrix(moved, t, k))
        slopes.append((high - low) / (2 * step))
    z = np.repeat(np.array(slopes), t.repeats)
    stratum = np.repeat(t.stratum, t.repeats)
    variance = sum(t.weights[h] ** 2 * z[stratum == h].var(ddof=1) / (stratum == h).sum() for h in range(3))
    assert kappa(t, area_matrix(t.share, t, k)).standard_error == pytest.approx(np.sqrt(variance), rel=1e-5)


def test_matrix_and_points_are_one_sample():
    points, strata = random_sample(12, clusters=False)
    points["stratum"] = points["map"]
    strata["stratum"] = list(CLASSES[:3])
    matrix = pd.crosstab(points["map"], points["reference"]).reset_index()
    pd.testing.assert_frame_equal(
        assess(points, strata).accuracy_frame, assess_matrix(matrix, strata).accuracy_frame, rtol=1e-12
    )


def test_effective_size_of_a_simple_sample_is_its_own():
    points, _ = random_sample(13, clusters=False)
    t = tally(sample_from_points(points.drop(columns="stratum"), None, PLAIN), finite_population=False)
    found = linearise(t, [stat.overall_accuracy(t)])[0]
    assert found.effective_size == pytest.approx(len(points) - 1)
    limits = bounds(t, ratios_of([stat.overall_accuracy(t)]), 0.95, 50, 0)[0]
    assert limits.lower < found.value < limits.upper
