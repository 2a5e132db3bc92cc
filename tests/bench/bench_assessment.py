"""Assessing a million labelled points (20 classes, 40 strata), beside a bare pandas table of the area matrix alone."""

from __future__ import annotations

from functools import partial

import numpy as np
import pandas as pd
from measure import alternate

from classify.assessment import AssessmentOptions, assess
from classify.assessment.estimation import estimate_sample
from classify.assessment.inputs import sample_from_points

CLASSES, STRATA = 20, 40


def large_sample(n: int) -> tuple[pd.DataFrame, pd.DataFrame]:
    rng = np.random.default_rng(1)
    names = np.array([f"class {i:02d}" for i in range(CLASSES)])
    strata = np.array([f"stratum {i:02d}" for i in range(STRATA)])
    truth = rng.integers(0, CLASSES, n)
    mapped = np.where(rng.random(n) < 0.8, truth, rng.integers(0, CLASSES, n))
    points = pd.DataFrame({
        "stratum": strata[rng.integers(0, STRATA, n)], "map": names[mapped], "reference": names[truth],
        "cluster": rng.integers(0, n // 10, n),
    })  # fmt: skip
    return points, pd.DataFrame({"stratum": strata, "area": rng.random(STRATA) * 1000})


def plain_pandas(points: pd.DataFrame, strata: pd.DataFrame) -> pd.DataFrame:
    """The area matrix alone: no errors, no intervals, no checks."""
    weight = strata.set_index("stratum")["area"] / points["stratum"].value_counts()
    counts = points.groupby(["stratum", "map", "reference"]).size()
    weighted = counts * weight.reindex(counts.index.get_level_values(0)).to_numpy()
    return weighted.groupby(level=[1, 2]).sum().unstack() / strata["area"].sum()


def rows(quick: bool) -> list[dict[str, object]]:
    n = 50_000 if quick else 1_000_000
    points, strata = large_sample(n)
    alone, options = points.drop(columns="cluster"), AssessmentOptions()
    sample = sample_from_points(alone, strata, options)
    found = assess(alone, strata).matrix_area_proportions
    np.testing.assert_allclose(found, plain_pandas(alone, strata).to_numpy(), rtol=1e-9)
    works = {
        "assess, stratified points": partial(assess, alone, strata),
        "  checking the tables": partial(sample_from_points, alone, strata, options),
        "  estimating": partial(estimate_sample, sample, options),
        "assess, clusters across strata": partial(assess, points, strata),
        "assess, 200 bootstrap replicates": partial(
            assess, alone, strata, AssessmentOptions(interval="bootstrap", replicates=200)
        ),
        "pandas, area matrix alone": partial(plain_pandas, alone, strata),
    }
    seconds = alternate(works, repeats=3)
    bare = seconds["pandas, area matrix alone"]
    return [
        {"work": name, "points": n, "seconds": round(value, 3), "times pandas": round(value / bare, 1)}
        for name, value in seconds.items()
    ]
