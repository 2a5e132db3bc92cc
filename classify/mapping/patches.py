"""The compiled part of `tidy`: patches of one class, their sizes and neighbours, and the majority around a pixel."""

# mypy: allow-untyped-defs, allow-untyped-calls, no-check-untyped-defs
# ruff: noqa: ANN001, ANN201, ANN202

from __future__ import annotations

import numpy as np

from classify.features.compiled import compiled


@compiled
def find_patches(codes, areas_m2, corners):
    """Patches of codes uint8 (h, w), over corners too or over edges alone.

    Returns labels int32 (h, w) from 0 in the order of first pixels, ground area float64 (n,) and class uint8 (n,) of
    each. Two-pass labelling with union-find (Rosenfeld & Pfaltz 1966, J. ACM 13).
    """
    height, width = codes.shape
    labels = np.empty((height, width), dtype=np.int32)
    parent = np.empty(height * width, dtype=np.int32)
    count = np.int32(0)
    for r in range(height):
        for c in range(width):
            code, mine = codes[r, c], np.int32(-1)
            if c > 0 and codes[r, c - 1] == code:
                mine = _join(parent, mine, labels[r, c - 1])
            if r > 0 and codes[r - 1, c] == code:
                mine = _join(parent, mine, labels[r - 1, c])
            if corners and r > 0 and c > 0 and codes[r - 1, c - 1] == code:
                mine = _join(parent, mine, labels[r - 1, c - 1])
            if corners and r > 0 and c + 1 < width and codes[r - 1, c + 1] == code:
                mine = _join(parent, mine, labels[r - 1, c + 1])
            if mine < 0:
                mine = np.int32(count)
                parent[count] = count
                count += np.int32(1)
            labels[r, c] = mine
    # A root is the lowest number of its patch, so that one pass in order numbers the patches.
    patches = 0
    for label in range(count):
        if parent[label] == label:
            parent[label] = patches
            patches += 1
        else:
            parent[label] = parent[parent[label]]
    sizes_m2, classes = np.zeros(patches, dtype=np.float64), np.zeros(patches, dtype=np.uint8)
    for r in range(height):
        for c in range(width):
            patch = parent[labels[r, c]]
            labels[r, c] = patch
            sizes_m2[patch] += areas_m2[r, c]
            classes[patch] = codes[r, c]
    return labels, sizes_m2, classes


@compiled
def _root(parent, label):
    while parent[label] != label:
        parent[label] = parent[parent[label]]
        label = parent[label]
    return label


@compiled
def _join(parent, one, other):
    """The common root of two labels, the first of which may be -1."""
    other = _root(parent, other)
    if one < 0 or one == other:
        return other
    low, high = min(one, other), max(one, other)
    parent[high] = low
    return low


@compiled
def neighbours_of_small(labels, small, classes):
    """For every pixel edge between a small patch and another patch with a class: (small patch, other), int64 (n, 2)."""
    height, width = labels.shape
    count = 0
    for fill in range(2):
        pairs = np.empty((count, 2), dtype=np.int64)
        count = 0
        for r in range(height):
            for c in range(width):
                one = labels[r, c]
                for step in range(2):
                    if (step == 0 and c + 1 == width) or (step == 1 and r + 1 == height):
                        continue
                    other = labels[r, c + 1] if step == 0 else labels[r + 1, c]
                    if one == other or classes[one] == 0 or classes[other] == 0:
                        continue
                    for a, b in ((one, other), (other, one)):
                        if small[a]:
                            if fill == 1:
                                pairs[count, 0], pairs[count, 1] = a, b
                            count += 1
    return pairs


@compiled
def majority(codes, side):
    """The most frequent class in the square around each pixel, uint8 (h, w).

    No data (0) neither counts nor changes; a pixel's own class stands if no other is more frequent; of other equals the
    lowest code.
    """
    height, width = codes.shape
    reach = side // 2
    result = codes.copy()
    counts = np.zeros(256, dtype=np.int64)
    for r in range(height):
        top, bottom = max(0, r - reach), min(height, r + reach + 1)
        counts[:] = 0
        for c in range(-reach, width):
            for row in range(top, bottom):
                if c + reach < width:
                    counts[codes[row, c + reach]] += 1
                if c - reach - 1 >= 0:
                    counts[codes[row, c - reach - 1]] -= 1
            if c < 0 or codes[r, c] == 0:
                continue
            best = codes[r, c]
            for code in range(1, 256):
                if counts[code] > counts[best]:
                    best = np.uint8(code)
            result[r, c] = best
    return result
