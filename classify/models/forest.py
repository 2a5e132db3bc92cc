"""Random forests, compiled: the same labels and probabilities as scikit-learn, several times faster, without the GIL.

How it works. Nodes are 64-bit words in flat arrays, siblings side by side: the high half holds the threshold, the low
half the place of the left child and the feature. Thresholds are rounded down to float32, which changes no comparison
with a float32 feature, and then mapped, like the features, to integers in the order of the floats. Sixty-four pixels
walk a tree in step, so that the processor waits for many loads at once instead of one after the other; their features
lie transposed in a block that stays in cache while all trees pass over it. A leaf leads back to itself.

Why the results are the same: leaf shares are added in float64 in the order of the trees, as scikit-learn does with
one worker, and the label is the first of the highest means.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numba
import numpy as np
from llvmlite import ir
from numba.core import cgutils, types
from numba.extending import intrinsic
from numpy.typing import NDArray
from sklearn.ensemble import ExtraTreesClassifier, RandomForestClassifier

from classify.errors import ModelError

# Pixels in step: eight or four vectors of what current processors hold. More spill out of the registers.
_LANES = 64
# Pixels that pass over all trees together: their features (a few hundred KiB) stay in the second-level cache.
_BLOCK = 2048
# With labels alone, pixels whose leading class can no longer be caught are looked for after so many trees, from half on.
_TREES_PER_CHECK = 8
# Sums of a few thousand shares are off by far less; pixels closer than this are never decided early.
_MARGIN = 1e-6


@dataclass(frozen=True, eq=False)
class CompiledForest:
    """A forest as flat arrays. Use `from_sklearn`.

    nodes: int64, all trees one after the other. roots: int64 (trees + 1,), where each tree starts. rounds: int64
    (trees,), steps to the deepest leaf. leaves: int32 per node, the class if the leaf holds no other, else -1 - row of
    `shares`, float64 (rows, k). feature_bits: bits of a node's low half that hold the feature. estimator: what it was
    made from, asked for pixels with features that are not finite.
    """

    nodes: NDArray[np.int64]
    roots: NDArray[np.int64]
    rounds: NDArray[np.int64]
    leaves: NDArray[np.int32]
    shares: NDArray[np.float64]
    feature_bits: int
    features: int
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
        return cls(
            nodes=np.concatenate(nodes),
            roots=np.cumsum([0, *(len(words) for words in nodes)], dtype=np.int64),
            rounds=np.array([tree.max_depth for tree in trees], dtype=np.int64),
            leaves=np.concatenate(leaves),
            shares=np.ascontiguousarray(np.concatenate(shares)),
            feature_bits=feature_bits,
            features=int(estimator.n_features_in_),
            estimator=estimator,
        )

    def scores(self, features: NDArray[np.float32]) -> NDArray[np.float64]:
        """Probabilities, float64 (n, k), from features float32 (n, f): bit for bit those of `predict_proba`.

        Raises ModelError if the count of features is wrong, and ValueError, as scikit-learn does, for infinite features.
        """
        bits = self._bits(features)
        if bits is None:
            proba: NDArray[np.float64] = self.estimator.predict_proba(features)
            return proba
        sums = np.zeros((len(bits), self.shares.shape[1]), dtype=np.float64)
        _sum_shares(bits, self.nodes, self.roots, self.rounds, self.leaves, self.shares, self.feature_bits, sums)
        sums /= len(self.rounds)
        return sums

    def predict_index(self, features: NDArray[np.float32]) -> NDArray[np.intp]:
        """Index of the class of each pixel, intp (n,), from features float32 (n, f): that of `predict`.

        A pixel is done as soon as its leading class cannot be caught. Raises as `scores`.
        """
        bits = self._bits(features)
        if bits is None:
            found: NDArray[np.intp] = np.argmax(self.estimator.predict_proba(features), axis=1)
            return found
        labels = np.zeros(len(bits), dtype=np.intp)
        _find_labels(bits, self.nodes, self.roots, self.rounds, self.leaves, self.shares, self.feature_bits, labels)
        return labels

    def _bits(self, features: NDArray[np.float32]) -> NDArray[np.int32] | None:
        """The features' bits as int32 (n, f), or None if one is not finite (scikit-learn has its own way with those)."""
        rows = np.ascontiguousarray(features, dtype=np.float32)
        if rows.ndim != 2 or rows.shape[1] != self.features:
            raise ModelError(f"the model takes {self.features} features per pixel, not an array of {rows.shape}")
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


# --- compiled -------------------------------------------------------------------------------------------------------


def _jit(function: Any) -> Any:  # noqa: ANN401 - a numba dispatcher
    """Compile on first use; keep the machine code on disk where a cache folder can be written."""
    options = {"nogil": True, "error_model": "numpy"}
    try:
        return numba.njit(cache=True, **options)(function)
    except RuntimeError:  # no folder for the cache, neither beside this file nor in the user's own
        return numba.njit(**options)(function)


@intrinsic  # type: ignore[untyped-decorator]
def _stack_lanes(_context: Any) -> Any:  # noqa: ANN401 - numba's own types
    """Memory for one unsigned 32-bit integer per lane on the stack.

    The compiler knows that nothing else points there; with an array from the heap it must assume that a store to it may
    change a node, and does not turn the lockstep loop into vector code.
    """

    def generate(context: Any, builder: Any, signature: Any, _arguments: Any) -> Any:  # noqa: ANN401
        memory = cgutils.alloca_once(builder, ir.ArrayType(ir.IntType(32), _LANES))
        return builder.bitcast(memory, context.get_value_type(signature.return_type))

    return types.CPointer(types.uint32)(), generate


