"""Findings about a scene as a whole: cover, shifts between grids, values that are no reflectance, masks."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from classify.errors import Problem
from classify.raster.grid import Grid, Window
from classify.raster.guard import is_remote
from classify.raster.reader import Scene
from classify.raster.resample import Placement
from classify.raster.sources import BandSource

# Windows on a lattice of this many per side, this large, stand for the whole scene in checks of its values.
_SAMPLES_PER_SIDE = 4
_SAMPLE_PX = 64
_UNSCALED_MEDIAN = 2.0


@dataclass(frozen=True, slots=True)
class _Fit:
    """How a raster lies on the grid: the share of the grid that it covers, and its shift in pixels, if any."""

    share: float
    shift_xy_px: tuple[float, float] | None


def _fit(native: Grid, grid: Grid) -> _Fit:
    placement = Placement(native, grid)
    rows = np.linspace(0, grid.height - 1, 33).astype(int)
    cols = np.linspace(0, grid.width - 1, 33).astype(int)
    held = 0
    for row in rows:
        r, c = placement.places(Window(int(row), 0, 1, grid.width))
        r, c = (np.broadcast_to(values, (1, grid.width))[0, cols] for values in (r, c))
        with np.errstate(invalid="ignore"):
            held += int(((r >= 0) & (r < native.height) & (c >= 0) & (c < native.width)).sum())
    shift = None
    if placement.same_crs and placement.shift_yx is None:
        a = placement.affine
        if abs(a.a - 1) < 1e-3 and abs(a.e - 1) < 1e-3 and abs(a.b) + abs(a.d) < 1e-3:
            shift = a.c - round(a.c), a.f - round(a.f)
    return _Fit(held / (len(rows) * len(cols)), shift)


def placement_problems(native: Grid, grid: Grid, name: str, path: str) -> list[Problem]:
    """An error if a raster misses the grid; warnings if it covers part of it or is shifted by a part of a pixel."""
    if native == grid:
        return []
    fit = _fit(native, grid)
    if fit.share == 0:
        what = f"{name} does not overlap the grid of the map"
        return [Problem(what, path, "check that it is of the same place, and its CRS")]
    problems = []
    if fit.share < 0.995:
        what = f"{name} covers only {fit.share:.0%} of the map; the rest will be no data"
        fix = "if that is not meant, choose a 'grid' band that all others cover"
        problems.append(Problem(what, path, fix, "warning"))
    if fit.shift_xy_px:
        x, y = fit.shift_xy_px
        what = f"the grid of {name} is shifted by {abs(x):.2f} pixels in x and {abs(y):.2f} in y against the map's"
        fix = "it is interpolated; if the files should match, check their origins"
        problems.append(Problem(what, path, fix, "warning"))
    return problems


def value_warnings(scene: Scene) -> list[Problem]:
    """Warnings from the values themselves, looked at in windows spread over the scene. Raises DataError."""
    # Each window costs a remote file a request or more.
    per_side = 2 if any(is_remote(band.path) for band in scene.bands) else _SAMPLES_PER_SIDE
    windows = _sample_windows(scene.grid, per_side)
    bands = [band for band in scene.bands if band.date is not None]
    # As stored and unmasked: what is looked for does not depend on clouds, and the nearest pixel is quick.
    with replace(scene, masks={}, composite=None, resampling="nearest").open() as reader:
        samples = [reader.read(window, [band.role for band in bands]) for window in windows]
    problems = []
    for band in bands:
        values = np.concatenate([sample[band.role].ravel() for sample in samples])
        values = values[np.isfinite(values)]
        if not values.size:
            fix = "check its no-data value and that it is the right file"
            problems.append(Problem(f"{band.role!r} has no data in any place looked at", band.path, fix, "warning"))
        elif (median := float(np.median(values))) > _UNSCALED_MEDIAN:
            problems.append(_unscaled(band, median))
    with scene.open() as reader:
        for date, mask in scene.masks.items():
            if all(reader.rejected(window, date).all() for window in windows):
                what, fix = "the mask rejects every pixel looked at", "check the codes or bits that it rejects"
                problems.append(Problem(what, mask.path, fix, "warning"))
    return problems


def _sample_windows(grid: Grid, per_side: int) -> list[Window]:
    rows, cols = (np.unique(np.linspace(0, max(size - _SAMPLE_PX, 0), per_side).astype(int)) for size in grid.shape_yx)
    cut = (Window(int(row), int(col), _SAMPLE_PX, _SAMPLE_PX).intersect(grid.window) for row in rows for col in cols)
    return [window for window in cut if window is not None]


# The usual ways to store reflectance, by the largest median that each leaves plausible: percent, eight-bit
# brightness, ten-thousandths, and the full range of sixteen bits.
_USUAL_SCALES = ((100, "0.01"), (255, "0.00392157 (1/255)"), (10_000, "0.0001"), (np.inf, "0.0000152590 (1/65535)"))


def _unscaled(band: BandSource, median: float) -> Problem:
    likely = next(scale for limit, scale in _USUAL_SCALES if median <= limit)
    scaled = f" after its scale of {band.scale:g}" if band.scale != 1 else ""
    what = f"the median of {band.role!r} is {median:.4g}{scaled}, which is no reflectance (0 to 1)"
    fix = f"set 'scale' for it or under [scene]; {likely} times the present one is likely"
    return Problem(what, band.path, fix, "warning")
