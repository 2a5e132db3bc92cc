"""Which pixels a mask rejects: by code, by bit, or by a field of several bits."""

from __future__ import annotations

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
        # Through the unsigned type of the same size, so that a set top bit is a bit and not a sign.
        bits = stored.astype(stored.dtype.str.replace("i", "u"), copy=False) if stored.dtype.kind == "i" else stored
        run = (bits.astype(np.uint64) >> np.uint64(self.first)) & np.uint64((1 << self.width) - 1)
        return np.isin(run, np.array(self.values, dtype=np.uint64))


@dataclass(frozen=True, slots=True)
class MaskSource:
    """One band of a mask raster, the grid it is stored on, and what it rejects. Any field that matches rejects."""

    path: str
    band: int
    native: Grid
    fields: tuple[MaskField, ...]

    def rejects(self, stored: NDArray[np.generic]) -> NDArray[np.bool_]:
        """bool array of the same shape: True where the pixel must not be used."""
        found = np.zeros(stored.shape, dtype=bool)
        for field in self.fields:
            found |= field.rejects(stored)
        return found


def codes(values: Iterable[int]) -> MaskField:
    """A field that rejects whole mask values."""
    return MaskField(tuple(values))


def bit(number: int) -> MaskField:
    """A field that rejects where one bit is set."""
    return MaskField((1,), number, 1)
