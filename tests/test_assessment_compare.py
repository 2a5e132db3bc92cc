"""Two maps on one sample: McNemar against statsmodels, paired differences against brute force."""

from __future__ import annotations

import json

import numpy as np
import pandas as pd
import pytest
from statsmodels.stats.contingency_tables import mcnemar

from classify.assessment import AssessmentOptions, assess, compare
from classify.errors import SampleError

PLAIN = AssessmentOptions(interval="normal")


def two_maps(seed, n=400, second=0.85):
    rng = np.random.default_rng(seed)
    truth = rng.choice(list("abc"), n)
    first = np.where(rng.random(n) < 0.75, truth, rng.choice(list("abc"), n))
    # The second map is right mostly where the first is.
    again = np.where(rng.random(n) < 0.7, first, np.where(rng.random(n) < second, truth, rng.choice(list("abc"), n)))
    return pd.DataFrame({
        "stratum": rng.choice(["s", "t"], n), "map": first, "other_map": again, "reference": truth,
        "cluster": rng.integers(0, 60, n),
    })  # fmt: skip


STRATA = pd.DataFrame({"stratum": ["s", "t"], "area": [1.0, 3.0]})


@pytest.mark.parametrize("n", [30, 400])
def test_mcnemar_agrees_with_statsmodels(n):
    points = two_maps(1, n).drop(columns=["stratum", "cluster"])
    found = compare(points, None, PLAIN).mcnemar
    first, second = points["map"] == points["reference"], points["other_map"] == points["reference"]
    table = pd.crosstab(first, second).reindex(index=[True, False], columns=[True, False], fill_value=0).to_numpy()
    discordant = table[0, 1] + table[1, 0]
    referee = mcnemar(table, exact=bool(discordant < 25), correction=True)
    assert found.exact == (discordant < 25) == (n == 30)
    assert (found.statistic, found.p_value) == pytest.approx((referee.statistic, referee.pvalue))
    counts = (found.both_right, found.only_first_right, found.only_second_right, found.neither_right)
    assert counts == (table[0, 0], table[0, 1], table[1, 0], table[1, 1])


def test_differences_are_of_what_assess_says_of_each_map():
    points = two_maps(2).drop(columns="cluster")
    found = compare(points, STRATA, PLAIN)
    one = assess(points.drop(columns="other_map"), STRATA, PLAIN)
    two = assess(points.drop(columns="map").rename(columns={"other_map": "map"}), STRATA, PLAIN)
    assert found.overall_accuracy.first == one.overall_accuracy
    for name in found.classes:
        for pair, a, b in (
            (found.users_accuracy[name], one.users_accuracy[name], two.users_accuracy[name]),
            (found.producers_accuracy[name], one.producers_accuracy[name], two.producers_accuracy[name]),
        ):
            assert pair.first.estimate == pytest.approx(a.estimate)
            assert pair.second.standard_error == pytest.approx(b.standard_error)
            assert pair.difference.estimate == pytest.approx(b.estimate - a.estimate)


@pytest.mark.parametrize("clusters", [False, True])
def test_errors_of_differences_agree_with_a_jackknife(clusters):
    points = two_maps(3, 240)
    points["unit"] = points["stratum"] + points["cluster"].astype(str) if clusters else points.index.astype(str)
    points["cluster"] = points["unit"]
    found = compare(points if clusters else points.drop(columns="cluster"), STRATA, PLAIN)

    def differences(p):
        w = p["stratum"].map({"s": 0.25, "t": 0.75}) / p.groupby("stratum")["map"].transform("size")
        values = []
        for column, sign in (("map", -1), ("other_map", 1)):
            right = p[column] == p["reference"]
            is_a, true_a = p[column] == "a", p["reference"] == "a"
            values.append(sign * np.array([
                (w * right).sum(), (w * (is_a & true_a)).sum() / (w * is_a).sum(),
                (w * (is_a & true_a)).sum() / (w * true_a).sum(),
            ]))  # fmt: skip
        return values[0] + values[1]

    variance = np.zeros(3)
    for stratum in ("s", "t"):
        units = points.loc[points["stratum"] == stratum, "unit"].unique()
        values = np.array([differences(points[points["unit"] != u]) for u in units])
        variance += (len(units) - 1) / len(units) * ((values - values.mean(axis=0)) ** 2).sum(axis=0)
    shown = (found.overall_accuracy, found.users_accuracy["a"], found.producers_accuracy["a"])
    np.testing.assert_allclose([p.difference.estimate for p in shown], differences(points), rtol=1e-10)
    np.testing.assert_allclose([p.difference.standard_error for p in shown], np.sqrt(variance), rtol=0.05)


