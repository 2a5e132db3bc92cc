"""Find a scene: recognise a product folder, a folder of bands, a stack or a cube, and say what was assumed.

Nothing is written and nothing is decided for good: the result is a draft for the project file, whose every assumption
people can read and change.
"""

from __future__ import annotations

import os
from dataclasses import replace
from pathlib import Path

import numpy as np

from classify.errors import DataError
from classify.raster.grid import Window
from classify.raster.guard import is_remote
from classify.raster.products import products_draft
from classify.raster.roles import distinct, role_in_name, role_of_word, roles_of_wavelengths
from classify.raster.sensors import load_sensor
from classify.raster.sources import OpenFiles, RasterFacts, describe, read_window
from classify.raster.stac import item_draft, looks_like_item, read_item
from classify.settings.starter import BandDraft, SceneDraft

_RASTERS = {".tif", ".tiff", ".jp2", ".img", ".dat", ".bsq", ".bil", ".bip", ".vrt"}
_MOST_FILES = 20_000
_HEADERLESS = ("", ".img", ".dat", ".bsq", ".bil", ".bip", ".raw")


def discover(source: str) -> SceneDraft:
    """A draft of the scene in a folder, a raster file or a STAC item (local or https). Paths come out absolute.

    Raises DataError saying what was found when it is no scene, or more than one.
    """
    if looks_like_item(source):
        return _completed(item_draft(read_item(source), source))
    path = Path(source)
    if not is_remote(source) and not path.exists():
        raise DataError("there is no such file or folder", where=source, fix="check the path given with --scene")
    if not is_remote(source) and path.is_dir():
        return _completed(_from_folder(path.absolute()))
    if not is_remote(source) and path.suffix.lower() == ".hdr":
        path = _beside_header(path)
    return _completed(_from_stack(source if is_remote(source) else str(path.absolute())))


def relative_to(draft: SceneDraft, folder: Path) -> SceneDraft:
    """The same draft with files below `folder` written relative to it, so that the project can be moved as a whole."""
    base = folder.absolute()

    def shorter(file: str) -> str:
        if is_remote(file) or not Path(file).is_relative_to(base):
            return file if is_remote(file) else Path(file).as_posix()
        return Path(file).relative_to(base).as_posix()

    return replace(
        draft,
        bands=tuple(replace(band, file=shorter(band.file)) for band in draft.bands),
        mask=replace(draft.mask, file=shorter(draft.mask.file)) if draft.mask else None,
        dates=tuple(relative_to(date, folder) for date in draft.dates),
    )


# --- folders --------------------------------------------------------------------------------------------------------


def _from_folder(folder: Path) -> SceneDraft:
    files = _raster_files(folder)
    draft = products_draft(files, folder)
    if draft is not None:
        return draft
    if not files:
        raise DataError("no raster was found in this folder", where=str(folder), fix="name the product's own folder")
    facts = [described for file in files if (described := _described(file))]
    several = [f for f in facts if f.count > 1]
    if len(several) == 1 and len(facts) <= 3:
        return _from_stack(several[0].path)
    roles = {f.path: role_in_name(Path(f.path).stem) for f in facts if f.count == 1}
    known = {path: role for path, role in roles.items() if role}
    if known and len(set(known.values())) == len(known) and not several:
        return _from_band_files(folder, [f for f in facts if f.path in known], known)
    listed = ", ".join(str(file.relative_to(folder)) for file in files[:8]) + (" ..." if len(files) > 8 else "")
    raise DataError(
        f"the bands of one scene cannot be told from the file names: {listed}", where=str(folder),
        fix="name one stack with --scene FILE, or write the bands into [scene.bands] by hand",
    )  # fmt: skip


def _raster_files(folder: Path) -> list[Path]:
    found: list[Path] = []
    for parent, folders, names in os.walk(folder):
        folders[:] = sorted(name for name in folders if not name.startswith(".") and name != "outputs")
        found += [Path(parent, name) for name in sorted(names) if Path(name).suffix.lower() in _RASTERS]
        if len(found) > _MOST_FILES:
            what = "this folder holds too many rasters to be one scene"
            raise DataError(what, where=str(folder), fix="name the folder of one product")
    return [file for file in found if not file.name.startswith(".")]


def _from_band_files(folder: Path, facts: list[RasterFacts], roles: dict[str, str]) -> SceneDraft:
    bands = tuple(BandDraft(roles[f.path], f.path, wavelength_nm=f.wavelengths_nm[0]) for f in facts)
    notes = ("which band is which was read from the file names",)
    return SceneDraft(title=f"Land cover, {folder.name}", bands=bands, assumptions=notes)


# --- stacks and cubes -----------------------------------------------------------------------------------------------


