"""A scene: bands of any resolution and CRS, read as reflectance on one grid, window by window.

A `Scene` is a plain value that can be sent to other threads or machines, each of which opens its own `SceneReader`.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from types import TracebackType

import numpy as np
from numpy.typing import NDArray

from classify.errors import DataError, Problem
from classify.raster.area import pixel_size_m
from classify.raster.composite import CLEAR_COUNT, Composite
from classify.raster.grid import Grid, Window
from classify.raster.masks import Disc, MaskSource
from classify.raster.resample import (
    Array,
    Placement,
    Rule,
    any_of_points,
    gather_bilinear,
    gather_nearest,
    mean_of_points,
    source_window,
)
from classify.raster.sources import BandSource, OpenFiles, own_mask, read_window, to_reflectance

# A source so much finer than the grid is averaged; below this ratio it is interpolated.
_MEAN_FROM_RATIO = 1.5
# Points of a finer source that are looked at at once.
_MEAN_BUFFER_PX = 2_000_000


@dataclass(frozen=True)
class Scene:
    """Bands on one grid.

    masks: by name of the date that they belong to. warnings: findings that do not stop the work but travel on.
    composite: if there is one, its layers are called by role alone, and bands of every date role@date.
    """

    grid: Grid
    bands: tuple[BandSource, ...]
    masks: Mapping[str, MaskSource] = field(default_factory=dict)
    warnings: tuple[Problem, ...] = ()
    resampling: Rule = "bilinear"
    composite: Composite | None = None

    @property
    def roles(self) -> tuple[str, ...]:
        """Names of all layers: those without a date first, in the order of the project file."""
        made = (*self.composite.roles, CLEAR_COUNT) if self.composite else ()
        stored = tuple(band.role for band in self.bands)
        return (*made, *(r for r in stored if "@" not in r), *(r for r in stored if "@" in r))

    def band(self, role: str) -> BandSource:
        """The stored band of a role; of a composite, that of its first date. Raises DataError listing the layers."""
        for name in (role, f"{role}@{self.composite.dates[0]}" if self.composite else role):
            if name in self._by_role:
                return self._by_role[name]
        fix = f"it has: {', '.join(self.roles)}"
        raise DataError(f"the scene has no band {role!r}", where="scene.bands", fix=fix)

    def open(self) -> SceneReader:
        """A reader for the calling thread; closes with its context."""
        return SceneReader(self)

    @cached_property
    def _by_role(self) -> dict[str, BandSource]:
        return {band.role: band for band in self.bands}

    @cached_property
    def _groups(self) -> dict[str, tuple[BandSource, ...]]:
        """Role -> the bands that are read together with it: those of one file, stored and placed alike."""
        together: dict[tuple[str, Grid, bool, bool], list[BandSource]] = {}
        for band in self.bands:
            together.setdefault((band.path, band.native, band.flagged, band.categorical), []).append(band)
        return {band.role: tuple(group) for group in together.values() for band in group}

    @cached_property
    def _discs(self) -> dict[str, Disc]:
        """Date -> what its mask grows by."""
        grown = {date: mask.buffer_m for date, mask in self.masks.items() if mask.buffer_m > 0}
        pixel_m_yx = pixel_size_m(self.grid) if grown else (1.0, 1.0)
        return {date: Disc.of_radius(buffer_m, pixel_m_yx) for date, buffer_m in grown.items()}

    def __getstate__(self) -> dict[str, object]:
        return {name: value for name, value in self.__dict__.items() if not name.startswith("_")}


class SceneReader:
    """Reads windows of a scene. For one thread at a time; files open when first needed and stay open until `close`."""

    def __init__(self, scene: Scene) -> None:
        self._scene = scene
        self._files = OpenFiles()
        self._placements: dict[str, Placement] = {}

    def __enter__(self) -> SceneReader:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def close(self) -> None:
        """Close all files."""
        self._files.close()

    def read(self, window: Window, roles: Iterable[str] | None = None, halo_px: int = 0) -> dict[str, Array]:
        """Reflectance by role (float32, (h + 2p, w + 2p) for a halo of p pixels), NaN where invalid.

        Invalid is: no data in this band, rejected by the mask, or outside the scene. `window` may lie partly or wholly
        outside the grid. A pixel's value does not depend on the window it is read in. Raises DataError for a role that
        the scene lacks or a file that cannot be read.
        """
        scene = self._scene
        wanted = scene.roles if roles is None else tuple(roles)
        if unknown := set(wanted).difference(scene.roles):
            scene.band(min(unknown))  # raises
        padded = window.pad(halo_px)
        inside = padded.intersect(scene.grid.window)
        if inside is None:
            return {role: np.full(padded.shape_yx, np.nan, np.float32) for role in wanted}
        layers = self._layers(wanted, inside)
        if inside != padded:
            layers = {role: _place(layer, inside, padded) for role, layer in layers.items()}
        return {role: layers[role] for role in wanted}

    def _layers(self, wanted: Sequence[str], window: Window) -> dict[str, Array]:
        scene = self._scene
        made = {*scene.composite.roles, CLEAR_COUNT}.intersection(wanted) if scene.composite else set()
        stored = dict.fromkeys(role for role in wanted if role not in made)
        if scene.composite and made:
            stored.update(dict.fromkeys(scene.composite.needs))
        layers = self._bands([scene.band(role) for role in stored], window)
        dates = {role: scene.band(role).date for role in layers}
        for date in dict.fromkeys(dates.values()):
            if date is not None and date in scene.masks:
                rejected = self.rejected(window, date)
                for role, layer in layers.items():
                    if dates[role] == date:
                        np.copyto(layer, np.float32(np.nan), where=rejected)
        if scene.composite and made:
            layers.update(scene.composite.compute(layers))
        return layers

    def rejected(self, window: Window, date: str) -> NDArray[np.bool_]:
        """bool (h, w): True where the mask of a date rejects the pixel or does not reach it.

        Where the mask is finer than the grid, one rejected mask pixel in it rejects the pixel.
        """
        mask, disc = self._scene.masks[date], self._scene._discs.get(date)
        if disc is None:
            bad, held = self._mask(mask, window)
            return bad | ~held
        halo = disc.halo_px
        bad, held = self._mask(mask, window.pad(halo))
        # Pixels that the mask does not reach are unusable, but not what the buffer is meant to keep away from.
        return np.asarray(disc.grow(bad) | ~held[halo : halo + window.height, halo : halo + window.width])

    def _mask(self, mask: MaskSource, window: Window) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
        """bool (h, w): what the mask rejects, and where it reaches; the window may lie outside the grid."""
        placement = self._placement(mask.path, mask.native)
        points = _points(placement)
        rejects, misses = np.zeros(window.shape_yx, dtype=bool), np.zeros(window.shape_yx, dtype=bool)
        for strip in _strips(window, points):
            rows = slice(strip.row - window.row, strip.row - window.row + strip.height)
            places = placement.places(strip, points)
            part = source_window(mask.native, places, 0)
            if part is None:
                misses[rows] = True
                continue
            stored = read_window(self._files.get(mask.path), mask.path, [mask.band], part)[0]
            picked, held = gather_nearest(mask.rejects(stored), part, mask.native, places)
            rejects[rows] = any_of_points(picked.astype(bool) & held, points)
            misses[rows] = any_of_points(~held, points)
        return rejects, ~misses

    def _bands(self, bands: Sequence[BandSource], window: Window) -> dict[str, Array]:
        layers: dict[str, Array] = {}
        asked = {band.role for band in bands}
        for band in bands:
            if band.role not in layers:
                together = [b for b in self._scene._groups[band.role] if b.role in asked]
                layers.update(zip((b.role for b in together), self._group(together, window), strict=True))
        return layers

    def _group(self, bands: list[BandSource], window: Window) -> Array:
        """float32 (n, h, w) of bands of one file on the scene's grid; a window inside the grid."""
        placement = self._placement(bands[0].path, bands[0].native)
        shift = placement.shift_yx
        if shift is not None:
            return self._direct(bands, window, shift)
        points = _points(placement)
        if points != (1, 1) and not bands[0].categorical:
            return self._mean(bands, window, placement, points)
        bilinear = self._scene.resampling == "bilinear" and not bands[0].categorical
        places = placement.places(window)
        part = source_window(placement.source, places, 1 if bilinear else 0)
        if part is None:
            return np.full((len(bands), *window.shape_yx), np.nan, np.float32)
        values = self._values(bands, part)
        if bilinear:
            return gather_bilinear(values, part, placement.source, places)
        picked, held = gather_nearest(values, part, placement.source, places)
        return np.where(held, picked, np.float32(np.nan)).astype(np.float32, copy=False)

    def _direct(self, bands: list[BandSource], window: Window, shift_yx: tuple[int, int]) -> Array:
        wanted = window.shift(*shift_yx)
        part = wanted.intersect(bands[0].native.window)
        if part == wanted:
            return self._values(bands, wanted)
        result = np.full((len(bands), *window.shape_yx), np.nan, np.float32)
        if part is not None:
            rows, cols = part.shift(-wanted.row, -wanted.col).slices_yx
            result[:, rows, cols] = self._values(bands, part)
        return result

    def _mean(self, bands: list[BandSource], window: Window, placement: Placement, points: tuple[int, int]) -> Array:
        result = np.full((len(bands), *window.shape_yx), np.nan, np.float32)
        for strip in _strips(window, points):
            places = placement.places(strip, points)
            part = source_window(placement.source, places, 0)
            if part is None:
                continue
            picked, held = gather_nearest(self._values(bands, part), part, placement.source, places)
            rows = slice(strip.row - window.row, strip.row - window.row + strip.height)
            result[:, rows] = mean_of_points(picked.astype(np.float32, copy=False), held, points)
        return result

    def _values(self, bands: list[BandSource], part: Window) -> Array:
        """Reflectance (n, rows, cols) of a window inside the bands' own grid."""
        path = bands[0].path
        dataset = self._files.get(path)
        numbers = [band.band for band in bands]
        stored = read_window(dataset, path, numbers, part)
        values = np.empty(stored.shape, np.float32)
        for layer, raw, band in zip(values, stored, bands, strict=True):
            layer[:] = to_reflectance(raw, band)
            if band.flagged:
                layer[own_mask(dataset, path, band.band, part)] = np.nan
        return values

    def _placement(self, path: str, native: Grid) -> Placement:
        if path not in self._placements:
            self._placements[path] = Placement(native, self._scene.grid)
        return self._placements[path]


def _points(placement: Placement) -> tuple[int, int]:
    """Points to look at per target pixel along rows and columns: (1, 1) unless the source is finer."""
    rows, cols = (round(ratio) if ratio >= _MEAN_FROM_RATIO else 1 for ratio in placement.ratio_yx)
    return rows, cols


def _place(layer: Array, inside: Window, padded: Window) -> Array:
    result = np.full(padded.shape_yx, np.nan, np.float32)
    result[inside.shift(-padded.row, -padded.col).slices_yx] = layer
    return result


def _strips(window: Window, points: tuple[int, int]) -> list[Window]:
    """The window in strips of rows, few enough that the points of one fit the buffer."""
    height = max(1, _MEAN_BUFFER_PX // (points[0] * points[1] * window.width))
    return [
        Window(row, window.col, min(height, window.row + window.height - row), window.width)
        for row in range(window.row, window.row + window.height, height)
    ]
