"""Absorption dips and the red edge, from bands of known wavelength.

A dip is measured below its continuum, the straight line between the reflectances of the bands at its two shoulders
(Clark & Roush 1984, J. Geophys. Res. 89): with c = reflectance / continuum,

- depth = 1 - least c, of the bands between the shoulders;
- area = integral of 1 - c over wavelength, in nm, by trapezia;
- position = wavelength in nm of the least c, between bands by the parabola through the least and its two neighbours;
- asymmetry = (area right of the position - area left of it) / area, -1..1: of the kind of van der Meer 2004, Int. J.
  Appl. Earth Obs. Geoinf. 5, who takes the ratio of the two sides, which has no bound.

Where there is no dip, or the surface is too dark (a shoulder under 1 % reflectance) to tell, depth and area are as
small as they come out (0 if too dark), position is the dip's usual one and asymmetry 0, so that water is not lost from
a map.

The red edge (Horler, Dockray & Barber 1983, Int. J. Remote Sens. 4) is the steepest rise between 670 and 780 nm: its
slope is the greatest difference of neighbouring bands per micrometre, its position where that is, again by a parabola.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from types import MappingProxyType
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from classify.errors import SettingsError
from classify.features.compiled import compiled
from classify.settings.features import AbsorptionMeasure
from classify.settings.presets import configs_folder, read_toml

DIP_MEASURES: tuple[AbsorptionMeasure, ...] = ("depth", "area", "position", "asymmetry")
EDGE_MEASURES: tuple[AbsorptionMeasure, ...] = ("slope", "position")
RED_EDGE = "red_edge"
RED_EDGE_NM = (670.0, 780.0)
TOO_DARK = 0.01


@dataclass(frozen=True, slots=True)
class Dip:
    """One table of configs/absorptions.toml. instead: the index that stands nearest to it for broad bands."""

    name: str
    title: str
    shows: str
    left_nm: float
    centre_nm: float
    right_nm: float
    source: str
    instead: str


@cache
def dips() -> Mapping[str, Dip]:
    """Every dip by name. Raises SettingsError if the file of presets is broken."""
    file = configs_folder() / "absorptions.toml"
    try:
        found = {name: Dip(name, **table) for name, table in read_toml(file).items()}
    except TypeError as error:
        raise SettingsError(f"a dip has wrong keys ({error})", where=str(file)) from error
    return MappingProxyType(found)


class _OfOnePixel:
    """What steps share that read bands of single pixels."""

    __slots__ = ()
    bands: tuple[str, ...]

    @property
    def needs(self) -> tuple[str, ...]:
        """The bands that the measures are taken from."""
        return self.bands

    @property
    def halo_px(self) -> int:
        """None: a spectrum is a matter of one pixel."""
        return 0


@dataclass(frozen=True, slots=True)
class AbsorptionStep(_OfOnePixel):
    """Measures of one dip, one layer of `outputs` for each.

    bands: layers by rising wavelength, the first and last at the shoulders; wavelengths_nm: theirs. centre_nm: where
    the dip usually is.
    """

    outputs: tuple[str, ...]
    measures: tuple[AbsorptionMeasure, ...]
    bands: tuple[str, ...]
    wavelengths_nm: tuple[float, ...]
    centre_nm: float
    kind: Literal["absorption"] = "absorption"

    def apply(self, layers: NDArray[np.float32]) -> NDArray[np.float32]:
        """The measures, float32 (outputs, h, w), of reflectance in `layers` (float32 (bands, h, w), NaN = invalid)."""
        every = measure_dip(layers, np.array(self.wavelengths_nm), self.centre_nm)
        return np.asarray(every)[[DIP_MEASURES.index(measure) for measure in self.measures]]


@dataclass(frozen=True, slots=True)
class RedEdgeStep(_OfOnePixel):
    """Slope and position of the red edge, one layer of `outputs` for each of `measures`; bands by rising wavelength."""

    outputs: tuple[str, ...]
    measures: tuple[AbsorptionMeasure, ...]
    bands: tuple[str, ...]
    wavelengths_nm: tuple[float, ...]
    kind: Literal["red edge"] = "red edge"

    def apply(self, layers: NDArray[np.float32]) -> NDArray[np.float32]:
        """The measures, float32 (outputs, h, w), of reflectance in `layers` (float32 (bands, h, w), NaN = invalid)."""
        every = measure_red_edge(layers, np.array(self.wavelengths_nm))
        return np.asarray(every)[[EDGE_MEASURES.index(measure) for measure in self.measures]]


@compiled
def _vertex(x: NDArray[np.float64], y: NDArray[np.float64], at: int) -> float:
    """Where the parabola through three neighbouring points, the middle one extreme, has its vertex; x rises."""
    left, right = x[at] - x[at - 1], x[at + 1] - x[at]
    fall, rise = (y[at] - y[at - 1]) / left, (y[at + 1] - y[at]) / right
    if rise == fall:
        return float(x[at])
    # The slope runs straight from `fall`, half a step to the left, to `rise`, half a step to the right.
    vertex = x[at] - 0.5 * left - fall * 0.5 * (left + right) / (rise - fall)
    return float(min(max(vertex, x[at - 1]), x[at + 1]))


@compiled
def _area(x: NDArray[np.float64], below: NDArray[np.float64], start: float, end: float) -> float:
    """Integral of the straight lines between points from `start` to `end`."""
    total = 0.0
    for step in range(len(x) - 1):
        low, high = max(x[step], start), min(x[step + 1], end)
        if high > low:
            slope = (below[step + 1] - below[step]) / (x[step + 1] - x[step])
            middle = below[step] + slope * (0.5 * (low + high) - x[step])
            total += middle * (high - low)
    return total


@compiled
def measure_dip(layers: NDArray[np.float32], nm: NDArray[np.float64], centre_nm: float) -> NDArray[np.float32]:
    """Depth, area, position and asymmetry, float32 (4, h, w), of the dip between the first and the last band.

    layers: reflectance, float32 (bands, h, w), by rising wavelength `nm` (bands,). NaN where a band is NaN.
    """
    bands, height, width = layers.shape
    last = bands - 1
    out = np.empty((4, height, width), np.float32)
    below = np.zeros(bands)
    for row in range(height):
        for col in range(width):
            left, right = np.float64(layers[0, row, col]), np.float64(layers[last, row, col])
            deepest, valid = 1, not (np.isnan(left) or np.isnan(right))
            for band in range(1, last):
                value = np.float64(layers[band, row, col])
                valid = valid and not np.isnan(value)
                line = left + (right - left) * (nm[band] - nm[0]) / (nm[last] - nm[0])
                below[band] = 1.0 - value / line
                if below[band] > below[deepest]:
                    deepest = band
            if not valid:
                out[:, row, col] = np.nan
            elif left < TOO_DARK or right < TOO_DARK:
                out[0, row, col] = 0.0
                out[1, row, col] = 0.0
                out[2, row, col] = centre_nm
                out[3, row, col] = 0.0
            else:
                position, lean = centre_nm, 0.0
                area = _area(nm, below, nm[0], nm[last])
                if below[deepest] > 0.0:
                    position = _vertex(nm, below, deepest)
                    if area > 0.0:
                        lean = (_area(nm, below, position, nm[last]) - _area(nm, below, nm[0], position)) / area
                out[0, row, col] = below[deepest]
                out[1, row, col] = area
                out[2, row, col] = position
                out[3, row, col] = min(max(lean, -1.0), 1.0)
    return out


@compiled
def measure_red_edge(layers: NDArray[np.float32], nm: NDArray[np.float64]) -> NDArray[np.float32]:
    """Slope (reflectance per micrometre) and position (nm) of the steepest rise between two bands, (2, h, w)."""
    bands, height, width = layers.shape
    out = np.empty((2, height, width), np.float32)
    middle = 0.5 * (nm[1:] + nm[:-1])
    rise = np.empty(bands - 1)
    for row in range(height):
        for col in range(width):
            steepest, valid = 0, not np.isnan(layers[0, row, col])
            for step in range(bands - 1):
                low, high = np.float64(layers[step, row, col]), np.float64(layers[step + 1, row, col])
                valid = valid and not np.isnan(high)
                rise[step] = 1000.0 * (high - low) / (nm[step + 1] - nm[step])
                if rise[step] > rise[steepest]:
                    steepest = step
            if not valid:
                out[:, row, col] = np.nan
                continue
            inner = 0 < steepest < bands - 2
            out[0, row, col] = rise[steepest]
            out[1, row, col] = _vertex(middle, rise, steepest) if inner else middle[steepest]
    return out
