"""Support vector machines through matrix products: scikit-learn's labels and decision values, many times faster.

How it works. Kernel values of a block of pixels and a block of support vectors come from one matrix product (of the
pixel, its squared norm and 1 with the vector, 1 and its squared norm) and one vector exponential; a second product
with the dual coefficients gives their part of every pair's decision value. Parts are added in float64. With a linear
kernel each pair is one plane.

Why the labels are the same. With every decision value comes a bound on its rounding error (sums and products: Higham
2002, Accuracy and Stability of Numerical Algorithms, 2nd ed., ch. 3). Labels are first sought in float32. A pixel that
could have another label within these bounds is done again in float64, and one that still could is handed to
scikit-learn itself. Decision values are always made in float64.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from itertools import combinations
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sklearn.pipeline import Pipeline
from sklearn.svm import SVC

from classify.errors import ModelError

_EPS = float(np.finfo(np.float64).eps)
_Kind = type[np.float32] | type[np.float64]

# Pixels by support vectors of a block: their kernel values stay in a second-level cache. Always whole blocks of pixels,
# the last one padded, so that a pixel's values do not depend on which others it came with.
_PIXELS = 512
_VECTORS = 256
# Float32 kernel values may be off by this share; pixels too far from all support vectors for it go to float64 at once.
_LARGEST_ERROR = 0.01


@dataclass(frozen=True, slots=True)
class _Block:
    """Support vectors of one class: exponents (f + 2, m); dual coefficients and, last, a vector's largest (m, k)."""

    vectors: NDArray[Any]
    coefficients: NDArray[Any]


