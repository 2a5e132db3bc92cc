"""Open a scene: look at every file once, fill in what the project leaves open, and refuse or warn before work starts.

Where a value comes from, first known wins. Scale and offset: the band's keys in the project file, [scene], the file's
own metadata, the sensor's preset, 1 and 0. No data: the band's keys, [scene], the file, the preset, none. Wavelength:
the band's keys, the file, the preset.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from classify.errors import DataError, Problem, SettingsError, raise_if_errors
from classify.raster.area import ground_areas_m2
from classify.raster.checks import placement_problems, value_warnings
from classify.raster.composite import Composite
from classify.raster.grid import Grid, Window
from classify.raster.masks import MaskSource
from classify.raster.reader import Scene, SceneReader
from classify.raster.sensors import NO_SENSOR, Sensor, SensorBand, load_sensor, mask_fields
from classify.raster.sources import BandSource, OpenFiles, RasterFacts, describe, read_window
from classify.settings import AncillarySettings, BandSettings, DateSettings, MaskSettings, Project, SceneSettings

__all__ = ["BandSource", "Scene", "SceneReader", "open_scene"]


def open_scene(settings: SceneSettings, project: Project) -> Scene:
    """The scene of a project file, checked. Raises DataError or SettingsError listing every problem found."""
    opening = _Opening(project, settings)
    opening.acquisition(settings, settings.date, "scene")
    for number, date in enumerate(settings.dates, 1):
        opening.acquisition(date, date.name, f"scene.dates[{number}]")
    opening.ancillary()
    raise_if_errors(opening.problems, DataError)
    grid = _choose_grid(settings, opening.bands)
    ground_areas_m2(grid, Window(0, 0, 1, 1))  # refuses a CRS that is not tied to the earth
    problems = list(dict.fromkeys(opening.problems))  # what holds for all bands is said once
    for source in opening.bands:
        problems += placement_problems(source.native, grid, repr(source.role), source.path)
    for mask in opening.masks.values():
        problems += placement_problems(mask.native, grid, "the mask", mask.path)
    problems += opening.files.probe()
    raise_if_errors(problems, DataError)
    scene = Scene(grid, tuple(opening.bands), opening.masks, (), settings.resampling, _composite(settings))
    return replace(scene, warnings=(*problems, *value_warnings(scene)))


def _composite(settings: SceneSettings) -> Composite | None:
    chosen = settings.composite
    if chosen is None:
        return None
    assert settings.date is not None, "settings are validated"
    dates = (settings.date, *(date.name for date in settings.dates))
    return Composite(tuple(settings.bands), dates, chosen.method, chosen.of, chosen.minimum_clear)


class _Opening:
    """Sources gathered so far, and every problem met on the way."""

    def __init__(self, project: Project, settings: SceneSettings) -> None:
        self.project, self.settings, self.files = project, settings, _Files()
        self.bands: list[BandSource] = []
        self.masks: dict[str, MaskSource] = {}
        self.problems: list[Problem] = []

    def acquisition(self, one: SceneSettings | DateSettings, date: str | None, key: str) -> None:
        """Add the bands and the mask of one date. Layers get its name unless they are of a single main date."""
        rules = _Rules()
        with self._collecting(f"{key}.sensor"):
            rules = _Rules.of(one, self.settings)
        suffix = "" if one is self.settings and self.settings.composite is None else f"@{date}"
        for role, band in one.bands.items():
            with self._collecting(f"{key}.bands.{role}"):
                facts = self._facts(band)
                source = _band_source(role, band, facts, rules)
                self.bands.append(replace(source, role=role + suffix, date=date or ""))
                self.problems += rules.other_scaling(band, facts, f"{self.project.file.name}: {key}")
            self.problems += rules.unknown_role(role, f"{self.project.file.name}: {key}.bands.{role}")
        if one.mask:
            with self._collecting(f"{key}.mask"):
                self.masks[date or ""] = _mask_source(one.mask, self._facts(one.mask), rules)

    def ancillary(self) -> None:
        """Add the rasters that are no bands; nothing of the sensor or of [scene] holds for them."""
        for name, raster in self.settings.ancillary.items():
            with self._collecting(f"scene.ancillary.{name}"):
                band = BandSettings.model_validate(raster.model_dump(exclude={"categorical"}))
                source = _band_source(name, band, self._facts(raster), _Rules())
                self.bands.append(replace(source, date=None, categorical=raster.categorical))

    def _facts(self, part: BandSettings | AncillarySettings | MaskSettings) -> RasterFacts:
        facts = self.files.facts(self.project.path(part.file))
        if part.band > facts.count:
            bands = "1 band" if facts.count == 1 else f"{facts.count} bands"
            what = f"band {part.band} is asked for, but the file has {bands}"
            raise DataError(what, where=facts.path, fix="correct 'band'; bands are counted from 1")
        return facts

    @contextmanager
    def _collecting(self, key: str) -> Iterator[None]:
        try:
            yield
        except (DataError, SettingsError) as error:
            for problem in error.problems:
                where = f"{key} ({problem.where})" if problem.where else key
                self.problems.append(replace(problem, where=f"{self.project.file.name}: {where}"))


@dataclass(frozen=True, slots=True)
class _Rules:
    """What holds for all bands of a date unless they or their files say otherwise."""

    sensor: Sensor = NO_SENSOR
    name: str | None = None
    scale: float | None = None
    offset: float | None = None
    nodata: float | None = None

    @classmethod
    def of(cls, one: SceneSettings | DateSettings, main: SceneSettings) -> _Rules:
        """A date without a sensor of its own takes from [scene] what it does not say."""
        given = {key: getattr(one, key) for key in ("scale", "offset", "nodata")}
        if one.sensor is None:
            given = {key: getattr(main, key) if value is None else value for key, value in given.items()}
        name = one.sensor or main.sensor
        return cls(load_sensor(name) if name else NO_SENSOR, name, **given)

    def other_scaling(self, band: BandSettings, facts: RasterFacts, where: str) -> list[Problem]:
        """A warning when the file states another scale or offset than the preset and the project does not decide."""
        said = (facts.scales[band.band - 1], facts.offsets[band.band - 1])
        preset = (self.sensor.scale, self.sensor.offset)
        decided = {band.scale, band.offset, self.scale, self.offset} != {None}
        if decided or None in preset or said == (1.0, 0.0) or np.allclose(said, np.array(preset, float), rtol=1e-6):
            return []
        what = f"files state scale {said[0]:g} and offset {said[1]:g}, the preset {preset[0]:g} and {preset[1]:g}"
        return [Problem(what, where, "the files are believed; if they are wrong, set both under [scene]", "warning")]

    def unknown_role(self, role: str, where: str) -> list[Problem]:
        """A warning when the preset has bands, but none of this role."""
        if not self.sensor.bands or role in self.sensor.bands:
            return []
        close = difflib.get_close_matches(role, self.sensor.bands, n=1)
        fix = f"did you mean {close[0]!r}?" if close else f"it has: {', '.join(self.sensor.bands)}"
        return [
            Problem(
                f"the preset {self.name!r} has no band {role!r}, so its wavelength is unknown", where, fix, "warning"
            )
        ]


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


def _band_source(role: str, band: BandSettings, facts: RasterFacts, rules: _Rules) -> BandSource:
    index = band.band - 1
    if facts.dtypes[index].startswith("complex"):
        raise DataError("this band holds complex numbers", where=facts.path, fix="convert it to reflectance")
    sensor, preset = rules.sensor, rules.sensor.bands.get(role, SensorBand())
    said = (facts.scales[index], facts.offsets[index])
    file_scale, file_offset = said if said != (1.0, 0.0) else (None, None)
    return BandSource(
        role=role,
        path=facts.path,
        band=band.band,
        scale=_first(band.scale, rules.scale, file_scale, preset.scale, sensor.scale, 1.0),
        offset=_first(band.offset, rules.offset, file_offset, preset.offset, sensor.offset, 0.0),
        nodata=_first(band.nodata, rules.nodata, facts.nodata[index], preset.nodata, sensor.nodata, None),
        wavelength_nm=_first(band.wavelength_nm, facts.wavelengths_nm[index], preset.wavelength_nm, None),
        native=facts.native,
        flagged=facts.flagged[index],
    )


def _first(*values_then_default: float | None) -> Any:  # noqa: ANN401 - None only where the last value is
    """The first value that is known, or the last one, which may be None."""
    return next((value for value in values_then_default if value is not None), None)


def _mask_source(mask: MaskSettings, facts: RasterFacts, rules: _Rules) -> MaskSource:
    fields = mask_fields(mask, rules.sensor.mask)
    dtype = np.dtype(facts.dtypes[mask.band - 1])
    if dtype.kind not in "iu":
        what = f"a mask holds whole numbers, but this file holds {dtype}"
        raise DataError(what, where=facts.path, fix="name the mask's own file")
    size = 8 * dtype.itemsize
    if too_high := [field.first for field in fields if field.width is not None and field.first + field.width > size]:
        what = f"bit {too_high[0]} is asked for, but the mask has {size} bits"
        raise DataError(what, where=facts.path, fix="count bits from 0, the lowest")
    return MaskSource(facts.path, mask.band, facts.native, fields, mask.buffer_m)


def _choose_grid(settings: SceneSettings, bands: Sequence[BandSource]) -> Grid:
    """The grid of the named band; or of pixels of the given size over the first band; or of the finest band."""
    if isinstance(settings.grid, str):
        names = (settings.grid, f"{settings.grid}@{settings.date}")
        return next(band.native for band in bands if band.role in names)
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
