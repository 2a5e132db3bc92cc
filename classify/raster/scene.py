"""Open a scene: look at every file once, fill in what the project leaves open, and refuse or warn before work starts.

Where a value comes from, first known wins. Scale and offset: the band's keys in the project file, [scene], the file's
own metadata, the sensor's preset, 1 and 0. No data: the band's keys, [scene], the file, the preset, none. Wavelength:
the band's keys, the preset.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from classify.errors import DataError, LandassayError, Problem, SettingsError, raise_if_errors
from classify.raster.area import ground_areas_m2
from classify.raster.grid import Grid, Window
from classify.raster.masks import MaskSource
from classify.raster.reader import Scene, SceneReader
from classify.raster.resample import Placement
from classify.raster.sensors import Sensor, SensorBand, load_sensor, mask_fields
from classify.raster.sources import BandSource, OpenFiles, RasterFacts, describe, read_window
from classify.settings import BandSettings, Project, SceneSettings

__all__ = ["BandSource", "Scene", "SceneReader", "open_scene"]

# Windows on a lattice of this many per side, this large, stand for the whole scene in checks of its values.
_SAMPLES_PER_SIDE = 4
_SAMPLE_PX = 64
_UNSCALED_MEDIAN = 2.0


def open_scene(settings: SceneSettings, project: Project) -> Scene:
    """The scene of a project file, checked. Raises DataError or SettingsError listing every problem found."""
    sensor = load_sensor(settings.sensor) if settings.sensor else None
    files = _Files()
    bands: list[BandSource] = []
    problems: list[Problem] = []
    for role, band in settings.bands.items():
        try:
            facts = files.facts(project.path(band.file))
            bands.append(_band_source(role, band, facts, settings, sensor))
        except LandassayError as error:
            problems += [_at(problem, f"scene.bands.{role}") for problem in error.problems]
    mask = None
    if settings.mask:
        try:
            mask = _mask_source(settings, project, files, sensor)
        except SettingsError as error:
            problems += [_at(problem, project.file.name) for problem in error.problems]
        except DataError as error:
            problems += [_at(problem, "scene.mask") for problem in error.problems]
    raise_if_errors(problems, DataError)
    grid = _choose_grid(settings, bands)
    ground_areas_m2(grid, Window(0, 0, 1, 1))  # refuses a CRS that is not tied to the earth
    for source in bands:
        problems += _placement_problems(source.native, grid, repr(source.role), source.path)
    if mask:
        problems += _placement_problems(mask.native, grid, "the mask", mask.path)
    problems += files.probe()
    raise_if_errors(problems, DataError)
    scene = Scene(grid, tuple(bands), mask, (), settings.resampling)
    return Scene(grid, scene.bands, mask, (*problems, *_value_warnings(scene)), settings.resampling)


class _Files:
    """Facts of files, each looked at once however many bands it holds."""

    def __init__(self) -> None:
        self._facts: dict[str, RasterFacts | DataError] = {}

    def facts(self, path: str) -> RasterFacts:
        if path not in self._facts:
            try:
                self._facts[path] = describe(path)
            except DataError as error:
                self._facts[path] = error
        found = self._facts[path]
        if isinstance(found, DataError):
            raise found
        return found

    def probe(self) -> list[Problem]:
        """Read the last row of every file: a file cut off in copying opens well and fails only there."""
        problems: list[Problem] = []
        opened = OpenFiles()
        for path, facts in self._facts.items():
            if isinstance(facts, DataError):
                continue
            last = Window(facts.native.height - 1, 0, 1, facts.native.width)
            try:
                read_window(opened.get(path), path, list(range(1, facts.count + 1)), last)
            except DataError as error:
                problems += error.problems
        opened.close()
        return problems


def _at(problem: Problem, key: str) -> Problem:
    where = f"{key} ({problem.where})" if problem.where else key
    return Problem(problem.what, where, problem.fix, problem.severity)


def _band_source(
    role: str, band: BandSettings, facts: RasterFacts, settings: SceneSettings, sensor: Sensor | None
) -> BandSource:
    _refuse_missing_band(band.band, facts)
    index = band.band - 1
    if facts.dtypes[index].startswith("complex"):
        raise DataError("this band holds complex numbers", where=facts.path, fix="convert it to reflectance")
    of_all = sensor or Sensor(title="", source="")
    preset = of_all.bands.get(role, SensorBand())
    said = (facts.scales[index], facts.offsets[index])
    file_scale, file_offset = said if said != (1.0, 0.0) else (None, None)
    return BandSource(
        role=role,
        path=facts.path,
        band=band.band,
        scale=_first(band.scale, settings.scale, file_scale, preset.scale, of_all.scale, 1.0),
        offset=_first(band.offset, settings.offset, file_offset, preset.offset, of_all.offset, 0.0),
        nodata=_first(band.nodata, settings.nodata, facts.nodata[index], preset.nodata, of_all.nodata, None),
        wavelength_nm=_first(band.wavelength_nm, preset.wavelength_nm, None),
        native=facts.native,
        flagged=facts.flagged[index],
    )


def _first(*values_then_default: float | None) -> Any:  # noqa: ANN401 - None only where the last value is
    """The first value that is known, or the last one, which may be None."""
    return next((value for value in values_then_default if value is not None), None)


def _refuse_missing_band(number: int, facts: RasterFacts) -> None:
    if number > facts.count:
        bands = "1 band" if facts.count == 1 else f"{facts.count} bands"
        raise DataError(f"band {number} is asked for, but the file has {bands}", where=facts.path, fix="correct 'band'")


def _mask_source(settings: SceneSettings, project: Project, files: _Files, sensor: Sensor | None) -> MaskSource:
    assert settings.mask is not None
    fields = mask_fields(settings.mask, sensor)
    facts = files.facts(project.path(settings.mask.file))
    _refuse_missing_band(settings.mask.band, facts)
    dtype = np.dtype(facts.dtypes[settings.mask.band - 1])
    if dtype.kind not in "iu":
        raise DataError(
            f"a mask holds whole numbers, but this file holds {dtype}", where=facts.path, fix="name the mask's own file"
        )
    too_high = [f.first for f in fields if f.width is not None and f.first + f.width > 8 * dtype.itemsize]
    if too_high:
        raise DataError(
            f"bit {too_high[0]} is asked for, but the mask has {8 * dtype.itemsize} bits", where=facts.path,
            fix="count bits from 0, the lowest",
        )  # fmt: skip
    return MaskSource(facts.path, settings.mask.band, facts.native, fields)


def _choose_grid(settings: SceneSettings, bands: Sequence[BandSource]) -> Grid:
    """The grid of the named band; or of pixels of the given size over the first band; or of the finest band."""
    if isinstance(settings.grid, str):
        return next(band.native for band in bands if band.role == settings.grid)
    if settings.grid is None:
        # Pixels of one size differ a little on the ground from place to place; among equals the first band counts.
        finest_m2 = min(_pixel_m2(band.native) for band in bands)
        return next(band.native for band in bands if _pixel_m2(band.native) <= 1.02 * finest_m2)
    size, first = float(settings.grid), bands[0].native
    for band in bands:
        t = band.native.transform
        if band.native.crs == first.crs and np.allclose([np.hypot(t.a, t.d), np.hypot(t.b, t.e)], size, rtol=1e-6):
            return band.native
    t = first.transform
    across, down = size / np.hypot(t.a, t.d), size / np.hypot(t.b, t.e)
    height, width = int(np.ceil(first.height / down - 1e-6)), int(np.ceil(first.width / across - 1e-6))
    return Grid(first.crs, t @ t.scale(across, down), height, width)


def _pixel_m2(grid: Grid) -> float:
    area = float(ground_areas_m2(grid, Window(grid.height // 2, grid.width // 2, 1, 1))[0, 0])
    return area if area > 0 else np.inf


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


def _placement_problems(native: Grid, grid: Grid, name: str, path: str) -> list[Problem]:
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


def _value_warnings(scene: Scene) -> list[Problem]:
    """Warnings from the values themselves, looked at in windows spread over the scene."""
    windows = _sample_windows(scene.grid)
    with Scene(scene.grid, scene.bands, None, (), "nearest").open() as reader:
        samples = [reader.read(window) for window in windows]
    problems = []
    for band in scene.bands:
        values = np.concatenate([sample[band.role].ravel() for sample in samples])
        values = values[np.isfinite(values)]
        if values.size and (median := float(np.median(values))) > _UNSCALED_MEDIAN:
            problems.append(_unscaled(band, median))
    if scene.mask:
        with scene.open() as reader:
            all_rejected = all(reader.rejected(window).all() for window in windows)
        if all_rejected:
            what, fix = "the mask rejects every pixel looked at", "check the codes or bits that it rejects"
            problems.append(Problem(what, scene.mask.path, fix, "warning"))
    return problems


def _sample_windows(grid: Grid) -> list[Window]:
    rows, cols = (
        np.unique(np.linspace(0, max(size - _SAMPLE_PX, 0), _SAMPLES_PER_SIDE).astype(int)) for size in grid.shape_yx
    )
    cut = (Window(int(row), int(col), _SAMPLE_PX, _SAMPLE_PX).intersect(grid.window) for row in rows for col in cols)
    return [window for window in cut if window is not None]


# The usual ways to store reflectance, by the largest median that each leaves plausible: percent, eight-bit
# brightness, ten-thousandths, and the full range of sixteen bits.
_USUAL_SCALES = ((100, "0.01"), (255, "0.00392157 (1/255)"), (10_000, "0.0001"), (np.inf, "0.0000152590 (1/65535)"))


def _unscaled(band: BandSource, median: float) -> Problem:
    likely = next(scale for limit, scale in _USUAL_SCALES if median <= limit)
    scaled = f" after its scale of {band.scale:g}" if band.scale != 1 else ""
    what = f"the median of {band.role!r} is {median:.4g}{scaled}, which is no reflectance (0 to 1)"
    fix = f"set 'scale' under [scene] or in scene.bands.{band.role}; {likely} times the present one is likely"
    return Problem(what, band.path, fix, "warning")