def _from_stack(path: str) -> SceneDraft:
    facts = describe(path)
    usable = [k for k in range(facts.count) if facts.colours[k] != "alpha" and facts.good[k]]
    if not usable:
        raise DataError("this raster has no usable band", where=path, fix="check its list of bad bands")
    roles, note, sensor = _stack_roles(facts, usable)
    notes = [note]
    bad = facts.good.count(False)
    if bad:
        notes.append(f"{bad} of {facts.count} bands are left out, as the file's own list calls them bad")
    bands = tuple(
        BandDraft(role, path, k + 1, wavelength_nm=facts.wavelengths_nm[k], note=facts.descriptions[k])
        for role, k in zip(roles, usable, strict=True)
    )
    return SceneDraft(title=f"Land cover, {Path(path).stem}", sensor=sensor, bands=bands, assumptions=tuple(notes))


def _stack_roles(facts: RasterFacts, usable: list[int]) -> tuple[list[str], str, str | None]:
    """Roles of the usable bands, how they were found, and a preset that suits them."""
    wavelengths = [facts.wavelengths_nm[k] for k in usable]
    known = [w for w in wavelengths if w is not None]
    if len(known) == len(usable):
        return (
            roles_of_wavelengths(known),
            "roles follow the wavelengths in the file's metadata",
            "imaging-spectrometer",
        )
    words = [role_of_word(facts.descriptions[k]) for k in usable]
    how = "roles follow the bands' descriptions in the file"
    if not all(words):
        words = [role_of_word(facts.colours[k]) for k in usable]
        how = "roles follow the colours that the file gives its bands"
        if len(words) == 4 and words[:3] == ["red", "green", "blue"] and words[3] is None:
            words[3] = "nir"
            how = "the order of bands is red, green, blue as the file says, and the fourth is taken for near infrared"
    if not all(words):
        words, how = _usual_order(len(usable))
    roles = distinct([str(word) for word in words])
    fits = {"blue", "green", "red", "nir"}
    sensor = {4: "airborne-4-band", 5: "drone-5-band"}.get(len(roles)) if fits <= set(roles) else None
    if sensor and not set(roles) <= set(load_sensor(sensor).bands):
        sensor = None
    return roles, how, sensor


def _usual_order(count: int) -> tuple[list[str | None], str]:
    usual: dict[int, list[str | None]] = {
        3: ["red", "green", "blue"],
        4: ["blue", "green", "red", "nir"],
        5: ["blue", "green", "red", "red_edge_1", "nir"],
        6: ["blue", "green", "red", "nir", "swir_1", "swir_2"],
    }
    if count in usual:
        named = ", ".join(str(role) for role in usual[count])
        return usual[count], f"the file does not say which band is which: the order {named} is a guess, check it first"
    numbered: list[str | None] = [f"band_{k}" for k in range(1, count + 1)]
    return numbered, "the file does not say which band is which: give the bands their roles (red, nir ...) by hand"


def _beside_header(header: Path) -> Path:
    for suffix in _HEADERLESS:
        if (data := header.with_suffix(suffix)).is_file():
            return data
    raise DataError("the data file of this header is missing", where=str(header), fix="put it beside the header")


def _described(file: Path) -> RasterFacts | None:
    """Facts of a file, or None for a picture without a place on earth (a preview) or a broken one."""
    try:
        return describe(str(file))
    except DataError:
        return None


# --- what files leave open ------------------------------------------------------------------------------------------


def _completed(draft: SceneDraft) -> SceneDraft:
    """The draft with a guess of the scale, where neither files nor preset nor item state one."""
    sensor = load_sensor(draft.sensor) if draft.sensor else None
    stated = draft.scale is not None or any(band.scale is not None for band in draft.bands)
    if stated or (sensor and sensor.scale is not None):
        return draft
    facts = describe(draft.bands[0].file)
    if facts.scales[draft.bands[0].band - 1] != 1:
        return draft
    scale, why = _guessed_scale(draft.bands[0], facts)
    if scale is None:
        return draft
    return replace(draft, scale=scale, assumptions=(*draft.assumptions, why))


def _guessed_scale(band: BandDraft, facts: RasterFacts) -> tuple[float | None, str]:
    """A scale that brings the values in the middle of the scene to the range of reflectance, and why."""
    if facts.dtypes[band.band - 1] == "uint8":
        return 1 / 255, "values of eight bits are brightness, scaled to 0 to 1: they are no calibrated reflectance"
    grid, side = facts.native, 512
    row, col = max((grid.height - side) // 2, 0), max((grid.width - side) // 2, 0)
    part = Window(row, col, side, side).intersect(grid.window)
    assert part is not None, grid
    opened = OpenFiles()
    try:
        values = read_window(opened.get(band.file), band.file, [band.band], part)[0].astype(np.float64)
    finally:
        opened.close()
    nodata = facts.nodata[band.band - 1]
    values = values[np.isfinite(values) & (values > 0) & (values != (nodata if nodata is not None else 0))]
    median = float(np.median(values)) if values.size else 0.0
    for most, scale in ((2.0, None), (100.0, 0.01), (10_000.0, 1e-4), (np.inf, 1 / 65535)):
        if median <= most:
            return scale, f"no scale is stated: values near {median:.4g} suggest {scale:g}, check it" if scale else ""
    raise AssertionError(median)