@dataclass(frozen=True, slots=True)
class _Decisions:
    """One-against-one decision values, float64 (n, pairs), and bounds on their errors, float64 (n, pairs)."""

    values: NDArray[np.float64]
    bounds: NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class CompiledSvm:
    """A support vector machine as blocks of matrices. Use `from_sklearn`.

    estimator: what it was made from, an SVC or a Pipeline that ends in one. machine: the SVC. blocks: by dtype, class.
    centre: float64 (f,), mean of the support vectors: distances do not change, norms and errors shrink. reach: the
    largest norm of a centred support vector. gamma: of the RBF kernel, 0 for the linear one.
    """

    estimator: Any
    machine: Any
    blocks: dict[_Kind, list[list[_Block]]]
    centre: NDArray[np.float64]
    reach: float
    gamma: float

    @classmethod
    def from_sklearn(cls, estimator: Any) -> CompiledSvm | None:  # noqa: ANN401 - any scikit-learn estimator
        """Compile a fitted dense SVC with RBF or linear kernel, or a Pipeline ending in one; None for anything else."""
        machine = estimator[-1] if isinstance(estimator, Pipeline) else estimator
        if type(machine) is not SVC or machine.kernel not in {"rbf", "linear"}:
            return None
        if machine.break_ties and machine.decision_function_shape == "ovo":
            return None  # scikit-learn itself refuses to predict with these
        if not isinstance(machine.support_vectors_, np.ndarray) or not len(machine.support_vectors_):
            return None
        rbf = machine.kernel == "rbf"
        gamma = float(machine._gamma) if rbf else 0.0
        centre = machine.support_vectors_.mean(axis=0) if rbf else np.zeros(machine.support_vectors_.shape[1])
        vectors = machine.support_vectors_ - centre
        blocks: dict[_Kind, list[list[_Block]]] = {}
        if rbf:
            blocks = {kind: _blocks(machine, vectors, gamma, kind) for kind in (np.float32, np.float64)}
        return cls(estimator, machine, blocks, centre, float(np.sqrt((vectors**2).sum(axis=1).max())), gamma)

    def scores(self, features: NDArray[np.float32]) -> NDArray[np.float64]:
        """Decision values float64 (n, k), from features (n, f): those of `decision_function`, for both of two classes.

        Raises ModelError if the count of features is wrong; ValueError, as scikit-learn does, unless all are finite.
        """
        rows = self._prepared(features)
        if rows is None:
            return self._ask_scores(features)
        decisions = self._decide(rows, np.float64)
        scores = self._to_scores(decisions.values)
        close = np.flatnonzero(~self._clear(decisions))
        if len(close):
            scores[close] = self._ask_scores(np.asarray(features)[close])
        return scores

    def predict_index(self, features: NDArray[np.float32]) -> NDArray[np.intp]:
        """Index of the class of each pixel, intp (n,), from features (n, f): that of `predict`. Raises as `scores`."""
        rows = self._prepared(features)
        if rows is None:
            return self._ask_labels(features)
        labels = np.zeros(len(rows), dtype=np.intp)
        left = np.arange(len(rows))
        for kind in (np.float32, np.float64) if self.gamma else (np.float64,):
            decisions = self._decide(rows[left], kind)
            labels[left], sure = self._to_labels(decisions)
            left = left[~sure]
            if not len(left):
                return labels
        labels[left] = self._ask_labels(np.asarray(features)[left])
        return labels

    # --- decision values ---

    def _prepared(self, features: NDArray[np.float32]) -> NDArray[np.float64] | None:
        """What the machine sees, centred, float64 (n, f); None if there are no pixels or not all are finite."""
        rows = np.asarray(features, dtype=np.float32)
        if rows.ndim != 2 or rows.shape[1] != len(self.centre):
            raise ModelError(f"the model takes {len(self.centre)} features per pixel, not an array of {rows.shape}")
        if not len(rows) or not np.isfinite(rows).all():
            return None
        if isinstance(self.estimator, Pipeline):
            rows = self.estimator[:-1].transform(rows)
        return np.asarray(rows, dtype=np.float64) - self.centre

    def _decide(self, rows: NDArray[np.float64], kind: _Kind) -> _Decisions:
        norms = np.sqrt((rows**2).sum(axis=1))
        if self.gamma:
            shares, hopeless = self._error_shares(norms, kind)
            near = np.where(hopeless, 0, norms)
            values, weights = self._kernel_sums(np.where(hopeless[:, None], 0, rows), near, kind)
        else:
            planes, sizes = self._planes
            values, weights = rows @ planes, norms[:, None] * sizes
            shares = np.full(len(rows), _EPS * (2 * len(self.machine.support_vectors_) + rows.shape[1]))
            hopeless = np.zeros(len(rows), dtype=bool)
        # Rounding of the offset, and kernel values too small for the type.
        least = (
            4 * _EPS * np.abs(self.machine.intercept_)
            + float(np.finfo(kind).tiny) * np.abs(self.machine.dual_coef_).sum()
        )
        bounds = weights * shares[:, None] + least
        bounds[hopeless] = np.inf
        return _Decisions(values + self.machine.intercept_, bounds)

    def _kernel_sums(
        self, rows: NDArray[np.float64], norms: NDArray[np.float64], kind: _Kind
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """For each pair (n, pairs): the sum of coefficients times kernel values, and that of their sizes."""
        one, other = self._pairs
        values, weights = np.empty((2, len(rows), len(one)))
        left = np.zeros((_PIXELS, rows.shape[1] + 2), dtype=kind)
        kernel = np.empty(_PIXELS * _VECTORS, dtype=kind)
        parts = np.empty((len(self.machine.classes_), _PIXELS, len(self.machine.classes_)))
        for start in range(0, len(rows), _PIXELS):
            here = slice(start, min(start + _PIXELS, len(rows)))
            count = here.stop - start
            left[:count, :-2], left[:count, -2], left[:count, -1] = rows[here], -self.gamma * norms[here] ** 2, 1
            left[count:] = 0
            parts[:] = 0
            for number, of_class in enumerate(self.blocks[kind]):
                for block in of_class:
                    near = kernel[: _PIXELS * block.vectors.shape[1]].reshape(_PIXELS, -1)
                    np.matmul(left, block.vectors, out=near)
                    np.exp(near, out=near)
                    parts[number] += near @ block.coefficients
            # A class's coefficient rows are the other classes in order, itself left out.
            values[here] = (parts[one, :count, other - 1] + parts[other, :count, one]).T
            weights[here] = (parts[one, :count, -1] + parts[other, :count, -1]).T
        return values, weights

    def _error_shares(self, norms: NDArray[np.float64], kind: _Kind) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
        """Bound on a decision value's error, ours and scikit-learn's together, as a share of its summed sizes, (n,).

        And whether kernel values are too far off for a share of them to bound anything, (n,).
        """
        unit, own = float(np.finfo(kind).eps) / 2, _EPS / 2
        vectors, terms = len(self.machine.support_vectors_), len(self.centre) + 8
        # An exponent is a sum of `terms` rounded products whose sizes add up to gamma (|x| + |v|)^2 at most; an
        # exponential is good to 4 units in the last place, 8 roundings.
        exponents = self.gamma * (norms + self.reach) ** 2
        kernel = unit * (terms * exponents + 8)
        sums = unit * (_VECTORS + 4) + own * (2 * vectors + terms * exponents)
        return 1.1 * (kernel + sums), kernel > _LARGEST_ERROR

    @cached_property
    def _planes(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Linear kernel: normal vectors (f, pairs), and the summed sizes of what they were added from, (pairs,)."""
        vectors, duals = self.machine.support_vectors_, self.machine.dual_coef_
        ends = np.cumsum(self.machine.n_support_)
        member = [slice(end - size, end) for end, size in zip(ends, self.machine.n_support_, strict=True)]
        sizes = np.sqrt((vectors**2).sum(axis=1))
        planes, weights = [], []
        for i, j in combinations(range(len(member)), 2):
            rows = np.r_[member[i], member[j]]
            duals_ij = np.r_[duals[j - 1, member[i]], duals[i, member[j]]]
            planes.append(duals_ij @ vectors[rows])
            weights.append(np.abs(duals_ij) @ sizes[rows])
        return np.array(planes).T, np.array(weights)

    # --- from decision values to labels ---

    @cached_property
    def _pairs(self) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
        one, other = np.triu_indices(len(self.machine.classes_), 1)
        return one, other

    @cached_property
    def _sides(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """(pairs, k): 1 where a class is the first of a pair, and where it is the second."""
        one, other = self._pairs
        unit = np.eye(len(self.machine.classes_))
        # With two classes a positive value speaks for the second, with more for the first of the pair.
        return (unit[other], unit[one]) if len(unit) == 2 else (unit[one], unit[other])

    def _to_scores(self, values: NDArray[np.float64]) -> NDArray[np.float64]:
        """Scores (n, k): votes, with the sums of decision values squeezed into a third of a vote either way."""
        positive, negative = self._sides
        if len(self.machine.classes_) == 2:
            return values @ (positive - negative)
        won = (values >= 0).astype(np.float64)
        sums = values @ (positive - negative)
        scores: NDArray[np.float64] = won @ positive + (1 - won) @ negative + sums / (3 * (np.abs(sums) + 1))
        return scores

    def _clear(self, decisions: _Decisions) -> NDArray[np.bool_]:
        """Pixels (n,) on whose every pair, and on whose best score, the error of decision values has no bearing."""
        clear = np.asarray((np.abs(decisions.values) > decisions.bounds).all(axis=1))
        if len(self.machine.classes_) > 2:
            scores = np.sort(self._to_scores(decisions.values), axis=1)
            # A score moves by at most a third of the errors of its decision values; its own rounding comes on top.
            clear &= scores[:, -1] - scores[:, -2] > decisions.bounds.sum(axis=1) + 1e-12
        return clear

    def _to_labels(self, decisions: _Decisions) -> tuple[NDArray[np.intp], NDArray[np.bool_]]:
        """Index of the class, (n,), and whether it is sure to be scikit-learn's, (n,)."""
        positive, negative = self._sides
        beyond = (decisions.values > decisions.bounds) @ positive + (decisions.values < -decisions.bounds) @ negative
        labels = np.argmax(beyond, axis=1)
        # A class that surely wins against all others is the label, whatever happens between those.
        sure = beyond.max(axis=1) == len(self.machine.classes_) - 1
        rest = np.flatnonzero(~sure)
        if len(rest):
            few = _Decisions(decisions.values[rest], decisions.bounds[rest])
            if self.machine.break_ties or len(self.machine.classes_) == 2:
                labels[rest] = np.argmax(self._to_scores(few.values), axis=1)
            else:
                won = few.values > 0
                labels[rest] = np.argmax(won @ positive + ~won @ negative, axis=1)
            sure[rest] = self._clear(few)
        return labels, sure

    # --- scikit-learn itself ---

    def _ask_scores(self, features: NDArray[np.float32]) -> NDArray[np.float64]:
        values = np.asarray(self.estimator.decision_function(features), dtype=np.float64)
        if values.ndim == 1:
            return np.stack([-values, values], axis=1)
        return self._to_scores(values) if self.machine.decision_function_shape == "ovo" else values

    def _ask_labels(self, features: NDArray[np.float32]) -> NDArray[np.intp]:
        return np.asarray(np.searchsorted(self.machine.classes_, self.estimator.predict(features)), dtype=np.intp)


def _blocks(
    machine: Any,  # noqa: ANN401 - a fitted SVC
    vectors: NDArray[np.float64],
    gamma: float,
    kind: _Kind,
) -> list[list[_Block]]:
    """Support vectors by class, in equal blocks of at most _VECTORS."""
    exponents = np.column_stack([2 * gamma * vectors, np.ones(len(vectors)), -gamma * (vectors**2).sum(axis=1)])
    coefficients = np.column_stack([machine.dual_coef_.T, np.abs(machine.dual_coef_).max(axis=0)])
    return [
        [
            _Block(
                np.ascontiguousarray(exponents[rows].T, dtype=kind),
                np.ascontiguousarray(coefficients[rows], dtype=kind),
            )
            for rows in np.array_split(np.arange(end - size, end), max(-(-size // _VECTORS), 1))
        ]
        for end, size in zip(np.cumsum(machine.n_support_), machine.n_support_, strict=True)
    ]