def test_pairing_makes_differences_sharper_than_two_samples():
    found = compare(two_maps(4).drop(columns=["stratum", "cluster"]), None, PLAIN).overall_accuracy
    apart = np.hypot(found.first.standard_error, found.second.standard_error)
    assert found.difference.standard_error < 0.8 * apart


def test_the_sentence_says_what_the_interval_does():
    better = compare(two_maps(5, 900, second=1.0).drop(columns=["stratum", "cluster"]), None, PLAIN)
    assert better.overall_accuracy.difference.lower > 0
    assert "percentage points more" in better.in_words and "the second map is better" in better.in_words
    same = two_maps(6, 60, second=0.72).drop(columns=["stratum", "cluster"])
    unclear = compare(same, None, PLAIN, names=("spring", "autumn"))
    assert unclear.overall_accuracy.difference.lower <= 0 <= unclear.overall_accuracy.difference.upper
    assert "Autumn is right on" in unclear.in_words and "does not show that one map is better" in unclear.in_words
    same["other_map"] = same["map"]
    alike = compare(same, None, PLAIN)
    assert "no difference" in alike.in_words and alike.mcnemar.p_value == 1
    assert alike.overall_accuracy.difference.lower is None
    json.dumps(alike.to_json(), allow_nan=False)


def test_swapping_the_maps_turns_the_signs():
    points = two_maps(7)
    there = compare(points, STRATA, AssessmentOptions())
    back = compare(points.rename(columns={"map": "other_map", "other_map": "map"}), STRATA, AssessmentOptions())
    d, e = there.overall_accuracy.difference, back.overall_accuracy.difference
    assert (d.estimate, d.lower, d.upper) == pytest.approx((-e.estimate, -e.upper, -e.lower))
    assert there.mcnemar.only_first_right == back.mcnemar.only_second_right


def test_weighted_designs_are_told_that_mcnemar_does_not_weigh():
    assert any("McNemar" in w for w in compare(two_maps(8).drop(columns="cluster"), STRATA, PLAIN).warnings)
    plain = two_maps(8).drop(columns=["cluster", "stratum"])
    assert not any("McNemar" in w for w in compare(plain, None, PLAIN).warnings)


def test_bootstrap_of_the_difference_and_purposive_samples():
    points = two_maps(9, 600).drop(columns="cluster")
    d = compare(points, STRATA, AssessmentOptions(interval="bootstrap", replicates=3000)).overall_accuracy.difference
    assert d.interval == "bootstrap"
    assert (d.upper - d.lower) / 2 == pytest.approx(1.96 * d.standard_error, rel=0.07)
    chosen = compare(points, STRATA, AssessmentOptions(evidence="purposive sample"))
    assert chosen.overall_accuracy.difference.lower is None and "of the sampled places" in chosen.in_words


def test_second_map_is_asked_for():
    with pytest.raises(SampleError, match="no column 'other_map'"):
        compare(two_maps(1).drop(columns="other_map"), STRATA, PLAIN)


def test_display_and_frame():
    found = compare(two_maps(10), STRATA, PLAIN)
    assert set(found.frame["of"]) == {"first map", "second map", "difference"}
    assert "percentage points" in found._repr_html_()


def test_stratum_without_points_is_told_of_both_maps():
    empty = pd.concat([STRATA, pd.DataFrame({"stratum": ["u"], "area": [2.0]})], ignore_index=True)
    found = compare(two_maps(2).drop(columns="cluster"), empty, PLAIN)
    assert "of the sampled area" in found.in_words and "mapped area" not in found.in_words
    content = found.to_json()
    assert content["design"]["reservations"] == ["part left out"] and "left out" in content["claim"]
    whole = compare(two_maps(2).drop(columns="cluster"), STRATA, PLAIN)
    assert "of the mapped area" in whole.in_words and whole.reservations == ()
