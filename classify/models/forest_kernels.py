"""The compiled part of `forest`: pixels walk down trees in step. numba infers the types of what it compiles."""

# mypy: allow-untyped-defs, allow-untyped-calls, no-check-untyped-defs
# ruff: noqa: ANN001, ANN201, ANN202

from __future__ import annotations

from typing import Any, NamedTuple

import numba
import numpy as np
from llvmlite import ir
from numba.core import cgutils, types
from numba.extending import intrinsic
from numpy.typing import NDArray

# Pixels in step: eight or four vectors of what current processors hold. More spill out of the registers.
LANES = 64
# Pixels that pass over all trees together: their features (a few hundred KiB) stay in the second-level cache.
BLOCK = 2048
# Pixels are put in order by so many steps in so many trees: together the bits of a key.
_KEY_TREES, _KEY_STEPS = 8, 8
# With labels alone, pixels whose leader can no longer be caught are looked for after so many trees, from half on.
TREES_PER_CHECK = 8
# Sums of a few thousand shares are off by far less; pixels closer than this are never decided early.
MARGIN = 1e-6


class Trees(NamedTuple):
    """A forest as flat arrays.

    nodes: int64, all trees one after the other: threshold in the high half, left child and feature in the low one.
    roots: int64 (trees + 1,), where each tree starts. rounds: int64 (trees,), steps to the deepest leaf. leaves: int32
    per node, the class if the leaf holds no other, else -1 - row of `shares`, float64 (rows, k). feature_bits: bits of
    the low half that hold the feature.
    """

    nodes: NDArray[np.int64]
    roots: NDArray[np.int64]
    rounds: NDArray[np.int64]
    leaves: NDArray[np.int32]
    shares: NDArray[np.float64]
    feature_bits: int


def jit(function: Any) -> Any:  # noqa: ANN401 - a numba dispatcher
    """Compile on first use; keep the machine code on disk where a cache folder can be written."""
    try:
        return numba.njit(nogil=True, error_model="numpy", cache=True)(function)
    except RuntimeError:  # no folder for the cache, neither beside this file nor in the user's own
        return numba.njit(nogil=True, error_model="numpy")(function)


@intrinsic
def _stack_lanes(_context):
    """Memory for one unsigned 32-bit integer per lane on the stack.

    The compiler knows that nothing else points there; with an array from the heap it must assume that a store to it may
    change a node, and does not turn the lockstep loop into vector code.
    """

    def generate(context, builder, signature, _arguments):
        memory = cgutils.alloca_once(builder, ir.ArrayType(ir.IntType(32), LANES))
        return builder.bitcast(memory, context.get_value_type(signature.return_type))

    return types.CPointer(types.uint32)(), generate


