"""Random forests, compiled: the same labels and probabilities as scikit-learn, several times faster, without the GIL.

How it works. Nodes are 64-bit words in flat arrays, siblings side by side: the high half holds the threshold, the low
half the place of the left child and the feature. Thresholds are rounded down to float32, which changes no comparison
with a float32 feature, and then mapped, like the features, to integers in the order of the floats. Sixty-four pixels
walk a tree in step, so that the processor waits for many loads at once instead of one after the other; their features
lie transposed in a block that stays in cache while all trees pass over it. A leaf leads back to itself. Pixels that
resemble each other are put side by side first: as long as all sixty-four go the same way, they take one step for all.

Why the results are the same: leaf shares are added in float64 in the order of the trees, as scikit-learn does with
one worker, and the label is the first of the highest means.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sklearn.ensemble import ExtraTreesClassifier, RandomForestClassifier

from classify.errors import ModelError
from classify.models.forest_kernels import Trees, find_labels, sum_shares


@dataclass(frozen=True, eq=False)
class CompiledForest:
    """A forest as flat arrays; use `from_sklearn`. estimator: what it was made from, asked for features not finite."""

    trees: Trees
    estimator: Any

    @classmethod
    def from_sklearn(cls, estimator: Any) -> CompiledForest | None:  # noqa: ANN401 - any scikit-learn estimator
        """Compile a fitted RandomForestClassifier or ExtraTreesClassifier; None if it is anything else or too large."""
        if type(estimator) not in (RandomForestClassifier, ExtraTreesClassifier) or estimator.n_outputs_ != 1:
            return None
        trees = [member.tree_ for member in estimator.estimators_]
        feature_bits = max(int(estimator.n_features_in_ - 1).bit_length(), 1)
        if feature_bits > 16 or max(tree.node_count for tree in trees) >= 2 ** (31 - feature_bits):
            return None
        nodes, leaves, shares, impure = [], [], [np.zeros((1, estimator.n_classes_))], 1
        for tree in trees:
            words, leaf, rows = _pack_tree(tree, feature_bits, impure)
            nodes.append(words)
            leaves.append(leaf)
            shares.append(rows)
            impure += len(rows)
        arrays = Trees(
            nodes=np.concatenate(nodes),
            roots=np.cumsum([0, *(len(words) for words in nodes)], dtype=np.int64),
            rounds=np.array([tree.max_depth for tree in trees], dtype=np.int64),
            leaves=np.concatenate(leaves),
            shares=np.ascontiguousarray(np.concatenate(shares)),
            feature_bits=feature_bits,
        )
        return cls(arrays, estimator)

    def scores(self, features: NDArray[np.float32]) -> NDArray[np.float64]:
        """Probabilities, float64 (n, k), from features float32 (n, f): bit for bit those of `predict_proba`.

        Raises ModelError if the count of features is wrong; ValueError, as scikit-learn does, if one is infinite.
        """
        bits = self._bits(features)
        if bits is None:
            proba: NDArray[np.float64] = self.estimator.predict_proba(features)
            return proba
        sums = np.zeros((len(bits), self.trees.shares.shape[1]), dtype=np.float64)
        sum_shares(bits, self.trees, sums)
        sums /= len(self.trees.rounds)
        return sums

    def predict_index(self, features: NDArray[np.float32]) -> NDArray[np.intp]:
        """Index of the class of each pixel, intp (n,), from features float32 (n, f): that of `predict`.

        A pixel is done with as soon as its leading class cannot be caught. Raises as `scores`.
        """
        bits = self._bits(features)
        if bits is None:
            found: NDArray[np.intp] = np.argmax(self.estimator.predict_proba(features), axis=1)
            return found
        labels = np.zeros(len(bits), dtype=np.intp)
        find_labels(bits, self.trees, labels)
        return labels

    def _bits(self, features: NDArray[np.float32]) -> NDArray[np.int32] | None:
        """The features' bits, int32 (n, f), or None if one is not finite: scikit-learn has its own way with those."""
        rows = np.ascontiguousarray(features, dtype=np.float32)
        if rows.ndim != 2 or rows.shape[1] != self.estimator.n_features_in_:
            raise ModelError(
                f"the model takes {self.estimator.n_features_in_} features per pixel, not an array of {rows.shape}"
            )
        return rows.view(np.int32) if np.isfinite(rows).all() else None


def _pack_tree(
    tree: Any,  # noqa: ANN401 - scikit-learn's Tree
    feature_bits: int,
    first_row: int,
) -> tuple[NDArray[np.int64], NDArray[np.int32], NDArray[np.float64]]:
    """Node words, leaf codes, and the shares of leaves that hold several classes (numbered from `first_row`)."""
    order = _siblings_together(tree.children_left, tree.children_right)
    place = np.empty(tree.node_count, dtype=np.int64)
    place[order] = np.arange(tree.node_count)
    is_leaf = tree.children_left[order] < 0
    child = np.where(is_leaf, np.arange(tree.node_count), place[tree.children_left[order]])
    feature = np.where(is_leaf, 0, tree.feature[order])
    # No integer exceeds the largest, so a leaf's comparison is never true and it leads to its left child: itself.
    threshold = np.where(is_leaf, np.iinfo(np.int32).max, _in_order(_round_down(tree.threshold[order])))
    words = (threshold.astype(np.int64) << 32) | (child << feature_bits) | feature
    shares = tree.value[order][:, 0, :]
    pure = is_leaf & (shares.max(axis=1) == 1.0) & (np.count_nonzero(shares, axis=1) == 1)
    mixed = is_leaf & ~pure
    leaf = np.where(pure, shares.argmax(axis=1), 0).astype(np.int32)
    leaf[mixed] = -1 - first_row - np.arange(mixed.sum())
    return words, leaf, shares[mixed]


def _siblings_together(left: NDArray[np.int64], right: NDArray[np.int64]) -> NDArray[np.int64]:
    """Nodes level by level, so that a right child directly follows its left sibling."""
    levels, level = [], np.array([0])
    while len(level):
        levels.append(level)
        inner = level[left[level] >= 0]
        level = np.stack([left[inner], right[inner]], axis=1).ravel()
    return np.concatenate(levels)


def _round_down(thresholds: NDArray[np.float64]) -> NDArray[np.float32]:
    """The largest float32 not above each threshold: for float32 x, x <= t is the same comparison with either."""
    with np.errstate(over="ignore"):
        nearest = thresholds.astype(np.float32)
    above = nearest.astype(np.float64) > thresholds
    return np.where(above, np.nextafter(nearest, np.float32(-np.inf)), nearest).astype(np.float32)


def _in_order(values: NDArray[np.float32]) -> NDArray[np.int32]:
    """Integers in the order of the floats; both zeros are one."""
    bits: NDArray[np.int32] = (values + np.float32(0)).view(np.int32)
    return np.where(bits < 0, bits ^ 0x7FFFFFFF, bits).astype(np.int32)
