"""A new project file: complete, commented, and saying what was assumed of the scene."""

from __future__ import annotations

import json
import math
from dataclasses import dataclass
from pathlib import Path
from string import Template

from classify.errors import OutputError
from classify.files import write_text
from classify.settings.presets import configs_folder
from classify.text import plain

# Indices worth starting with, where the scene has their bands: all of them are in the index catalogue.
_FIRST_INDICES = {"ndvi": {"red", "nir"}, "ndti": {"swir_1", "swir_2"}}


@dataclass(frozen=True, slots=True)
class BandDraft:
    """One band as found: role, file and band number, what the file or item says of it, and a note for people."""

    role: str
    file: str
    band: int = 1
    scale: float | None = None
    offset: float | None = None
    nodata: float | None = None
    wavelength_nm: float | None = None
    note: str = ""


@dataclass(frozen=True, slots=True)
class MaskDraft:
    """The mask as found. reject: meanings of the sensor's preset that are rejected."""

    file: str
    band: int = 1
    reject: tuple[str, ...] = ()
    note: str = ""


@dataclass(frozen=True, slots=True)
class SceneDraft:
    """What was found of a scene. assumptions: one sentence each, for people to check.

    date: its name where there are several. dates: further dates of the same place.
    """

    title: str
    bands: tuple[BandDraft, ...]
    sensor: str | None = None
    grid: str | None = None
    scale: float | None = None
    offset: float | None = None
    nodata: float | None = None
    mask: MaskDraft | None = None
    assumptions: tuple[str, ...] = ()
    date: str | None = None
    dates: tuple[SceneDraft, ...] = ()


# Stands for a scene that is still to be named.
PLACEHOLDER = SceneDraft(
    title="Land cover",
    sensor="sentinel-2-l2a",
    grid="red",
    bands=(
        BandDraft("blue", "scene/B02.tif"), BandDraft("green", "scene/B03.tif"), BandDraft("red", "scene/B04.tif"),
        BandDraft("nir", "scene/B08.tif"), BandDraft("swir_1", "scene/B11.tif"), BandDraft("swir_2", "scene/B12.tif"),
    ),
    mask=MaskDraft("scene/SCL.tif", reject=("no data", "cloud shadow", "cloud", "cirrus")),
    assumptions=("Nothing was read: replace the bands by your own, or start with 'landassay new --scene FOLDER'.",),
)  # fmt: skip


def project_text(draft: SceneDraft = PLACEHOLDER, *, seed: int = 1) -> str:
    """The text of a project file for a scene, ready to be edited."""
    template = Template((configs_folder() / "templates" / "project.toml.txt").read_text(encoding="utf-8"))
    roles = {band.role for band in draft.bands}
    indices = [name for name, needed in _FIRST_INDICES.items() if needed <= roles]
    return template.substitute(
        title=_toml(plain(draft.title)),
        seed=seed,
        scene=_scene_text(draft),
        indices="[" + ", ".join(map(_toml, indices)) + "]",
    )


def start_project(folder: Path, draft: SceneDraft = PLACEHOLDER, *, seed: int = 1) -> Path:
    """Write project.toml into `folder` (made if need be) and return its path. Raises OutputError if there is one."""
    target = folder / "project.toml"
    if target.exists() or target.is_symlink():
        raise OutputError(
            "there is a project file already, and it is left as it is", where=str(target),
            fix="name another folder, or move the file away first",
        )  # fmt: skip
    write_text(target, project_text(draft, seed=seed))
    return target


def _scene_text(draft: SceneDraft) -> str:
    lines = [*(f"# Assumed: {_one_line(text)}" for text in draft.assumptions), "", "[scene]"]
    if draft.sensor:
        lines.append(f"sensor = {_toml(draft.sensor)}  # preset: wavelengths, scale, no data and what the mask means")
    if draft.grid:
        lines.append(f"grid = {_toml(draft.grid)}  # the band, or the pixel size, whose grid the map uses")
    if draft.date:
        lines.append(f"date = {_toml(draft.date)}")
    lines += _scaling(draft)
    if draft.scale is None and not draft.sensor:
        lines.append("# scale = 0.0001  # reflectance = stored * scale + offset, where files do not say it themselves")
    lines += ["", "[scene.bands]", *_bands(draft), "", *_mask(draft, "scene.mask")]
    if not draft.mask:
        lines += ["# [scene.mask]", '# file = "scene/mask.tif"', "# reject = [1, 2]  # codes, or bits = { cloud = 3 }"]
    lines += ["", "# Other rasters, such as elevation: features by name, never masked.", "# [scene.ancillary]"]
    lines += ['# elevation = "elevation.tif"', '# geology = { file = "geology.tif", categorical = true }']
    for date in draft.dates:
        sensor = [f"sensor = {_toml(date.sensor)}"] if date.sensor else []
        lines += ["", "[[scene.dates]]  # its layers are called role@name", f"name = {_toml(str(date.date))}", *sensor]
        lines += [*_scaling(date), "", "[scene.dates.bands]", *_bands(date), "", *_mask(date, "scene.dates.mask")]
    if draft.dates:
        lines += [
            "",
            "# One value per band out of the dates that are clear; single dates stay within reach as role@name.",
        ]
        lines += ["# [scene.composite]", '# method = "median"']
    return "\n".join([*lines, ""])


def _scaling(draft: SceneDraft) -> list[str]:
    given = ((key, getattr(draft, key)) for key in ("scale", "offset", "nodata"))
    return [f"{key} = {_toml(value)}" for key, value in given if value is not None]


def _bands(draft: SceneDraft) -> list[str]:
    width = max(len(band.role) for band in draft.bands)
    return [f"{band.role:<{width}} = {_band_value(band)}{_note(band.note)}" for band in draft.bands]


def _mask(draft: SceneDraft, table: str) -> list[str]:
    mask = draft.mask
    if mask is None:
        return []
    number = [f"band = {mask.band}"] if mask.band != 1 else []
    listed = ", ".join(map(_toml, mask.reject))
    reject = [f"reject = [{listed}]  # meanings of the preset, or codes"] if mask.reject else []
    return [f"[{table}]", f"file = {_toml(mask.file)}{_note(mask.note)}", *number, *reject]


def _band_value(band: BandDraft) -> str:
    keys = {key: getattr(band, key) for key in ("scale", "offset", "nodata", "wavelength_nm")}
    given = {key: value for key, value in keys.items() if value is not None}
    if band.band == 1 and not given:
        return _toml(band.file)
    number = [f"band = {band.band}"] if band.band != 1 else []
    parts = [f"file = {_toml(band.file)}", *number, *(f"{key} = {_toml(value)}" for key, value in given.items())]
    return "{ " + ", ".join(parts) + " }"


def _note(text: str) -> str:
    return f"  # {_one_line(text)}" if text else ""


def _one_line(text: str) -> str:
    """Text for a comment: names come from other people's files, and a line end among them would become a setting."""
    return " ".join("".join(c if c.isprintable() else " " for c in text).split())


def _toml(value: str | float) -> str:
    """A TOML value. JSON's strings are TOML's, but for one control character that TOML wants escaped."""
    if isinstance(value, str):
        whole = value.encode("utf-8", "replace").decode("utf-8")  # a lone surrogate has no place in a file
        return json.dumps(whole, ensure_ascii=False).replace("\x7f", "\\u007f")
    if math.isnan(value):
        return "nan"
    return f"{value:g}" if float(f"{value:g}") == value else repr(value)
