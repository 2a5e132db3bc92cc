"""How often do 95 % intervals hold the truth? A simulation, run by:  python tests/coverage_study.py

Samples are drawn over and over from invented populations whose truth is known exactly; every kind of interval is made
from each, and counted when it holds the truth. The table goes to tests/data/coverage.csv.
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from classify.assessment import statistics as st
from classify.assessment.agreement import area_matrix, kappa, kappa_values
from classify.assessment.bootstrap import bounds
from classify.assessment.estimate import linearise, tally
from classify.assessment.intervals import proportion, signed
from classify.assessment.sample import DesignKind, ReferenceSample, Stratum

TABLE = Path(__file__).parent / "data" / "coverage.csv"
LEVEL = 0.95
METHODS = ("automatic", "normal", "student", "bootstrap")
BOOTSTRAP_REPLICATES = 400


@dataclass(frozen=True)
class Population:
    """Strata of known weight; within each, `cells` (h, k, k) is the true joint distribution of map and reference class.

    n: points per stratum, or in all where kind is not stratified. cluster_size, likeness: of clusters, whose own
    distributions scatter about the stratum's by a Dirichlet law; the correlation within clusters is `likeness`.
    """

    name: str
    weights: np.ndarray
    cells: np.ndarray
    n: tuple[int, ...]
    strata_are_classes: bool
    kind: DesignKind = "stratified"
    cluster_size: int = 0
    likeness: float = 0.0

    @property
    def truth(self) -> np.ndarray:
        """Area proportions (k, k)."""
        return np.tensordot(self.weights, self.cells, axes=1)


def by_map_class(weights, rows):
    """Cells of strata that are map classes: row h of `rows` is the reference distribution within map class h."""
    k = len(rows)
    cells = np.zeros((k, k, k))
    cells[np.arange(k), np.arange(k)] = rows
    return np.array(weights), cells


POPULATIONS = (
    Population(
        "balanced",
        *by_map_class([0.25] * 4, [[0.85, 0.05, 0.05, 0.05], [0.08, 0.8, 0.06, 0.06], [0.04, 0.04, 0.88, 0.04],
                                   [0.1, 0.05, 0.1, 0.75]]),
        (75,) * 4, True,
    ),
    Population(
        "rare class of 1 %",
        *by_map_class([0.01, 0.14, 0.25, 0.60], [[0.8, 0.1, 0.05, 0.05], [0.01, 0.85, 0.1, 0.04],
                                                 [0.002, 0.05, 0.9, 0.048], [0.003, 0.02, 0.057, 0.92]]),
        (75, 75, 100, 250), True,
    ),
    Population(
        "strata unlike map classes",
        np.array([0.2, 0.5, 0.3]),
        np.array([
            [[0.50, 0.05, 0.05], [0.05, 0.15, 0.03], [0.02, 0.03, 0.12]],
            [[0.12, 0.03, 0.02], [0.04, 0.50, 0.06], [0.03, 0.05, 0.15]],
            [[0.10, 0.02, 0.04], [0.02, 0.14, 0.06], [0.03, 0.07, 0.52]],
        ]),
        (100,) * 3, False,
    ),
    Population(
        "clusters, 50 per stratum of 10 points",
        np.array([0.4, 0.6]),
        np.array([
            [[0.40, 0.06, 0.04], [0.05, 0.25, 0.03], [0.03, 0.02, 0.12]],
            [[0.15, 0.03, 0.02], [0.04, 0.35, 0.05], [0.03, 0.05, 0.28]],
        ]),
        (50, 50), False, cluster_size=10, likeness=0.15,
    ),
    Population(
        "clusters, 12 per stratum of 10 points",
        np.array([0.4, 0.6]),
        np.array([
            [[0.40, 0.06, 0.04], [0.05, 0.25, 0.03], [0.03, 0.02, 0.12]],
            [[0.15, 0.03, 0.02], [0.04, 0.35, 0.05], [0.03, 0.05, 0.28]],
        ]),
        (12, 12), False, cluster_size=10, likeness=0.15,
    ),
    Population(
        "small n",
        *by_map_class([0.3, 0.3, 0.4], [[0.8, 0.1, 0.1], [0.1, 0.75, 0.15], [0.05, 0.1, 0.85]]),
        (12,) * 3, True,
    ),
    Population(
        "very accurate map",
        *by_map_class([0.2, 0.3, 0.5], [[0.97, 0.02, 0.01], [0.01, 0.98, 0.01], [0.005, 0.005, 0.99]]),
        (50,) * 3, True,
    ),
    Population(
        "simple random, n = 200",
        np.array([1.0]),
        np.array([[[0.38, 0.04, 0.03], [0.04, 0.26, 0.02], [0.02, 0.03, 0.18]]]),
        (200,), False, kind="simple random",
    ),
    Population(
        "post-stratified, n = 300",
        *by_map_class([0.2, 0.3, 0.5], [[0.8, 0.1, 0.1], [0.1, 0.8, 0.1], [0.05, 0.07, 0.88]]),
        (300,), True, kind="post-stratified",
    ),
)  # fmt: skip


def draw(population: Population, rng: np.random.Generator) -> ReferenceSample:
    """One sample."""
    h, k, _ = population.cells.shape
    sizes = np.array(population.n)
    if population.kind == "post-stratified":
        sizes = rng.multinomial(population.n[0], population.weights)
    flat = population.cells.reshape(h, k * k)
    if population.cluster_size:
        spread = 1 / population.likeness - 1  # of the Dirichlet law, for this correlation within clusters
        rows = []
        for stratum, number in enumerate(sizes):
            alpha = np.repeat((flat[stratum] * spread)[None, :], number, axis=0)
            own = rng.standard_gamma(np.maximum(alpha, 1e-12))
            rows.append(rng.multinomial(population.cluster_size, own / own.sum(axis=1, keepdims=True)))
        counts, stratum_of = np.concatenate(rows), np.repeat(np.arange(h), sizes)
    else:
        counts, stratum_of = np.stack([rng.multinomial(n, p) for n, p in zip(sizes, flat, strict=True)]), np.arange(h)
    row, cell = np.nonzero(counts)
    names = tuple(f"class {i}" for i in range(k))
    mapped_as = names if population.strata_are_classes else (None,) * h
    strata = tuple(Stratum(f"stratum {i}", w, mapped_as=mapped_as[i]) for i, w in enumerate(population.weights))
    return ReferenceSample(
        classes=names, strata=strata, kind=population.kind, stratum=stratum_of[row], map=cell // k, reference=cell % k,
        count=counts[row, cell], cluster=row if population.cluster_size else None,
    )  # fmt: skip


def truths(population: Population) -> dict[str, float]:
    """True value of every statistic."""
    p = population.truth
    rows, columns, diagonal = p.sum(axis=1), p.sum(axis=0), np.diag(p)
    found = {"overall accuracy": float(diagonal.sum())}
    per_class = {
        "user's accuracy": diagonal / rows, "producer's accuracy": diagonal / columns,
        "F1": 2 * diagonal / (rows + columns), "area": columns,
    }  # fmt: skip
    for name, values in per_class.items():
        found |= {f"{name} of class {c}": float(v) for c, v in enumerate(values)}
    return found | {"kappa": float(kappa_values(p))}


def study(population: Population, replicates: int, seed: int, methods=METHODS) -> pd.DataFrame:
    """One row per statistic and interval: truth, coverage, how often the truth lay below and above, mean width."""
    rng, true = np.random.default_rng(seed), truths(population)
    makers: tuple[Callable, ...] = (st.users_accuracy, st.producers_accuracy, st.f1, st.area_proportion)
    k, names = population.cells.shape[1], list(true)
    values = np.array(list(true.values()))
    below, above, width, given = (np.zeros((len(methods), len(names))) for _ in range(4))
    for replicate in range(replicates):
        sample = draw(population, rng)
        t = tally(sample, finite_population=False)
        ratios = [st.overall_accuracy(t), *(make(t, c) for make in makers for c in range(k))]
        proportions = area_matrix(t.share, t, k)
        found, agreement = linearise(t, ratios), kappa(t, proportions)

        def statistics(shares, ratios=ratios, t=t):
            y, x = np.stack([r.y for r in ratios], axis=1), np.stack([r.x for r in ratios], axis=1)
            with np.errstate(divide="ignore", invalid="ignore"):
                return np.column_stack([(shares @ y) / (shares @ x), kappa_values(area_matrix(shares, t, k))])

        for m, method in enumerate(methods):
            limits = [None] * len(names)
            if method == "bootstrap":
                limits = bounds(t, statistics, LEVEL, BOOTSTRAP_REPLICATES, replicate)
            shown = [proportion(f, LEVEL, method, b) for f, b in zip(found, limits, strict=False)]
            shown.append(signed(agreement, LEVEL, method, limits[-1]))
            lower = np.array([np.nan if e.lower is None else e.lower for e in shown])
            upper = np.array([np.nan if e.upper is None else e.upper for e in shown])
            there = ~np.isnan(lower)
            below[m] += values < np.where(there, lower, -np.inf) - 1e-12
            above[m] += values > np.where(there, upper, np.inf) + 1e-12
            width[m] += np.where(there, upper - lower, 0.0)
            given[m] += there
    rows = []
    for m, method in enumerate(methods):
        for s, name in enumerate(names):
            n = given[m, s]
            rows.append({
                "population": population.name, "statistic": name, "truth": round(values[s], 4), "interval": method,
                "coverage": round(1 - (below[m, s] + above[m, s]) / n, 4), "truth_below": round(below[m, s] / n, 4),
                "truth_above": round(above[m, s] / n, 4), "mean_width": round(width[m, s] / n, 4),
                "replicates": int(n),
            })  # fmt: skip
    return pd.DataFrame(rows)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--replicates", type=int, default=5000)
    parser.add_argument("--out", type=Path, default=TABLE)
    arguments = parser.parse_args()
    tables = []
    for number, population in enumerate(POPULATIONS):
        start = time.perf_counter()
        tables.append(study(population, arguments.replicates, 20240611 + number))
        worst = tables[-1].groupby("interval")["coverage"].min().to_dict()
        print(f"{population.name}: {time.perf_counter() - start:.0f} s, lowest coverage {worst}", flush=True)  # noqa: T201
        pd.concat(tables).to_csv(arguments.out, index=False, lineterminator="\n")


if __name__ == "__main__":
    main()
