"""Product folders as agencies deliver them: which sensor, which files are which bands, one date or several."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from classify.errors import DataError
from classify.raster.remote import read_local
from classify.raster.sensors import Sensor, load_sensor
from classify.settings import preset_names
from classify.settings.starter import BandDraft, MaskDraft, SceneDraft

# A preset is believed when at least this many of its bands are found by name.
_FEWEST_BANDS = 3


@dataclass(frozen=True, slots=True)
class _Match:
    """Files of one product that a preset explains. files: role -> file; named: its file names carry the product's."""

    name: str
    sensor: Sensor
    product: str
    files: dict[str, Path]
    mask: Path | None
    named: bool


def products_draft(files: Sequence[Path], folder: Path) -> SceneDraft | None:
    """A draft of the products that the files are, by the names that presets know; None if they are no product.

    Products of different dates become the dates of one scene, the earliest its main one. Raises DataError when there
    are several products that are not dates of one place.
    """
    matches = [match for name in preset_names("sensors") for match in _matches(name, files)]
    found = _best_by_product(matches)
    most = max((len(match.files) for match in found), default=0)
    chosen = [match for match in found if len(match.files) == most]
    if not chosen:
        return None
    notes = [f"left out, as it has fewer bands: {match.product}" for match in found if match not in chosen]
    if len(chosen) == 1:
        draft = _draft(chosen[0], folder)
        return replace(draft, assumptions=(*notes, *draft.assumptions))
    by_date = {_date_of(match.product): match for match in chosen}
    if None in by_date or len(by_date) < len(chosen):
        shown = ", ".join(sorted(match.product for match in chosen)[:6])
        raise DataError(
            f"this folder holds {len(chosen)} products that are not dates of one place: {shown}", where=str(folder),
            fix="name the folder of one; neighbouring tiles are first joined into one raster per band",
        )  # fmt: skip
    drafts = [replace(_draft(by_date[date], folder), date=date) for date in sorted(map(str, by_date))]
    notes.append(f"{len(drafts)} dates were found; the bands of [scene] are those of the earliest, {drafts[0].date}")
    main = replace(drafts[0], title=f"Land cover, {folder.name}", dates=tuple(drafts[1:]))
    return replace(main, assumptions=(*notes, *main.assumptions))


def _matches(name: str, files: Iterable[Path]) -> list[_Match]:
    """What a preset explains of the files, by product (date and tile)."""
    sensor = load_sensor(name)
    wanted = {text: (role, band.pixel_m) for role, band in sensor.bands.items() for text in band.names}
    masks = sensor.mask.names if sensor.mask else ()
    products: dict[str, dict[str, Path]] = {}
    for file in files:
        for text in (*wanted, *masks):
            if product := _product_of(file, text):
                role = wanted[text][0] if text in wanted else "mask"
                bands = products.setdefault(product, {})
                bands[role] = _finer(bands.get(role), file)
    matches = []
    for product, bands in products.items():
        mask = bands.pop("mask", None)
        # A mask whose name differs more from those of the bands makes a product of its own, without bands: no match.
        if len(bands) >= _FEWEST_BANDS:
            text = " ".join(str(file) for file in bands.values())
            named = bool(sensor.product and re.search(sensor.product, text))
            matches.append(_Match(name, sensor, product, bands, mask, named))
    return matches


def _product_of(file: Path, text: str) -> str | None:
    """The rest of a file name that holds `text` between separators, without a resolution such as _10m; None if not."""
    found = re.fullmatch(rf"(|.*[^A-Za-z0-9]){re.escape(text)}(|[^A-Za-z0-9].*)", file.stem, flags=re.IGNORECASE)
    if not found:
        return None
    rest = re.sub(r"[_-]\d+m$", "", found[1] + found[2]).strip("_-. ")
    return rest or f"{file.parent}"


