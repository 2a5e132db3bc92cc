"""Which pixels a mask rejects: by code, by bit, or by a field of several bits."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from classify.raster.grid import Grid


@dataclass(frozen=True, slots=True)
class MaskField:
    """A run of bits of a mask value, and which of its values reject the pixel.

    first: number of its lowest bit, 0 the lowest of all. width: how many bits; None is the whole value as it stands.
    values: what the run must equal for the pixel to be rejected.
    """

    values: tuple[int, ...]
    first: int = 0
    width: int | None = None

    def rejects(self, stored: NDArray[np.generic]) -> NDArray[np.bool_]:
        """bool array of the same shape."""
        if self.width is None:
            return np.isin(stored, self.values)
        # A negative number becomes the same bits with ones above them, where no run of its type lies.
        run = (stored.astype(np.uint64) >> np.uint64(self.first)) & np.uint64((1 << self.width) - 1)
        return np.isin(run, np.array(self.values, dtype=np.uint64))


@dataclass(frozen=True, slots=True)
class MaskSource:
    """One band of a mask raster, the grid it is stored on, and what it rejects. Any field that matches rejects,
    and so does every pixel within `buffer_m` of one that is rejected."""

    path: str
    band: int
    native: Grid
    fields: tuple[MaskField, ...]
    buffer_m: float = 0.0

    def rejects(self, stored: NDArray[np.generic]) -> NDArray[np.bool_]:
        """bool array of the same shape: True where the pixel must not be used."""
        found = np.zeros(stored.shape, dtype=bool)
        for field in self.fields:
            found |= field.rejects(stored)
        return found


@dataclass(frozen=True, slots=True)
class Disc:
    """Offsets in pixels whose centres lie within a distance. half_widths[i]: columns each way, i rows up or down."""

    half_widths: tuple[int, ...]

    @classmethod
    def of_radius(cls, radius_m: float, pixel_m_yx: tuple[float, float]) -> Disc:
        """The disc of a radius in metres on pixels of the given height and width in metres."""
        # Slack of two in a thousand: on the ground a UTM pixel of "10 m" measures up to 10.004 m, and a radius of 30 m
        # is meant to reach three of them.
        radius_m *= 1.002
        rows = int(radius_m / pixel_m_yx[0])
        reach = (math.sqrt(max(radius_m**2 - (row * pixel_m_yx[0]) ** 2, 0.0)) for row in range(rows + 1))
        return cls(tuple(int(columns_m / pixel_m_yx[1]) for columns_m in reach))

    @property
    def halo_px(self) -> int:
        """Pixels around a window that decide on pixels in it."""
        return max(len(self.half_widths) - 1, self.half_widths[0])

    def grow(self, seeds: NDArray[np.bool_]) -> NDArray[np.bool_]:
        """Pixels within the disc of a seed. seeds: bool (h + 2p, w + 2p), p the halo; result: bool (h, w)."""
        p = self.halo_px
        height, width = seeds.shape[0] - 2 * p, seeds.shape[1] - 2 * p
        # Seeds up to a column; the difference of two columns tells whether there is one between them.
        count = np.zeros((seeds.shape[0], seeds.shape[1] + 1), dtype=np.int32)
        np.cumsum(seeds, axis=1, out=count[:, 1:])
        found = np.zeros((height, width), dtype=bool)
        for row, half in enumerate(self.half_widths):
            near = count[:, p + half + 1 : p + half + 1 + width] > count[:, p - half : p - half + width]
            found |= near[p + row : p + row + height]
            found |= near[p - row : p - row + height]
        return found


def codes(values: Iterable[int]) -> MaskField:
    """A field that rejects whole mask values."""
    return MaskField(tuple(values))


def bit(number: int) -> MaskField:
    """A field that rejects where one bit is set."""
    return MaskField((1,), number, 1)
