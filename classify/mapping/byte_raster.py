"""A raster of bytes in a plain file, row by row: written and read by window, by any number of processes over time."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from classify.raster.grid import Grid, Window


@dataclass(frozen=True, slots=True)
class ByteRaster:
    """height x width bytes at `path`; all zero, and sparse where the file system can, when new. Raises OSError."""

    path: Path
    grid: Grid

    def create(self) -> None:
        """Make the file, or empty it."""
        with self.path.open("wb") as stream:
            stream.truncate(self.grid.height * self.grid.width)

    def write(self, window: Window, values: NDArray[np.uint8]) -> None:
        """Store `values` (uint8, (h, w)) at a window inside the grid."""
        with self.path.open("r+b") as stream:
            for offset, row in zip(self._offsets(window), np.ascontiguousarray(values), strict=True):
                stream.seek(offset)
                stream.write(row.data)

    def read(self, window: Window) -> NDArray[np.uint8]:
        """Bytes of a window inside the grid, uint8 (h, w)."""
        values = np.empty(window.shape_yx, dtype=np.uint8)
        with self.path.open("rb") as stream:
            for offset, row in zip(self._offsets(window), values, strict=True):
                stream.seek(offset)
                if stream.readinto(row.data) != window.width:
                    raise OSError(f"{self.path} is shorter than its raster")
        return values

    def _offsets(self, window: Window) -> range:
        first = window.row * self.grid.width + window.col
        return range(first, first + window.height * self.grid.width, self.grid.width)