def _finer(known: Path | None, file: Path) -> Path:
    """Of two files of one band, the one whose name states the smaller pixel (R10m, _20m); else the first."""
    if known is None:
        return file
    sizes = [re.findall(r"(?:_|R)(\d+)m(?=[_./\\]|$)", str(path)) for path in (known, file)]
    if not all(sizes):
        return known
    return file if int(sizes[1][-1]) < int(sizes[0][-1]) else known


def _best_by_product(matches: Iterable[_Match]) -> list[_Match]:
    """Of every product the match that fits best; only those that carry a product's name, if any does."""
    best: dict[str, _Match] = {}
    for match in matches:
        if match.product not in best or _fit(match) > _fit(best[match.product]):
            best[match.product] = match
    return [match for match in best.values() if match.named] or list(best.values())


def _fit(match: _Match) -> tuple[bool, int, int]:
    # Of two presets that fit alike, the narrower rule for names knows the product better; without a name that either
    # knows, the broader one is the likelier.
    narrow = len(match.sensor.product or "")
    return match.named, len(match.files), narrow if match.named else -narrow


def _date_of(product: str) -> str | None:
    """The first date in a product's name, as layers are called: 20240611 becomes 2024_06_11."""
    found = re.search(r"(?<!\d)((?:19|20)\d\d)(0[1-9]|1[0-2])([0-2]\d|3[01])(?!\d)", re.sub(r"T\d{6}", "", product))
    return "_".join(found.groups()) if found else None


def _draft(match: _Match, folder: Path) -> SceneDraft:
    notes = [f"the files are of {match.sensor.title}, by their names ({len(match.files)} bands found)"]
    if not match.named and match.sensor.product:
        notes.append("the sensor is a guess, as no file carries the name of the product: check 'sensor'")
    offset = None
    scaling = _stated_scaling(match, folder)
    if scaling is not None:
        offset = scaling
        notes.append(f"reflectance has the offset {scaling:g}, as the product's own metadata say")
    order = [role for role, band in match.sensor.bands.items() if role in match.files and band.ground]
    bands = tuple(BandDraft(role, str(match.files[role])) for role in order)
    if air := [role for role in match.files if role not in order]:
        notes.append(f"left out, as they show the air and not the ground: {', '.join(air)}")
    mask = None
    if match.mask and match.sensor.mask:
        mask = MaskDraft(str(match.mask), reject=match.sensor.mask.reject)
        notes.append("the product's own mask is used with its preset's usual list of what to reject")
    grid = min(order, key=lambda role: match.sensor.bands[role].pixel_m or np.inf)
    title = f"Land cover, {match.product if Path(match.product).name == match.product else folder.name}"
    return SceneDraft(
        title=title, sensor=match.name, grid="red" if _as_fine(match.sensor, "red", grid, order) else grid,
        offset=offset, bands=bands, mask=mask, assumptions=tuple(notes),
    )  # fmt: skip


def _as_fine(sensor: Sensor, role: str, finest: str, order: list[str]) -> bool:
    return role in order and sensor.bands[role].pixel_m == sensor.bands[finest].pixel_m


def _stated_scaling(match: _Match, folder: Path) -> float | None:
    """Reflectance offset in the metadata file of a Sentinel-2 product (added offset over quantification), if any.

    Read as text and not as XML: two numbers are wanted, and files from elsewhere may hold entities.
    """
    parents = [parent for parent in next(iter(match.files.values())).parents if parent.is_relative_to(folder)]
    for file in (parent / "MTD_MSIL2A.xml" for parent in parents):
        if not file.is_file():
            continue
        text = read_local(file).decode("utf-8", errors="replace")
        offsets = {float(value) for value in re.findall(r"<BOA_ADD_OFFSET[^>]*>\s*(-?\d{1,9})\s*<", text)}
        over = re.search(r"<BOA_QUANTIFICATION_VALUE[^>]*>\s*(\d{1,9})\s*<", text)
        if over and float(over[1]) and len(offsets) <= 1:
            return next(iter(offsets), 0.0) / float(over[1])
    return None
