"""Statistics of a layer in a square window around each pixel.

Invalid pixels of the window are left out. A pixel has a value if it is itself valid and at least a quarter of its
window is: as much as the corner of a scene leaves.

Grey-level co-occurrence (Haralick, Shanmugam & Dinstein 1973, IEEE Trans. Syst. Man Cybern. 3): pairs of neighbours in
the four directions, both ways round, both inside the window, in one matrix P of relative frequencies of grey levels
i, j: contrast = sum (i - j)^2 P, homogeneity = sum P / (1 + (i - j)^2), entropy = -sum P ln P, correlation of i and j
under P, 1 where all grey levels are the same. Grey levels divide a fixed range of values, which is part of the feature:
levels taken from the scene at hand would mean something else in the next one.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from classify.features.compiled import compiled
from classify.settings.model import TextureStatistic

MOMENTS: tuple[TextureStatistic, ...] = ("mean", "standard deviation", "range")
CO_OCCURRENCE: tuple[TextureStatistic, ...] = ("contrast", "homogeneity", "entropy", "correlation")


@dataclass(frozen=True, slots=True)
class TextureStep:
    """Statistics of layer `of` in windows of `size` pixels on a side, one layer of `outputs` for each.

    levels, low, high: co-occurrence statistics see the values from `low` to `high` as 0 .. `levels` - 1, and those
    beyond as the nearest.
    """

    outputs: tuple[str, ...]
    of: str
    statistics: tuple[TextureStatistic, ...]
    size: int
    levels: int = 16
    low: float = 0.0
    high: float = 1.0
    kind: Literal["texture"] = "texture"

    @property
    def needs(self) -> tuple[str, ...]:
        """The layer that the step reads."""
        return (self.of,)

    @property
    def halo_px(self) -> int:
        """Half a window."""
        return self.size // 2

    def apply(self, layers: NDArray[np.float32]) -> NDArray[np.float32]:
        """The statistics, float32 (outputs, h, w), of the layer in `layers` (float32 (1, h, w), NaN = invalid)."""
        layer, radius = layers[0], self.size // 2
        found: dict[str, NDArray[np.float32]] = {}
        if set(self.statistics) & {"mean", "standard deviation"}:
            found["mean"], found["standard deviation"] = mean_and_deviation(layer, radius)
        if "range" in self.statistics:
            found["range"] = value_range(layer, radius)
        if set(self.statistics) & set(CO_OCCURRENCE):
            levels = grey_levels(layer, self.low, self.high, self.levels)
            found |= dict(zip(CO_OCCURRENCE, co_occurrence(levels, radius, self.levels), strict=True))
        return np.stack([found[statistic] for statistic in self.statistics])


def grey_levels(layer: NDArray[np.float32], low: float, high: float, levels: int) -> NDArray[np.int16]:
    """Grey level 0 .. levels - 1 of each value from `low` to `high`, the nearest beyond, -1 for NaN; int16 (h, w)."""
    scaled = np.floor((layer.astype(np.float64) - low) * (levels / (high - low)))
    clipped = np.clip(scaled, 0, levels - 1)
    return np.where(np.isnan(clipped), -1, clipped).astype(np.int16)


@compiled
def row_sums(
    layer: NDArray[np.float32], row: int, radius: int, column: NDArray[np.float64], total: NDArray[np.float64]
) -> None:
    """Number, sum and sum of squares of the valid pixels in the windows of a row, into `total` (3, w).

    `column` (3, w + 2 * radius) is room to work in. Sums run down the rows of a window, then along it, in float64: the
    same order wherever the window lies in a block.
    """
    height, width = layer.shape
    column[:] = 0.0
    for near in range(max(0, row - radius), min(height, row + radius + 1)):
        for col in range(width):
            value = np.float64(layer[near, col])
            valid = not np.isnan(value)
            kept = value if valid else 0.0
            column[0, col + radius] += 1.0 if valid else 0.0
            column[1, col + radius] += kept
            column[2, col + radius] += kept * kept
    total[:] = 0.0
    for step in range(2 * radius + 1):
        for part in range(3):
            for col in range(width):
                total[part, col] += column[part, col + step]


@compiled
def mean_and_deviation(layer: NDArray[np.float32], radius: int) -> NDArray[np.float32]:
    """Mean and standard deviation (of the population) in windows, float32 (2, h, w)."""
    height, width = layer.shape
    pixels = (2 * radius + 1) ** 2
    out = np.empty((2, height, width), np.float32)
    column = np.empty((3, width + 2 * radius))
    total = np.empty((3, width))
    for row in range(height):
        row_sums(layer, row, radius, column, total)
        for col in range(width):
            count = total[0, col]
            if np.isnan(layer[row, col]) or 4.0 * count < pixels:
                out[0, row, col] = np.nan
                out[1, row, col] = np.nan
                continue
            mean = total[1, col] / count
            square = total[2, col] / count
            variance = square - mean * mean
            # What is left of equal values is rounding, up to one last place of `square` for each value added.
            if variance < count * 2.3e-16 * square:
                variance = 0.0
            out[0, row, col] = mean
            out[1, row, col] = np.sqrt(variance)
    return out


@compiled
def value_range(layer: NDArray[np.float32], radius: int) -> NDArray[np.float32]:
    """Greatest less least value in windows, float32 (h, w)."""
    height, width = layer.shape
    size = 2 * radius + 1
    out = np.empty((height, width), np.float32)
    least = np.empty(width + 2 * radius, np.float32)
    most = np.empty(width + 2 * radius, np.float32)
    count = np.empty(width + 2 * radius, np.int64)
    for row in range(height):
        least[:] = np.inf
        most[:] = -np.inf
        count[:] = 0
        for near in range(max(0, row - radius), min(height, row + radius + 1)):
            for col in range(width):
                value = layer[near, col]
                if not np.isnan(value):
                    least[col + radius] = min(least[col + radius], value)
                    most[col + radius] = max(most[col + radius], value)
                    count[col + radius] += 1
        for col in range(width):
            low, high, valid = least[col], most[col], count[col]
            for step in range(1, size):
                low = min(low, least[col + step])
                high = max(high, most[col + step])
                valid += count[col + step]
            missing = np.isnan(layer[row, col]) or 4 * valid < size * size
            out[row, col] = np.nan if missing else high - low
    return out


@compiled
def _pairs(window: NDArray[np.int16], found: NDArray[np.int16]) -> NDArray[np.int16]:
    """Grey levels of all valid neighbours in a window, int16 (pairs, 2), the lower first; kept in `found`."""
    height, width = window.shape
    count = 0
    for row in range(height):
        for col in range(width):
            here = window[row, col]
            if here < 0:
                continue
            for direction in range(4):  # right, down and left, down, down and right
                down = 0 if direction == 0 else 1
                along = 1 if direction == 0 else direction - 2
                if row + down >= height or col + along < 0 or col + along >= width:
                    continue
                there = window[row + down, col + along]
                if there >= 0:
                    found[count, 0] = min(here, there)
                    found[count, 1] = max(here, there)
                    count += 1
    return found[:count]


@compiled
def _describe(pairs: NDArray[np.int16], seen: NDArray[np.int64], out: NDArray[np.float32]) -> None:
    """Contrast, homogeneity, entropy and correlation of pairs of grey levels into `out` (4,).

    `seen` (levels, levels) is room for counts: zero before and after. Sums of grey levels are whole numbers, so exact.
    """
    count = len(pairs)
    apart = total = products = squares = np.int64(0)
    alike = logs = 0.0
    for pair in range(count):
        a, b = np.int64(pairs[pair, 0]), np.int64(pairs[pair, 1])
        gap = (a - b) * (a - b)
        apart += gap
        alike += 1.0 / (1.0 + gap)
        total += a + b
        products += 2 * a * b
        squares += a * a + b * b
        seen[a, b] += 1
    for pair in range(count):
        a, b = pairs[pair, 0], pairs[pair, 1]
        times = seen[a, b]
        if times > 0:  # each cell once; off the diagonal it stands for two cells of half its count
            logs += 2 * times * np.log(2.0 * times) if a == b else 2 * times * np.log(1.0 * times)
            seen[a, b] = 0
    doubled = 2 * count
    spread = doubled * squares - total * total
    out[0] = apart / count
    out[1] = alike / count
    out[2] = max(0.0, np.log(doubled) - logs / doubled)
    out[3] = (doubled * products - total * total) / spread if spread > 0 else 1.0


@compiled
def co_occurrence(grey: NDArray[np.int16], radius: int, levels: int) -> NDArray[np.float32]:
    """Contrast, homogeneity, entropy and correlation in windows of grey levels (-1 = invalid), float32 (4, h, w)."""
    height, width = grey.shape
    size = 2 * radius + 1
    out = np.empty((4, height, width), np.float32)
    seen = np.zeros((levels, levels), np.int64)
    room = np.empty((4 * size * size, 2), np.int16)
    for row in range(height):
        for col in range(width):
            out[:, row, col] = np.nan
            if grey[row, col] < 0:
                continue
            window = grey[max(0, row - radius) : row + radius + 1, max(0, col - radius) : col + radius + 1]
            valid = 0
            for value in window.flat:
                valid += 1 if value >= 0 else 0
            pairs = _pairs(window, room)
            if 4 * valid >= size * size and len(pairs) > 0:
                _describe(pairs, seen, out[:, row, col])
    return out
