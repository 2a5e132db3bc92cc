"""What real samples bring: gaps, lone points, second labels, repeats, merged classes, regions, chosen places."""

from __future__ import annotations

import json

import numpy as np
import pandas as pd
import pytest

import classify
from classify.assessment import AssessmentOptions, assess, assess_matrix
from classify.assessment.estimation import estimate_sample
from classify.assessment.inputs import sample_from_points
from classify.errors import SampleError


def sample(rows, columns=("stratum", "map", "reference")):
    return pd.DataFrame(rows, columns=list(columns))


def strata(**areas):
    return pd.DataFrame({"stratum": list(areas), "area": list(areas.values())})


TWO = [("a", "a", "a")] * 8 + [("a", "a", "b")] * 2 + [("b", "b", "b")] * 9 + [("b", "b", "a")]
AREAS = strata(a=30.0, b=70.0)


def only_warning(found, fragment):
    hits = [text for text in found.warnings if fragment.casefold() in text.casefold()]
    assert len(hits) == 1, found.warnings
    return hits[0]


def test_lone_point_leaves_out_only_the_errors_it_bears_on():
    found = assess(sample([*TWO, ("c", "c", "c")]), strata(a=30.0, b=60.0, c=10.0))
    assert found.overall_accuracy.estimate == pytest.approx(0.3 * 0.8 + 0.6 * 0.9 + 0.1)
    assert found.overall_accuracy.standard_error is None and found.overall_accuracy.lower is None
    # The lone point's stratum is class c of the map, so it cannot bear on what is mapped as a.
    assert found.users_accuracy["a"].standard_error == pytest.approx(np.sqrt(0.8 * 0.2 / 9))
    assert found.users_accuracy["c"].standard_error is None
    assert found.producers_accuracy["a"].standard_error is None
    text = only_warning(found, "single labelled point")
    assert "'c'" in text and "Label at least one more there" in text
    json.dumps(found.to_json(), allow_nan=False)


def test_lone_point_in_a_stratum_that_is_no_class_bears_on_every_error():
    rows = [(f"s{stratum}", m, r) for stratum, m, r in TWO] + [("other", "b", "b")]
    found = assess(sample(rows), strata(sa=30.0, sb=60.0, other=10.0))
    assert found.users_accuracy["a"].standard_error is None
    assert found.users_accuracy["a"].estimate == pytest.approx(0.8)


def test_empty_stratum_is_left_out_and_said_so():
    found = assess(sample(TWO), strata(a=30.0, b=60.0, marsh=10.0))
    assert found.total_area == pytest.approx(90)
    assert sum(e.estimated.estimate for e in found.area.values()) == pytest.approx(90)
    assert found.overall_accuracy.estimate == pytest.approx((30 * 0.8 + 60 * 0.9) / 90)
    assert found.to_json()["design"]["strata"][2] == {"stratum": "marsh", "area": 10.0, "n": 0}
    assert [found.area[c].mapped for c in found.classes] == [30, 60]
    text = only_warning(found, "no labelled point lies in")
    assert "'marsh'" in text and "the 10 there, 10.0 % of the total area" in text


def test_class_only_on_the_map_and_class_only_among_references():
    rows = [("a", "a", "b")] * 10 + [("b", "b", "b")] * 9 + [("b", "b", "reeds")]
    found = assess(sample(rows), AREAS)
    assert found.classes == ("a", "b", "reeds")
    assert found.producers_accuracy["a"].estimate is None
    assert found.area["a"].estimated.estimate == 0
    assert found.area["a"].estimated.upper > 0, "not having seen a class does not show that there is none"
    assert found.users_accuracy["reeds"].estimate is None
    assert found.producers_accuracy["reeds"].estimate == 0
    assert found.area["reeds"].mapped == 0
    assert "no producer's accuracy" in only_warning(found, "is no point's reference label")
    assert "no user's accuracy" in only_warning(found, "no point is mapped as it")
    content = found.to_json()
    assert content["users_accuracy"]["reeds"]["estimate"] is None


