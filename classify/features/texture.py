"""Statistics of a layer in a square window around each pixel.

Invalid pixels of the window are left out. A pixel has a value if it is itself valid and at least a quarter of its
window is: as much as the corner of a scene leaves.

Co-occurrence statistics see grey levels that divide a fixed range of values, which is part of the feature: levels taken
from the scene at hand would mean something else in the next one.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from classify.features.co_occurrence import entropy, grey_levels, pair_statistics
from classify.features.compiled import compiled
from classify.settings.features import TextureStatistic

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
            found |= self._co_occurrence(layer)
        return np.stack([found[statistic] for statistic in self.statistics])

    def _co_occurrence(self, layer: NDArray[np.float32]) -> dict[str, NDArray[np.float32]]:
        grey, radius = grey_levels(layer, self.low, self.high, self.levels), self.size // 2
        found = dict(
            zip(("contrast", "homogeneity", "correlation"), pair_statistics(grey, radius, self.levels), strict=True)
        )
        if "entropy" in self.statistics:
            known = ~np.isnan(found["contrast"])
            found["entropy"] = np.where(known, entropy(grey, radius, self.levels), np.float32(np.nan))
        return found


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
