"""One value per band and pixel out of several dates, from the dates that are clear at that pixel.

A date is clear at a pixel when none of its bands is invalid there (masked, no data, outside), so that the bands of a
composite pixel always rest on the same dates.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float32]

# The layer that counts clear dates.
CLEAR_COUNT = "clear_count"


@dataclass(frozen=True, slots=True)
class Composite:
    """How dates become one layer per role.

    dates: names in order; a tie goes to the earlier. method: the median per band, or every band of the date with the
    highest or lowest normalised difference (a - b) / (a + b) of the two roles `of`. minimum_clear: a pixel with fewer
    clear dates is invalid.
    """

    roles: tuple[str, ...]
    dates: tuple[str, ...]
    method: Literal["median", "highest", "lowest"]
    of: tuple[str, str] | None = None
    minimum_clear: int = 1

    @property
    def needs(self) -> tuple[str, ...]:
        """Layers to read: role@date of all roles and dates."""
        return tuple(f"{role}@{date}" for date in self.dates for role in self.roles)

    def compute(self, layers: Mapping[str, Array]) -> dict[str, Array]:
        """Composites by role (float32 (h, w), NaN invalid) and the count of clear dates, 0 where there is none."""
        by_role = {role: np.stack([layers[f"{role}@{date}"] for date in self.dates]) for role in self.roles}
        clear = np.ones(next(iter(by_role.values())).shape, dtype=bool)
        for values in by_role.values():
            clear &= ~np.isnan(values)
        count = clear.sum(axis=0)
        best = None if self.method == "median" else self._best(by_role, clear)
        result = {}
        for role, values in by_role.items():
            layer = _median(values, clear, count) if best is None else np.take_along_axis(values, best[None], axis=0)[0]
            layer[count < max(self.minimum_clear, 1)] = np.nan
            result[role] = layer
        return {**result, CLEAR_COUNT: count.astype(np.float32)}

    def _best(self, by_role: Mapping[str, Array], clear: NDArray[np.bool_]) -> NDArray[np.intp]:
        assert self.of is not None, self.method
        a, b = (by_role[role] for role in self.of)
        with np.errstate(invalid="ignore", divide="ignore"):
            index = (a - b) / (a + b)
        # A clear date whose index is not defined (a + b = 0) is taken only when no other date is clear.
        sign = np.float32(1 if self.method == "highest" else -1)
        rank = np.where(np.isfinite(index), sign * index, np.finfo(np.float32).min)
        return np.asarray(np.where(clear, rank, -np.inf).argmax(axis=0))


def _median(values: Array, clear: NDArray[np.bool_], count: NDArray[np.int64]) -> Array:
    """Median over the clear dates, the mean of the two middle ones where their number is even."""
    ordered = np.sort(np.where(clear, values, np.float32(np.inf)), axis=0)
    low, high = np.maximum(count - 1, 0) // 2, np.minimum(count // 2, len(values) - 1)
    picked: Sequence[Array] = [np.take_along_axis(ordered, place[None], axis=0)[0] for place in (low, high)]
    return np.asarray((picked[0] + picked[1]) * np.float32(0.5))