def test_points_without_label_are_counted_and_bounded():
    rows = [*TWO, ("a", "a", None), ("a", "a", ""), ("b", "b", "too dark")]
    found = assess(sample(rows), AREAS, AssessmentOptions(unlabelled=("too dark",)))
    assert found.unlabelled.points == 3
    assert found.overall_accuracy.estimate == pytest.approx(0.3 * 0.8 + 0.7 * 0.9)
    low, high = found.unlabelled.overall_accuracy
    assert low == pytest.approx(0.3 * 8 / 12 + 0.7 * 9 / 11)
    assert high == pytest.approx(0.3 * 10 / 12 + 0.7 * 10 / 11)
    assert found.unlabelled.users_accuracy["a"] == pytest.approx((8 / 12, 10 / 12))
    assert found.to_json()["unlabelled"]["overall_accuracy"] == pytest.approx(
        {"if_all_wrong": low, "if_all_right": high}
    )
    assert "3 of 23 points" in only_warning(found, "no reference label")
    assert assess(sample(TWO), AREAS).unlabelled is None


def test_alternate_label_counts_beside_the_strict_one():
    table = sample(TWO)
    table["alternate"] = ""
    wrong = table.index[(table["map"] != table["reference"]) & (table["map"] == "a")]
    table.loc[wrong[0], "alternate"] = "a"
    found = assess(table, AREAS)
    assert found.overall_accuracy.estimate == pytest.approx(0.3 * 0.8 + 0.7 * 0.9), "the strict figure stays"
    assert found.either_label.overall_accuracy.estimate == pytest.approx(0.3 * 0.9 + 0.7 * 0.9)
    assert found.either_label.users_accuracy["a"].estimate == pytest.approx(0.9)
    assert found.either_label.points == 1
    assert assess(sample(TWO), AREAS).either_label is None


def test_repeated_points_count_once_and_contrary_ones_are_refused():
    table = sample(TWO).assign(id=[f"p{i}" for i in range(len(TWO))])
    twice = pd.concat([table, table.iloc[[3, 5]]], ignore_index=True)
    found = assess(twice, AREAS)
    assert found.matrix_counts.sum() == len(TWO)
    assert "2 points are listed more than once" in only_warning(found, "count once")
    twice.loc[len(TWO), "reference"] = "b"
    with pytest.raises(SampleError, match=rf"points, row {len(TWO) + 1}, column 'id': point 'p3' is listed before"):
        assess(twice, AREAS)


def test_merged_classes_are_those_of_a_table_written_merged():
    rows = [("a", "a", "a")] * 5 + [("a", "a", "b")] * 3 + [("b", "b", "a")] * 2 + [("b", "b", "c")] * 6
    rows += [("c", "c", "c")] * 7 + [("c", "c", "a")]
    areas = strata(a=10.0, b=20.0, c=70.0)
    merged = assess(sample(rows), areas, AssessmentOptions(merge={"a": "plants", "b": "plants"}))
    renamed = [(s, *("plants" if label in "ab" else label for label in labels)) for s, *labels in rows]
    by_hand = assess(sample(renamed), areas.assign(mapped_as=["plants", "plants", "c"]))
    assert merged.classes == ("plants", "c")
    assert merged.to_json() == by_hand.to_json()
    assert merged.area["plants"].mapped == pytest.approx(30)


def test_merging_a_matrix_is_merging_its_points():
    counts = pd.DataFrame({"map": ["a", "b", "c"], "a": [5, 2, 1], "b": [3, 0, 0], "c": [0, 6, 7]})
    rows = [(m, m, r) for m in "abc" for r in "abc" for _ in range(counts.set_index("map").loc[m, r])]
    areas, options = strata(a=10.0, b=20.0, c=70.0), AssessmentOptions(merge={"a": "plants", "b": "plants"})
    assert assess_matrix(counts, areas, options).to_json() == assess(sample(rows), areas, options).to_json()


