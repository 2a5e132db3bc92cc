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
from scipy.linalg import cho_factor, cho_solve
from sklearn.covariance import ledoit_wolf
from threadpoolctl import threadpool_limits

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


@dataclass(frozen=True, eq=False)
class Normal:
    """A class as a normal distribution: mean (f,), covariance (f, f), positive definite, its inverse and the logarithm
    of its determinant."""

    mean: Array
    covariance: Array
    inverse: Array
    log_det: float

    @classmethod
    def of(cls, mean: Array, covariance: Array) -> Normal:
        """With what follows from the two."""
        return cls(mean, covariance, np.asarray(np.linalg.inv(covariance)), float(np.linalg.slogdet(covariance)[1]))


def jeffries_matusita(a: Normal, b: Normal) -> float:
    """Distance of two normal distributions, 0..sqrt(2)."""
    gap = a.mean - b.mean
    middle, lower = cho_factor((a.covariance + b.covariance) / 2, lower=True)
    log_det = 2 * np.log(np.diag(middle)).sum()
    bhattacharyya = gap @ cho_solve((middle, lower), gap) / 8 + 0.5 * (log_det - 0.5 * (a.log_det + b.log_det))
    return float(_from_bhattacharyya(bhattacharyya))


def transformed_divergence(a: Normal, b: Normal) -> float:
    """Transformed divergence of two normal distributions, 0..2."""
    gap = a.mean - b.mean
    # The trace of a product of two matrices, the second symmetric, is the sum over their elements.
    trace = np.sum((a.covariance - b.covariance) * (b.inverse - a.inverse))
    divergence = 0.5 * trace + 0.5 * gap @ (a.inverse + b.inverse) @ gap
    return 2 * -math.expm1(-max(float(divergence), 0.0) / 8)


def _from_bhattacharyya(distance: Array | np.float64) -> Array:
    return np.asarray(np.sqrt(2 * -np.expm1(-np.maximum(distance, 0.0))))


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
    # Matrices are small: the linear algebra library's threads would wait for each other most of the time.
    with threadpool_limits(limits=1):
        moments = {
            code: _moments(part[:, changing] / within[changing]) for code, part in parts.items() if len(part) > 1
        }
        pairs = [_pair(a, b, moments[a], moments[b], names) for a, b in combinations(sorted(moments), 2)]
    return tuple(sorted(pairs, key=lambda pair: (pair.jeffries_matusita, pair.a, pair.b)))


def _moments(part: Array) -> Normal:
    shrunk = ledoit_wolf(part)[0]
    # A class may be constant in a feature in which others are not; its covariance must stay invertible.
    return Normal.of(part.mean(axis=0), shrunk + 1e-6 * np.eye(part.shape[1]))


def _pair(a: int, b: int, first: Normal, second: Normal, names: NDArray[np.str_]) -> Pair:
    alone = _each_alone(first, second)
    best = np.argsort(alone, kind="stable")[::-1][:3]
    return Pair(
        a,
        b,
        jeffries_matusita(first, second),
        transformed_divergence(first, second),
        tuple((str(names[f]), float(alone[f])) for f in best),
    )


def _each_alone(first: Normal, second: Normal) -> Array:
    """Jeffries-Matusita distance by each feature on its own, float64 (f,)."""
    one, other = np.diag(first.covariance), np.diag(second.covariance)
    middle = (one + other) / 2
    gap = first.mean - second.mean
    return _from_bhattacharyya(gap**2 / middle / 8 + 0.5 * np.log(middle / np.sqrt(one * other)))