@_jit
def _transpose(bits, pixels, count, lanes):  # type: ignore[no-untyped-def] # noqa: ANN001, ANN202
    """Features of `count` pixels in groups of lanes: (groups, f, lanes), as integers in the order of the floats."""
    features = bits.shape[1]
    for slot in range(count):
        base = (slot // _LANES) * features * _LANES + slot % _LANES
        pixel = pixels[slot]
        for j in range(features):
            value = bits[pixel, j]
            if value < 0:
                # Minus zero becomes zero; other negative numbers are turned round.
                value = np.int32(0) if value == np.int32(-2147483648) else value ^ np.int32(0x7FFFFFFF)
            lanes[base + j * _LANES] = value


@_jit
def _pass_trees(  # type: ignore[no-untyped-def] # noqa: ANN202
    lanes, count, features, first, last, nodes, roots, rounds, leaves, shares, feature_bits, sums  # noqa: ANN001
):  # fmt: skip
    """Add the leaf shares of trees `first` to `last` to sums (slots, k) for `count` pixels laid out by `_transpose`."""
    at = numba.carray(_stack_lanes(), (_LANES,))
    shift = np.uint32(feature_bits)
    mask = np.uint32((1 << feature_bits) - 1)
    stride = np.uint32(_LANES)
    for t in range(first, last):
        tree = nodes[roots[t] : roots[t + 1]]
        leaf = leaves[roots[t] : roots[t + 1]]
        for start in range(0, count, _LANES):
            x = lanes[start * features : (start + _LANES) * features]
            for lane in range(_LANES):
                at[lane] = np.uint32(0)
            for _ in range(0, rounds[t], 2):
                for lane in range(_LANES):
                    node = tree[at[lane]]
                    low = np.uint32(node)
                    value = x[(low & mask) * stride + np.uint32(lane)]
                    at[lane] = (low >> shift) + np.uint32(value > np.int32(node >> 32))
                moved = np.uint32(0)
                for lane in range(_LANES):
                    before = at[lane]
                    node = tree[before]
                    low = np.uint32(node)
                    value = x[(low & mask) * stride + np.uint32(lane)]
                    after = (low >> shift) + np.uint32(value > np.int32(node >> 32))
                    at[lane] = after
                    moved |= after ^ before
                if moved == 0:
                    break
            for lane in range(min(_LANES, count - start)):
                code = leaf[at[lane]]
                if code >= 0:
                    sums[start + lane, code] += 1.0
                else:
                    for c in range(shares.shape[1]):
                        sums[start + lane, c] += shares[-1 - code, c]


@_jit
def _sum_shares(bits, nodes, roots, rounds, leaves, shares, feature_bits, sums):  # type: ignore[no-untyped-def] # noqa: ANN001, ANN202
    features = bits.shape[1]
    lanes = np.zeros(_BLOCK * features, dtype=np.int32)
    for begin in range(0, len(bits), _BLOCK):
        count = min(_BLOCK, len(bits) - begin)
        _transpose(bits, np.arange(begin, begin + count), count, lanes)
        _pass_trees(
            lanes, count, features, 0, len(rounds), nodes, roots, rounds, leaves, shares, feature_bits,
            sums[begin : begin + count],
        )  # fmt: skip


@_jit
def _find_labels(bits, nodes, roots, rounds, leaves, shares, feature_bits, labels):  # type: ignore[no-untyped-def] # noqa: ANN001, ANN202
    features, trees = bits.shape[1], len(rounds)
    lanes = np.zeros(_BLOCK * features, dtype=np.int32)
    for begin in range(0, len(bits), _BLOCK):
        count = min(_BLOCK, len(bits) - begin)
        pixels = np.arange(begin, begin + count)
        sums = np.zeros((count, shares.shape[1]), dtype=np.float64)
        _transpose(bits, pixels, count, lanes)
        done = 0
        while done < trees and count > 0:
            last = trees // 2 + 1 if done == 0 else min(done + _TREES_PER_CHECK, trees)
            _pass_trees(
                lanes, count, features, done, last, nodes, roots, rounds, leaves, shares, feature_bits, sums
            )  # fmt: skip
            done = last
            left = _drop_decided(sums, pixels, count, trees, trees - done, labels)
            if left < count and done < trees:
                _transpose(bits, pixels, left, lanes)
            count = left


@_jit
def _drop_decided(sums, pixels, count, trees, remaining, labels):  # type: ignore[no-untyped-def] # noqa: ANN001, ANN202
    """Label the pixels whose leader cannot be caught in the `remaining` trees; move the others to the front."""
    kept = 0
    for slot in range(count):
        best, highest, second = 0, sums[slot, 0] / trees, -1.0
        for c in range(1, sums.shape[1]):
            mean = sums[slot, c] / trees
            if mean > highest:
                best, highest, second = c, mean, highest
            elif mean > second:
                second = mean
        if remaining == 0 or (highest - second) * trees > remaining + _MARGIN:
            labels[pixels[slot]] = best
        else:
            pixels[kept] = pixels[slot]
            for c in range(sums.shape[1]):
                sums[kept, c] = sums[slot, c]
            kept += 1
    return kept