@jit
def _transpose(bits, pixels, count, lanes):
    """Features of `count` pixels in groups of lanes: (groups, f, lanes), as integers in the order of the floats."""
    features = bits.shape[1]
    for slot in range(count):
        base = (slot // LANES) * features * LANES + slot % LANES
        pixel = pixels[slot]
        for j in range(features):
            value = bits[pixel, j]
            # Negative numbers are turned round; minus zero becomes -1, which no threshold is, and so compares as zero.
            lanes[base + j * LANES] = value ^ np.int32(0x7FFFFFFF) if value < 0 else value


@jit
def _common_way(x, tree, rounds, shift, mask):
    """Where all lanes are after the steps that they take together, one node looked at for all; and the steps left."""
    at = np.uint32(0)
    while rounds > 0:
        node = tree[at]
        low = np.uint32(node)
        values = (low & mask) * np.uint32(LANES)
        threshold = np.int32(node >> 32)
        right = np.int32(0)
        for lane in range(LANES):
            right += np.int32(x[values + np.uint32(lane)] > threshold)
        if 0 < right < LANES:
            break
        at = (low >> shift) + np.uint32(right != 0)
        rounds -= 1
    return at, rounds


@jit
def _add_tree(lanes, count, trees, t, sums):
    """Add the leaf shares of tree `t` to sums (slots, k) for `count` pixels laid out by `_transpose`."""
    at = numba.carray(_stack_lanes(), (LANES,))
    shift = np.uint32(trees.feature_bits)
    mask = np.uint32((1 << trees.feature_bits) - 1)
    stride = np.uint32(LANES)
    tree = trees.nodes[trees.roots[t] : trees.roots[t + 1]]
    leaf = trees.leaves[trees.roots[t] : trees.roots[t + 1]]
    group = len(lanes) // BLOCK * LANES
    for start in range(0, count, LANES):
        x = lanes[start // LANES * group : (start // LANES + 1) * group]
        together, left = _common_way(x, tree, trees.rounds[t], shift, mask)
        for lane in range(LANES):
            at[lane] = together
        # Two steps to a round; only the second asks whether any pixel is still on its way.
        for _ in range(0, left, 2):
            for lane in range(LANES):
                node = tree[at[lane]]
                low = np.uint32(node)
                value = x[(low & mask) * stride + np.uint32(lane)]
                at[lane] = (low >> shift) + np.uint32(value > np.int32(node >> 32))
            moved = np.uint32(0)
            for lane in range(LANES):
                before = at[lane]
                node = tree[before]
                low = np.uint32(node)
                value = x[(low & mask) * stride + np.uint32(lane)]
                after = (low >> shift) + np.uint32(value > np.int32(node >> 32))
                at[lane] = after
                moved |= after ^ before
            if moved == 0:
                break
        for lane in range(min(LANES, count - start)):
            code = leaf[at[lane]]
            if code >= 0:
                sums[start + lane, code] += 1.0
            else:
                for c in range(trees.shares.shape[1]):
                    sums[start + lane, c] += trees.shares[-1 - code, c]


@jit
def _alike_together(bits, trees):
    """The pixels, int64 (n,), ordered by their first steps in the first trees: those that resemble each other meet."""
    keys = np.zeros(len(bits), dtype=np.uint64)
    mask = np.int64((1 << trees.feature_bits) - 1)
    for pixel in range(len(bits)):
        key = np.uint64(0)
        for t in range(min(_KEY_TREES, len(trees.rounds))):
            at, start = np.int64(0), trees.roots[t]
            for _ in range(_KEY_STEPS):
                node = trees.nodes[start + at]
                low = node & np.int64(0xFFFFFFFF)
                value = bits[pixel, low & mask]
                value = value ^ np.int32(0x7FFFFFFF) if value < 0 else value
                right = np.int64(value > np.int32(node >> 32))
                at = (low >> trees.feature_bits) + right
                key = (key << np.uint64(1)) | np.uint64(right)
        keys[pixel] = key
    return np.argsort(keys)


@jit
def sum_shares(bits, trees, sums):
    """Add every tree's shares, in the order of the trees, to sums float64 (n, k) for features' bits int32 (n, f)."""
    order = _alike_together(bits, trees)
    lanes = np.zeros(BLOCK * bits.shape[1], dtype=np.int32)
    own = np.empty((BLOCK, sums.shape[1]), dtype=np.float64)
    for begin in range(0, len(bits), BLOCK):
        count = min(BLOCK, len(bits) - begin)
        pixels = order[begin : begin + count]
        _transpose(bits, pixels, count, lanes)
        own[:] = 0
        for t in range(len(trees.rounds)):
            _add_tree(lanes, count, trees, t, own)
        for slot in range(count):
            sums[pixels[slot]] += own[slot]


@jit
def find_labels(bits, trees, labels):
    """Write the index of the class to labels intp (n,) for features' bits int32 (n, f)."""
    total = len(trees.rounds)
    order = _alike_together(bits, trees)
    lanes = np.zeros(BLOCK * bits.shape[1], dtype=np.int32)
    for begin in range(0, len(bits), BLOCK):
        count = min(BLOCK, len(bits) - begin)
        pixels = order[begin : begin + count].copy()
        sums = np.zeros((count, trees.shares.shape[1]), dtype=np.float64)
        _transpose(bits, pixels, count, lanes)
        done = 0
        while done < total and count > 0:
            last = min(total // 2 + 1 if done == 0 else done + TREES_PER_CHECK, total)
            for t in range(done, last):
                _add_tree(lanes, count, trees, t, sums)
            done = last
            left = _drop_decided(sums, pixels, count, total, done, labels)
            if left < count and done < total:
                _transpose(bits, pixels, left, lanes)
            count = left


@jit
def _drop_decided(sums, pixels, count, total, done, labels):  # noqa: PLR0917
    """Label the pixels whose leader cannot be caught in the trees left; move the others to the front and count them."""
    kept = 0
    for slot in range(count):
        best, highest, second = 0, sums[slot, 0] / total, -1.0
        for c in range(1, sums.shape[1]):
            mean = sums[slot, c] / total
            if mean > highest:
                best, highest, second = c, mean, highest
            elif mean > second:
                second = mean
        if done == total or (highest - second) * total > total - done + MARGIN:
            labels[pixels[slot]] = best
        else:
            pixels[kept] = pixels[slot]
            for c in range(sums.shape[1]):
                sums[kept, c] = sums[slot, c]
            kept += 1
    return kept
