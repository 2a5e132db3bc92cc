"""Grey-level co-occurrence in sliding windows (Haralick, Shanmugam & Dinstein 1973, IEEE Trans. Syst. Man Cybern. 3).

Pairs of neighbours in the four directions, both ways round, both inside the window, are put together in one matrix P of
relative frequencies of grey levels i, j: contrast = sum (i - j)^2 P, homogeneity = sum P / (1 + (i - j)^2), entropy =
-sum P ln P, correlation of i and j under P, 1 where all grey levels are the same.

A window slides along its row: pairs of the column that enters are added, those of the column that leaves taken away.
All that is carried along are whole numbers, so that a pixel's value does not depend on where the row began.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from classify.features.compiled import compiled

# 1 / (1 + gap^2) as a whole number of parts: sums of 40 000 pairs stay far below 2^63.
_PARTS = 2.0**40


def grey_levels(layer: NDArray[np.float32], low: float, high: float, levels: int) -> NDArray[np.int16]:
    """Grey level 0 .. levels - 1 of each value from `low` to `high`, the nearest beyond, -1 for NaN; int16 (h, w)."""
    scaled = np.floor((layer.astype(np.float64) - low) * (levels / (high - low)))
    clipped = np.clip(scaled, 0, levels - 1)
    return np.where(np.isnan(clipped), -1, clipped).astype(np.int16)


def pair_statistics(grey: NDArray[np.int16], radius: int, levels: int) -> NDArray[np.float32]:
    """Contrast, homogeneity and correlation, float32 (3, h, w), in windows of grey levels (-1 = invalid).

    NaN where the pixel or more than three quarters of its window are invalid, or no two valid pixels touch.
    """
    return np.asarray(_pair_statistics(grey, radius, _pair_table(levels)))


def entropy(grey: NDArray[np.int16], radius: int, levels: int) -> NDArray[np.float32]:
    """Entropy, float32 (h, w), in windows of grey levels (-1 = invalid); NaN where no two valid pixels touch."""
    pairs = 4 * (2 * radius + 1) ** 2
    # A cell seen n times is two of n off the diagonal, one of 2 n on it: what each adds to the sum of n ln n.
    times = np.arange(1, pairs + 1)
    weights = np.zeros((pairs + 1, 2))
    weights[1:] = np.column_stack([2 * times * np.log(times), 2 * times * np.log(2 * times)])
    return np.asarray(_entropy(_pair_codes(grey, levels), radius, levels, weights))


def _pair_table(levels: int) -> NDArray[np.int64]:
    """What a pair of grey levels adds to the sums of a window, int64 (levels + 1, levels + 1, 6).

    One pair, (i - j)^2, parts of 1 / (1 + (i - j)^2), i + j, 2 i j, i^2 + j^2. The last row and column, which index -1
    finds, are those of invalid pixels: nothing.
    """
    i, j = np.indices((levels, levels))
    apart = (i - j) ** 2
    alike = np.round(_PARTS / (1 + apart)).astype(np.int64)
    table = np.zeros((levels + 1, levels + 1, 6), np.int64)
    table[:levels, :levels] = np.stack([np.ones_like(i), apart, alike, i + j, 2 * i * j, i * i + j * j], axis=2)
    return table


@compiled
def _column_sums(
    grey: NDArray[np.int16], first: int, last: int, table: NDArray[np.int64], columns: NDArray[np.int64]
) -> None:
    """Sums of pairs within each column and with the next one, and valid pixels, in rows first .. last - 1.

    columns (13, w): six sums of pairs within the column, six of pairs with the next column, number of valid pixels.
    """
    width = grey.shape[1]
    columns[:] = 0
    for row in range(first, last):
        for col in range(width):
            here = grey[row, col]
            columns[12, col] += 1 if here >= 0 else 0
            below = row + 1 < last
            beside = col + 1 < width
            for part in range(6):
                if below:
                    columns[part, col] += table[here, grey[row + 1, col], part]
                if beside:
                    columns[6 + part, col] += table[here, grey[row, col + 1], part]
                if below and beside:
                    columns[6 + part, col] += table[here, grey[row + 1, col + 1], part]
                    columns[6 + part, col] += table[grey[row + 1, col], grey[row, col + 1], part]


@compiled
def _pair_statistics(grey: NDArray[np.int16], radius: int, table: NDArray[np.int64]) -> NDArray[np.float32]:
    height, width = grey.shape
    size = 2 * radius + 1
    out = np.full((3, height, width), np.nan, np.float32)
    columns = np.empty((13, width), np.int64)
    sums = np.empty(6, np.int64)
    for row in range(height):
        _column_sums(grey, max(0, row - radius), min(height, row + radius + 1), table, columns)
        sums[:] = 0
        valid = 0
        for entering in range(width + radius):
            leaving, col = entering - size, entering - radius
            if entering < width:
                valid += columns[12, entering]
                for part in range(6):
                    sums[part] += columns[part, entering] + (columns[6 + part, entering - 1] if entering > 0 else 0)
            if leaving >= 0:
                valid -= columns[12, leaving]
                for part in range(6):
                    sums[part] -= columns[part, leaving] + columns[6 + part, leaving]
            if col < 0 or grey[row, col] < 0 or 4 * valid < size * size or sums[0] == 0:
                continue
            doubled = 2 * sums[0]
            spread = doubled * sums[5] - sums[3] * sums[3]
            out[0, row, col] = sums[1] / sums[0]
            out[1, row, col] = sums[2] / _PARTS / sums[0]
            out[2, row, col] = (doubled * sums[4] - sums[3] * sums[3]) / spread if spread > 0 else 1.0
    return out


def _pair_codes(grey: NDArray[np.int16], levels: int) -> NDArray[np.int32]:
    """Lower level * levels + higher level of each pair, -1 if one is invalid, int32 (4, h, w).

    Pairs of a pixel with the next one along, below, below along; and of the one below it with the next one along.
    """
    codes = np.full((4, *grey.shape), -1, np.int32)
    ends = (
        (grey[:, :-1], grey[:, 1:]), (grey[:-1], grey[1:]), (grey[:-1, :-1], grey[1:, 1:]), (grey[1:, :-1], grey[:-1,
        1:]),
    )  # fmt: skip
    for code, (one, other) in zip(codes, ends, strict=True):
        low, high = np.minimum(one, other).astype(np.int32), np.maximum(one, other)
        code[: one.shape[0], : one.shape[1]] = np.where(low < 0, -1, low * levels + high)
    return codes


@compiled
def _entropy(codes: NDArray[np.int32], radius: int, levels: int, weights: NDArray[np.float64]) -> NDArray[np.float32]:
    """cells: how often each code was seen. alike: how many cells were seen that often, off the diagonal and on it."""
    _, height, width = codes.shape
    size = 2 * radius + 1
    out = np.full((height, width), np.nan, np.float32)
    cells = np.empty(levels * levels, np.int64)
    alike = np.empty((len(weights) + 1, 2), np.int64)
    diagonal = np.zeros(levels * levels, np.int64)
    diagonal[:: levels + 1] = 1
    for row in range(height):
        first, last = max(0, row - radius), min(height, row + radius + 1)
        cells[:] = 0
        alike[:] = 0
        pairs = top = 0
        for entering in range(width + radius):
            for sign in (1, -1):
                within = entering if sign > 0 else entering - size
                between = entering - 1 if sign > 0 else within
                for direction in range(4 if 0 <= within < width else 0):
                    col = within if direction == 1 else between
                    for near in range(first, last if direction == 0 else last - 1):
                        code = codes[direction, near, col] if col >= 0 else -1
                        if code >= 0:
                            times, side = cells[code], diagonal[code]
                            alike[times, side] -= 1
                            alike[times + sign, side] += 1
                            cells[code] = times + sign
                            pairs += sign
                            top = max(top, times + sign)
            if entering >= radius and pairs > 0:
                while alike[top, 0] + alike[top, 1] == 0:
                    top -= 1
                logs = 0.0
                for times in range(1, top + 1):
                    logs += alike[times, 0] * weights[times, 0] + alike[times, 1] * weights[times, 1]
                out[row, entering - radius] = max(0.0, np.log(2.0 * pairs) - logs / (2.0 * pairs))
    return out
