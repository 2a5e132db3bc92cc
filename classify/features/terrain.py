"""The shape of the ground from a layer of elevations in metres.

Slope, aspect and hillshade come from the gradient of Horn 1981, Proc. IEEE 69(1): differences across a 3 x 3 window,
the middle row and column counted twice. Topographic position is a pixel's height above the mean of the others in its
window (Weiss 2001, ESRI User Conference, poster; a square window in place of a ring). At edges of the data a missing
neighbour is taken to continue the slope through its opposite, so that a plane has one slope everywhere.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from classify.features.compiled import compiled
from classify.features.texture import row_sums
from classify.settings.features import TerrainStatistic

# East and north metres per column, then per row: of a pixel's right-hand and lower neighbour.
PixelVectors = tuple[float, float, float, float]


@dataclass(frozen=True, slots=True)
class TerrainStep:
    """One statistic of the elevation layer `of`.

    slope: degrees. aspect sine, aspect cosine: of the direction that the ground faces, clockwise from north, both 0
    where it is level. topographic position: metres. hillshade: share 0..1 of the sun's light that the ground catches, 0
    in its own shade; sun in degrees. pixel_m: see PixelVectors; size: window of the topographic position in pixels.
    """

    name: str
    of: str
    statistic: TerrainStatistic
    pixel_m: PixelVectors
    size: int = 3
    sun_azimuth: float = 315.0
    sun_elevation: float = 45.0
    kind: Literal["terrain"] = "terrain"

    @property
    def outputs(self) -> tuple[str, ...]:
        """The layer that the step makes."""
        return (self.name,)

    @property
    def needs(self) -> tuple[str, ...]:
        """The layer of elevations."""
        return (self.of,)

    @property
    def halo_px(self) -> int:
        """One pixel, or half the window of the topographic position."""
        return self.size // 2 if self.statistic == "topographic position" else 1

    def apply(self, layers: NDArray[np.float32]) -> NDArray[np.float32]:
        """The statistic, float32 (1, h, w), of the elevations in `layers` (float32 (1, h, w), NaN = invalid)."""
        with np.errstate(all="ignore"):
            if self.statistic == "topographic position":
                return np.asarray(height_above_others(layers[0], self.size // 2))[None]
            east, north = gradient(layers[0], self.pixel_m)
            return self._of_gradient(east, north).astype(np.float32)[None]

    def _of_gradient(self, east: NDArray[np.float64], north: NDArray[np.float64]) -> NDArray[np.float64]:
        steepness = np.hypot(east, north)
        match self.statistic:
            case "slope":
                return np.asarray(np.degrees(np.arctan(steepness)))
            case "aspect sine":  # the ground faces downhill, against the gradient
                return np.where(steepness == 0, 0.0, -east / steepness)
            case "aspect cosine":
                return np.where(steepness == 0, 0.0, -north / steepness)
        azimuth, elevation = math.radians(self.sun_azimuth), math.radians(self.sun_elevation)
        # Cosine of the angle between the sun and the normal (-east, -north, 1).
        towards = -east * math.sin(azimuth) - north * math.cos(azimuth)
        light = (towards * math.cos(elevation) + math.sin(elevation)) / np.sqrt(1 + steepness * steepness)
        return np.asarray(np.maximum(light, 0.0))


def gradient(layer: NDArray[np.float32], pixel_m: PixelVectors) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Rise per metre to the east and to the north, float64 (h, w) each, of elevations in metres."""
    along, down = horn_differences(layer)
    east_col, north_col, east_row, north_row = pixel_m
    determinant = east_col * north_row - east_row * north_col
    # A step of one column rises by `along` = east_col * east + north_col * north; likewise one row.
    east = (along * north_row - down * north_col) / determinant
    north = (down * east_col - along * east_row) / determinant
    return east, north


@compiled
def _neighbour(layer: NDArray[np.float32], row: int, col: int, down: int, along: int) -> float:
    """Elevation of a neighbour, or what its opposite makes of it, or NaN."""
    height, width = layer.shape
    far_row, far_col = row + down, col + along
    if 0 <= far_row < height and 0 <= far_col < width and not np.isnan(layer[far_row, far_col]):
        return np.float64(layer[far_row, far_col])
    far_row, far_col = row - down, col - along
    if 0 <= far_row < height and 0 <= far_col < width:
        return 2.0 * np.float64(layer[row, col]) - np.float64(layer[far_row, far_col])
    return np.nan


@compiled
def horn_differences(layer: NDArray[np.float32]) -> NDArray[np.float64]:
    """Rise per pixel along a row (to the right) and down a column, float64 (2, h, w)."""
    height, width = layer.shape
    out = np.empty((2, height, width))
    near = np.empty((3, 3))
    for row in range(height):
        for col in range(width):
            here = np.float64(layer[row, col])
            for down in range(-1, 2):
                for along in range(-1, 2):
                    near[down + 1, along + 1] = _neighbour(layer, row, col, down, along)
            for side in range(0, 3, 2):  # missing with its opposite: level in that direction
                if np.isnan(near[side, 1]):
                    near[side, 1] = here
                if np.isnan(near[1, side]):
                    near[1, side] = here
            for down in range(0, 3, 2):  # then corners from the sides beside them
                for along in range(0, 3, 2):
                    if np.isnan(near[down, along]):
                        near[down, along] = near[down, 1] + near[1, along] - here
            right = near[0, 2] + 2.0 * near[1, 2] + near[2, 2]
            left = near[0, 0] + 2.0 * near[1, 0] + near[2, 0]
            below = near[2, 0] + 2.0 * near[2, 1] + near[2, 2]
            above = near[0, 0] + 2.0 * near[0, 1] + near[0, 2]
            out[0, row, col] = (right - left) / 8.0
            out[1, row, col] = (below - above) / 8.0
            if np.isnan(here):
                out[:, row, col] = np.nan
    return out


@compiled
def height_above_others(layer: NDArray[np.float32], radius: int) -> NDArray[np.float32]:
    """Elevation less the mean of the other valid pixels in the window, float32 (h, w)."""
    height, width = layer.shape
    pixels = (2 * radius + 1) ** 2
    out = np.empty((height, width), np.float32)
    column = np.empty((3, width + 2 * radius))
    total = np.empty((3, width))
    for row in range(height):
        row_sums(layer, row, radius, column, total)
        for col in range(width):
            here, count = np.float64(layer[row, col]), total[0, col]
            few = count < 2.0 or 4.0 * count < pixels
            out[row, col] = np.nan if few else here - (total[1, col] - here) / (count - 1.0)
    return out
