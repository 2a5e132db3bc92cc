"""The grid of a map as a value: CRS, transform, shape; and windows on it, in whole pixels.

Axis order is part of every name: `_yx` is (rows, columns), `_xy` is (x, y) in CRS units. A pixel's corner, not its
centre, is at integer pixel coordinates, as in rasterio's transforms.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import rasterio.windows
from affine import Affine
from numpy.typing import NDArray
from rasterio.crs import CRS
from rasterio.transform import array_bounds


@dataclass(frozen=True, slots=True)
class Window:
    """A rectangle of whole pixels: first row and column, height and width in pixels. May reach outside a grid."""

    row: int
    col: int
    height: int
    width: int

    @property
    def shape_yx(self) -> tuple[int, int]:
        """(height, width) in pixels."""
        return self.height, self.width

    @property
    def slices_yx(self) -> tuple[slice, slice]:
        """Index expression for an array that covers the whole grid. Only for windows inside the grid."""
        return slice(self.row, self.row + self.height), slice(self.col, self.col + self.width)

    def pad(self, px: int) -> Window:
        """The window grown by `px` pixels on every side."""
        return Window(self.row - px, self.col - px, self.height + 2 * px, self.width + 2 * px)

    def intersect(self, other: Window) -> Window | None:
        """The common part, or None if there is none."""
        row, col = max(self.row, other.row), max(self.col, other.col)
        end_row = min(self.row + self.height, other.row + other.height)
        end_col = min(self.col + self.width, other.col + other.width)
        if end_row <= row or end_col <= col:
            return None
        return Window(row, col, end_row - row, end_col - col)

    def shift(self, rows: int, cols: int) -> Window:
        """The window moved by whole pixels."""
        return Window(self.row + rows, self.col + cols, self.height, self.width)

    def to_rasterio(self) -> rasterio.windows.Window:
        """The same window as rasterio spells it."""
        return rasterio.windows.Window(self.col, self.row, self.width, self.height)


@dataclass(frozen=True, slots=True)
class Grid:
    """CRS, affine transform (pixel corner to CRS units) and shape of a raster."""

    crs: CRS
    transform: Affine
    height: int
    width: int

    @property
    def shape_yx(self) -> tuple[int, int]:
        """(rows, columns)."""
        return self.height, self.width

    @property
    def window(self) -> Window:
        """The window that covers the whole grid."""
        return Window(0, 0, self.height, self.width)

    @property
    def bounds(self) -> tuple[float, float, float, float]:
        """(left, bottom, right, top) in CRS units."""
        left, bottom, right, top = array_bounds(self.height, self.width, self.transform)
        return left, bottom, right, top

    def crop(self, window: Window) -> Grid:
        """The grid of a window."""
        return Grid(self.crs, self.transform @ Affine.translation(window.col, window.row), *window.shape_yx)

    def blocks(self, size_px: int = 512) -> Iterator[Window]:
        """Windows of at most `size_px` on a side that tile the grid, row by row."""
        for row in range(0, self.height, size_px):
            for col in range(0, self.width, size_px):
                yield Window(row, col, min(size_px, self.height - row), min(size_px, self.width - col))

    def rowcol(self, x: NDArray[np.float64], y: NDArray[np.float64]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Row and column (int64, shape (n,)) of the pixel that holds each point; may lie outside the grid, and are -1
        for a point that is nowhere (infinite or NaN, as places that a CRS does not know become)."""
        inverse = ~self.transform
        x, y = np.asarray(x, dtype=np.float64), np.asarray(y, dtype=np.float64)
        somewhere = np.isfinite(x) & np.isfinite(y)
        x, y = np.where(somewhere, x, 0), np.where(somewhere, y, 0)
        cols = inverse.a * x + inverse.b * y + inverse.c
        rows = inverse.d * x + inverse.e * y + inverse.f
        return (
            np.where(somewhere, np.floor(rows), -1).astype(np.int64),
            np.where(somewhere, np.floor(cols), -1).astype(np.int64),
        )

    def xy(self, rows: NDArray[np.int64], cols: NDArray[np.int64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """CRS coordinates (float64, shape (n,)) of pixel centres."""
        c, r = np.asarray(cols) + 0.5, np.asarray(rows) + 0.5
        t = self.transform
        return t.a * c + t.b * r + t.c, t.d * c + t.e * r + t.f

    def contains(self, rows: NDArray[np.int64], cols: NDArray[np.int64]) -> NDArray[np.bool_]:
        """Whether each row and column lies on the grid."""
        return (rows >= 0) & (rows < self.height) & (cols >= 0) & (cols < self.width)
