"""How far apart classes lie in feature space, and which features part them.

Both measures take classes as normal: Jeffries-Matusita distance sqrt(2 (1 - exp(-B))), B the Bhattacharyya distance,
0..sqrt(2); transformed divergence 2 (1 - exp(-D / 8)), D the divergence, 0..2 (Swain & Davis 1978, Remote Sensing: The
Quantitative Approach).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import combinations
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from sklearn.covariance import ledoit_wolf

from classify.training.dataset import TrainingSet
from classify.training.draws import even_draw

Verdict = Literal["weak", "fair", "good"]
Array = NDArray[np.float64]
# Common practice in the squared form: above 1.9 classes part well, below 1.7 many of their pixels are mixed up.
_FAIR, _GOOD = np.sqrt(1.7), np.sqrt(1.9)
_PIXELS_PER_CLASS = 4000


@dataclass(frozen=True)
class Pair:
    """Two classes (codes a < b), their distances, and the three features that part them best on their own."""

    a: int
    b: int
    jeffries_matusita: float
    transformed_divergence: float
    best_features: tuple[tuple[str, float], ...]

    @property
    def verdict(self) -> Verdict:
        """Whether the two can be told apart by these features."""
        return "weak" if self.jeffries_matusita < _FAIR else "fair" if self.jeffries_matusita < _GOOD else "good"


def jeffries_matusita(mean_a: Array, cov_a: Array, mean_b: Array, cov_b: Array) -> float:
    """Distance of two normal distributions, 0..sqrt(2). Means (f,), covariances (f, f), positive definite."""
    gap, middle = mean_a - mean_b, (cov_a + cov_b) / 2
    bhattacharyya = gap @ np.linalg.solve(middle, gap) / 8 + 0.5 * (
        _log_det(middle) - 0.5 * (_log_det(cov_a) + _log_det(cov_b))
    )
    return math.sqrt(2 * -math.expm1(-max(float(bhattacharyya), 0.0)))


def transformed_divergence(mean_a: Array, cov_a: Array, mean_b: Array, cov_b: Array) -> float:
    """Transformed divergence of two normal distributions, 0..2. Means (f,), covariances (f, f), positive definite."""
    gap = mean_a - mean_b
    inverse_a, inverse_b = np.linalg.inv(cov_a), np.linalg.inv(cov_b)
    divergence = 0.5 * np.trace((cov_a - cov_b) @ (inverse_b - inverse_a)) + 0.5 * gap @ (inverse_a + inverse_b) @ gap
    return 2 * -math.expm1(-max(float(divergence), 0.0) / 8)


def separability(training: TrainingSet, seed: int = 0) -> tuple[Pair, ...]:
    """Every pair of classes, the weakest first. Covariances are shrunk (Ledoit & Wolf 2004) so that few pixels will do.

    Features that never change are left out; polygons count evenly, by a seeded draw.
    """
    parts = {}
    for code in training.class_codes:
        mine = np.flatnonzero(training.codes == code)
        mine = mine[even_draw(training.polygon[mine], _PIXELS_PER_CLASS, seed)]
        parts[int(code)] = training.features[mine].astype(np.float64)
    # The scale of a feature is its spread within classes: standing far apart must not hide how tight classes are.
    within = np.sqrt(np.mean([part.var(axis=0) for part in parts.values()], axis=0))
    changing = within > 1e-9 * np.maximum(1.0, np.abs(training.features.astype(np.float64)).max(axis=0))
    if not changing.any():
        return ()
    names = np.array(training.feature_names)[changing]
    moments = {code: _moments(part[:, changing] / within[changing]) for code, part in parts.items() if len(part) > 1}
    pairs = [_pair(a, b, moments[a], moments[b], names) for a, b in combinations(sorted(moments), 2)]
    return tuple(sorted(pairs, key=lambda pair: (pair.jeffries_matusita, pair.a, pair.b)))


def _moments(part: Array) -> tuple[Array, Array]:
    shrunk = ledoit_wolf(part)[0]
    # A class may be constant in a feature in which others are not; its covariance must stay invertible.
    return part.mean(axis=0), shrunk + 1e-6 * np.eye(part.shape[1])


def _pair(a: int, b: int, first: tuple[Array, Array], second: tuple[Array, Array], names: NDArray[np.str_]) -> Pair:
    alone = [
        jeffries_matusita(first[0][[f]], first[1][[f]][:, [f]], second[0][[f]], second[1][[f]][:, [f]])
        for f in range(len(names))
    ]
    best = np.argsort(alone, kind="stable")[::-1][:3]
    return Pair(
        a,
        b,
        jeffries_matusita(*first, *second),
        transformed_divergence(*first, *second),
        tuple((str(names[f]), alone[f]) for f in best),
    )


def _log_det(matrix: Array) -> float:
    return float(np.linalg.slogdet(matrix)[1])
