"""Planning: published sizes, closed forms against brute force, allocations, and what is refused."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner
from hypothesis import given
from hypothesis import strategies as st

from classify.assessment import AssessmentOptions, assess_matrix
from classify.assessment.design import (
    ALLOCATIONS,
    FEWEST,
    Design,
    PlannedStratum,
    allocate,
    best_half_width,
    check_design,
    conjectured_make_up,
    least_total,
    pilot_make_up,
)
from classify.cli import plan as plan_command
from classify.cli.main import cli
from classify.errors import SampleError

# Olofsson, Foody, Herold, Stehman, Woodcock & Wulder 2014, Remote Sensing of Environment 148, section 5 (weights,
# conjectured accuracies and the size 641 from memory; the formula gives it to the printed digits).
WEIGHTS, USERS = (0.020, 0.015, 0.320, 0.645), (0.70, 0.60, 0.90, 0.95)
NAMES = ("deforestation", "forest gain", "stable forest", "stable non-forest")


def design(weights=WEIGHTS, users=USERS, pixels=None, names=NAMES) -> Design:
    make_up = conjectured_make_up(weights, users)
    pixels = pixels or [None] * len(weights)
    strata = tuple(PlannedStratum(n, w, m, n, p) for n, w, m, p in zip(names, weights, make_up, pixels, strict=True))
    return Design(strata, tuple(names))


def test_published_sample_size():
    d = design()
    overall = d.quantity("overall accuracy")
    assert least_total(d, overall, 0.01 * d.z, None) == 641
    assert least_total(d, overall, 0.01 * d.z, "neyman") == 641


def test_closed_forms_agree_with_simulation():
    """Multinomial samples, assessed by the estimator itself, spread as the plan says they will."""
    d = design((0.05, 0.25, 0.70), (0.7, 0.8, 0.9), names=("a", "b", "c"))
    sizes = (150, 200, 250)
    random = np.random.default_rng(4)
    draws = [_assessed(d, sizes, random) for _ in range(250)]
    for quantity in d.quantities:
        values = np.array([draw[quantity.measure, quantity.class_name] for draw in draws])
        planned = d.standard_error(quantity, sizes)
        # The spread of 250 replicates is itself known to about 4.5 % (one standard error); producer's accuracy is a
        # ratio, whose linearised error is a little off besides.
        assert np.std(values) == pytest.approx(planned, rel=0.16), quantity.name
        assert np.mean(values) == pytest.approx(quantity.value, abs=4 * planned / np.sqrt(250) + 0.003)


def _assessed(d: Design, sizes, random) -> dict:
    import pandas as pd

    counts = [random.multinomial(n, s.make_up) for n, s in zip(sizes, d.strata, strict=True)]
    matrix = pd.DataFrame(counts, columns=list(d.classes))
    matrix.insert(0, "map", [s.name for s in d.strata])
    strata = pd.DataFrame({"stratum": [s.name for s in d.strata], "area": [s.area for s in d.strata]})
    found = assess_matrix(matrix, strata, AssessmentOptions(interval="normal"))
    values = {("overall accuracy", None): found.overall_accuracy.estimate}
    for name in d.classes:
        values["user's accuracy", name] = found.users_accuracy[name].estimate
        values["producer's accuracy", name] = found.producers_accuracy[name].estimate
        values["area", name] = found.area[name].estimated.estimate
    return values


@given(
    st.lists(st.tuples(st.floats(0.01, 50), st.floats(0.05, 0.99), st.integers(2, 10_000)), min_size=2, max_size=7),
    st.integers(60, 1500),
    st.sampled_from(ALLOCATIONS),
)
def test_allocations_spend_all_within_bounds(strata, total, how):
    areas, users, pixels = zip(*strata, strict=True)
    d = design(areas, users, pixels, [f"s{i}" for i in range(len(areas))])
    total = min(total, sum(pixels))
    if total < FEWEST * len(pixels):
        return
    sizes = allocate(d, total, how)
    assert sum(sizes) == total
    assert all(FEWEST <= n <= p for n, p in zip(sizes, pixels, strict=True))
    if how == "floor":
        least = max(FEWEST, min(50, total // len(pixels)))
        assert all(n >= min(least, p) for n, p in zip(sizes, pixels, strict=True))


@given(st.lists(st.tuples(st.floats(0.05, 1), st.floats(0.3, 0.97)), min_size=2, max_size=5), st.integers(150, 900))
def test_neyman_is_best_for_overall_accuracy(strata, total):
    areas, users = zip(*strata, strict=True)
    d = design(areas, users, names=[f"s{i}" for i in range(len(areas))])
    overall = d.quantity("overall accuracy")
    widths = {how: d.half_width(overall, allocate(d, total, how)) for how in ALLOCATIONS}
    # Whole points and the least of two cost a little beside the closed form.
    assert widths["neyman"] <= min(widths.values()) * 1.002
    assert best_half_width(d, overall, total) <= widths["neyman"] * (1 + 1e-9)


def test_finite_population_correction_ends_at_a_census():
    d = design(pixels=[40, 30, 640, 1290])
    overall = d.quantity("overall accuracy")
    assert d.half_width(overall, (40, 30, 640, 1290)) == pytest.approx(0, abs=1e-9)
    assert least_total(d, overall, 1e-6, "proportional") == pytest.approx(2000, abs=1)


def test_pilot_keeps_doubt_where_it_saw_no_error():
    conjecture = conjectured_make_up((0.5, 0.5), (0.8, 0.8))
    mixed = pilot_make_up(np.array([[30, 0], [6, 24]]), conjecture)
    assert mixed[0][0] == pytest.approx(30.8 / 31)
    assert mixed[1] == pytest.approx(((6 + 0.2) / 31, (24 + 0.8) / 31))


def test_what_cannot_be_planned_is_said():
    with pytest.raises(SampleError, match="stratum 'forest gain' has 1 pixels"):
        check_design(design(pixels=[10, 1, 10, 10]))
    with pytest.raises(SampleError, match="300 points are asked for, but the strata have 80 pixels in all"):
        allocate(design(pixels=[20, 20, 20, 20]), 300, "equal")
    with pytest.raises(SampleError, match="7 points are too few for 4 strata"):
        allocate(design(), 7, "proportional")
    with pytest.raises(SampleError, match="classes are 'deforestation'"):
        design().quantity("area", "swamp")


def test_command_writes_one_table_and_one_figure(tmp_path: Path):
    table = "stratum,area,accuracy,pixels\n" + "".join(
        f"{n},{w},{u},{round(1e6 * w)}\n" for n, w, u in zip(NAMES, WEIGHTS, USERS, strict=True)
    )
    (tmp_path / "strata.csv").write_text(table)
    args = ["plan", "--strata", str(tmp_path / "strata.csv"), "--out", str(tmp_path / "out")]
    result = CliRunner().invoke(cli, [*args, "--standard-error", "0.01", "--json"], catch_exceptions=False)
    assert result.exit_code == 0
    plan = json.loads(result.stdout)
    assert plan == json.loads((tmp_path / "out" / "plan.json").read_text())
    assert plan["points"]["neyman"] == 641
    assert set(plan["allocations"]) == set(ALLOCATIONS) == set(plan_command.ALLOCATIONS)
    assert len(plan["quantities"]) == 1 + 3 * 4
    figure = (tmp_path / "out" / "plan.svg").read_text()
    assert "producer's accuracy of stable forest" in figure.replace("&#x27;", "'")
    assert "NaN" not in figure
    shown = CliRunner().invoke(cli, [*args, "--points", "300"], catch_exceptions=False)
    assert "area of stable non-forest" in shown.stdout


def test_command_refuses_unknown_names_and_two_wishes(tmp_path: Path):
    (tmp_path / "strata.csv").write_text("stratum,area\na,1\nb,2\n")
    args = ["plan", "--strata", str(tmp_path / "strata.csv"), "--out", str(tmp_path)]
    assert CliRunner().invoke(cli, [*args, "--points", "9", "--half-width", "0.1"]).exit_code == 2
    with pytest.raises(SampleError, match="'c', which is no stratum"):
        CliRunner().invoke(cli, [*args, "--points", "9", "--accuracy", "c=0.9"], catch_exceptions=False)


def test_a_class_smaller_than_the_floor_is_taken_whole(tmp_path: Path):
    d = design((10, 60, 30), (0.8, 0.8, 0.8), [30, 60_000, 30_000], ["rare", "b", "c"])
    # 50 each at least but for the 30 there are; the other 370 points in proportion to area over those with room.
    assert allocate(d, 500, "floor") == (30, 50 + 247, 50 + 123)
    (tmp_path / "strata.csv").write_text("stratum,area,pixels\nrare,10,30\nb,60,60000\nc,30,30000\n")
    args = ["plan", "--strata", str(tmp_path / "strata.csv"), "--out", str(tmp_path), "--points", "500"]
    assert CliRunner().invoke(cli, args, catch_exceptions=False).exit_code == 0
    with pytest.raises(SampleError, match="stratum 'rare' has 1 pixels to draw from, and 2 points are the least"):
        allocate(design((1, 2), (0.8, 0.8), [1, 90], ["rare", "b"]), 20, "floor")


def test_command_refuses_options_that_change_nothing(tmp_path: Path):
    (tmp_path / "strata.csv").write_text("stratum,area\na,1\nb,2\n")
    tables = ["--strata", str(tmp_path / "strata.csv"), "--out", str(tmp_path)]
    for args, message in (
        (["--points", "9", "--level", "0.9"], "--level: only with --strata"),
        ([*tables, "--points", "9", "--project", str(tmp_path)], "--project: not with --strata"),
    ):
        result = CliRunner().invoke(cli, ["plan", *args])
        assert result.exit_code == 2 and message in result.output