def test_regions_are_domains_of_the_same_estimate():
    rng = np.random.default_rng(3)
    table = sample(TWO * 10)
    table["region"] = rng.choice(["north", "south"], len(table), p=[0.8, 0.2])
    found = assess(table, AREAS)
    north, south = found.regions
    assert (north.region, south.region) == ("north", "south")
    assert north.size.estimate + south.size.estimate == pytest.approx(100)
    for name in "ab":
        assert north.area[name].estimate + south.area[name].estimate == pytest.approx(
            found.area[name].estimated.estimate
        )
    # A domain mean under stratification, from its definition, with residuals 0 outside the domain.
    weight = table["stratum"].map({"a": 0.3 / 100, "b": 0.7 / 100})
    here = table["region"] == "north"
    right = (table["map"] == table["reference"]).astype(float)
    value = (weight * right * here).sum() / (weight * here).sum()
    assert north.overall_accuracy.estimate == pytest.approx(value)
    d = (right - value) * here / (weight * here).sum()
    parts = [w**2 * d[table["stratum"] == s].var(ddof=1) / 100 for s, w in (("a", 0.3), ("b", 0.7))]
    assert north.overall_accuracy.standard_error == pytest.approx(np.sqrt(sum(parts)))
    assert list(found.to_json()["regions"]) == ["north", "south"]


def test_small_region_is_said_to_be_rough():
    table = sample(TWO).assign(region=["east"] * 17 + ["west"] * 3)
    found = assess(table, AREAS)
    assert "region 'west' has 3 labelled points" in only_warning(found, "'west'").lower()


def test_purposive_sample_gives_agreement_and_nothing_for_the_area():
    found = assess(sample(TWO), AREAS, AssessmentOptions(evidence="purposive sample"))
    assert found.overall_accuracy.estimate == pytest.approx(17 / 20), "no stratum weights: places were chosen"
    assert found.overall_accuracy.standard_error is None and found.overall_accuracy.lower is None
    assert found.kappa.estimate is not None and found.kappa.lower is None
    assert all(area.estimated.estimate is None for area in found.area.values())
    assert found.area["a"].mapped == 30
    assert "were chosen" in found.evidence.claim
    assert only_warning(found, "purposive sample")


def test_class_that_may_hide_in_a_large_stratum_is_pointed_out():
    rows = [("rare", "rare", "rare")] * 45 + [("rare", "rare", "rest")] * 5 + [("rest", "rest", "rest")] * 60
    found = assess(sample(rows), strata(rare=10.0, rest=990.0))
    # 1 - 0.05^(1/60) = 4.87 % of 990 (exact binomial limit)
    assert "'rare' was not found in stratum 'rest', but up to 48.2" in only_warning(found, "could lie there unseen")
    assert not [w for w in assess(sample(TWO), AREAS).warnings if "unseen" in w]


def test_nothing_wrong_in_the_sample_is_not_certainty():
    rows = [(name, name, name) for name in "ab" for _ in range(30)]
    for interval in ("automatic", "normal", "student", "bootstrap"):
        found = assess(sample(rows), AREAS, AssessmentOptions(interval=interval, replicates=50))
        assert found.overall_accuracy.estimate == 1 and found.overall_accuracy.standard_error == 0
        assert found.overall_accuracy.lower < 0.97 and found.overall_accuracy.interval == "wilson"
        assert found.kappa.estimate == 1 and found.kappa.lower is None
    assert only_warning(found, "kappa has no interval")


def test_warnings_on_classes_go_by_points():
    """A class with points has been seen, even where what was seen of it has no share in the statistic."""
    found = assess(sample([("a", "a", "b")] * 5 + [("b", "b", "a")] * 5), AREAS)
    assert found.overall_accuracy.estimate == 0 and found.kappa.standard_error == 0
    assert only_warning(found, "kappa has no interval, as the labelled points of each stratum are all alike")
    assert not any("no labelled point disagrees" in text for text in found.warnings)


def test_systematic_sample_and_few_clusters_are_remarked_on():
    options = AssessmentOptions(kind="systematic")
    found = assess(sample(TWO).drop(columns="stratum"), strata(everything=100.0), options)
    assert found.design_kind == "systematic" and only_warning(found, "systematic sample")
    afterwards = assess(sample(TWO), AREAS, options)
    assert afterwards.design_kind == "systematic" and afterwards.post_stratified
    assert only_warning(afterwards, "systematic sample")
    clustered = assess(sample(TWO).assign(cluster=[f"c{i // 2}" for i in range(20)]), AREAS)
    assert clustered.clustered and "10 clusters" in only_warning(clustered, "number, not that of the points")


def test_one_class_only_has_no_kappa():
    found = assess(sample([("a", "a", "a")] * 5), strata(a=5.0))
    assert found.kappa.estimate is None and only_warning(found, "kappa cannot be estimated")
    json.dumps(found.to_json(), allow_nan=False)


def test_labels_may_be_numbers_and_have_gaps():
    numbers = pd.DataFrame(
        {"stratum": [1, 1, 1, 2, 2, 2], "map": [1, 1, 1, 2, 2, 2], "reference": [1, 1, 2, 2, 2, np.nan]}
    )
    found = assess(numbers, pd.DataFrame({"stratum": [1.0, 2.0], "area": [4, 6]}))
    assert found.classes == ("1", "2") and found.unlabelled.points == 1


def test_public_names_and_notebook_display():
    found = classify.assess(sample(TWO), AREAS, classify.AssessmentOptions(area_unit="<ha>"))
    assert isinstance(found, classify.Assessment)
    text = found._repr_html_()
    assert ("Probability sample." in text and "user&#x27;s accuracy" in text) or "user's accuracy" in text
    assert "&lt;ha&gt;" in text and "<ha>" not in text
    with pytest.raises(AttributeError):
        found.total_area = 1.0
    tidy = found.accuracy_frame
    assert list(tidy.columns[:4]) == ["measure", "class", "estimate", "standard_error"]
    assert tidy["estimate"].dtype == np.float64
    commission = tidy.set_index(["measure", "class"]).loc[("commission error", "a")]
    assert (commission["estimate"], commission["upper"]) == pytest.approx((0.2, 1 - found.users_accuracy["a"].lower))


def test_json_has_every_key_of_the_contract():
    content = assess(sample(TWO), AREAS, AssessmentOptions(area_unit="ha")).to_json()
    expected = [
        "schema", "evidence", "confidence_level", "classes", "area_unit", "total_area", "design", "matrix_counts",
        "matrix_area_proportions", "overall_accuracy", "users_accuracy", "producers_accuracy", "f1", "area", "kappa",
        "quantity_disagreement", "allocation_disagreement", "warnings",
    ]  # fmt: skip
    assert set(expected) <= set(content)
    assert content["design"]["kind"] == "stratified"
    assert set(content["area"]["a"]) == {"mapped", "estimate", "standard_error", "lower", "upper", "interval"}
    assert content["matrix_counts"] == [[8, 2], [1, 9]]


def test_samples_off_the_map_are_a_domain_of_the_design():
    """Points off the map still tell how much of a stratum is mapped (Cochran 1977, section 2.13)."""
    rows = [("old", "a", "a")] * 6 + [("old", "a", "b")] * 2 + [("old", "", "b")] * 2 + [("new", "b", "b")] * 9
    rows += [("new", "b", "a")]
    options = AssessmentOptions()
    checked = sample_from_points(sample(rows), strata(old=50.0, new=50.0), options, may_lie_off_map=True)
    found = estimate_sample(checked, options)
    assert found.total_area == pytest.approx(50 * 0.8 + 50)
    assert found.overall_accuracy.estimate == pytest.approx((50 * 0.6 + 50 * 0.9) / 90)
    assert found.area["a"].estimated.estimate == pytest.approx(50 * 0.6 + 50 * 0.1)
    # Its standard error is that of a mean over all points drawn: 50^2 (s^2 / 10) per stratum, off the map counted as 0.
    variance = sum(50**2 * np.var([1] * ones + [0] * (10 - ones), ddof=1) / 10 for ones in (6, 1))
    assert found.area["a"].estimated.standard_error == pytest.approx(np.sqrt(variance))
    # Accuracies are ratios to the mapped part.
    d = [
        np.array([1 - r] * right + [-r] * wrong + [0] * off)
        for r in (75 / 90,)
        for right, wrong, off in ((6, 2, 2), (9, 1, 0))
    ]
    error = np.sqrt(sum(50**2 * np.var(part, ddof=1) / 10 for part in d)) / 90
    assert found.overall_accuracy.standard_error == pytest.approx(error)
    assert found.matrix_area_proportions.sum() == pytest.approx(1)
    assert "2 of 20 points lie outside the map" in only_warning(found, "outside the map")
