"""A scene named by a STAC item (open standard for describing imagery), from a local file or over https."""

from __future__ import annotations

import json
import re
import urllib.parse
from collections.abc import Mapping, Sequence
from dataclasses import replace
from datetime import UTC, datetime
from pathlib import Path, PurePosixPath
from typing import Any

from classify.errors import DataError, Problem
from classify.raster.remote import fetch, read_local, resolve
from classify.raster.roles import holds, red_edge_role, role_in_name, role_of_word
from classify.raster.sensors import Sensor, load_sensor
from classify.settings import preset_names
from classify.settings.starter import BandDraft, MaskDraft, SceneDraft

_RASTER_TYPES = ("image/tiff", "image/jp2", "image/vnd.stac.geotiff", "application/x-geotiff")
_RASTER_ENDINGS = (".tif", ".tiff", ".jp2")
_LARGEST = 1e30
_NOT_BANDS = {"thumbnail", "overview", "visual", "metadata", "graphic"}

Json = Mapping[str, Any]


def looks_like_item(source: str) -> bool:
    """Whether a source is a JSON document rather than a folder or a raster."""
    if "://" in source:
        path = urllib.parse.urlsplit(source).path
        return source.startswith(("https:", "http:")) and not path.lower().endswith((*_RASTER_ENDINGS, ".vrt"))
    return Path(source).suffix.lower() in (".json", ".geojson")


def read_items(source: str) -> list[Json]:
    """The items of a document: itself, or those of a feature collection; none of any other JSON.

    Raises DataError when it cannot be reached or is no JSON.
    """
    content = _read(source)
    listed = _list(content.get("features")) if content.get("type") == "FeatureCollection" else [content]
    return [item for item in listed if _is_item(item)]


def read_item(source: str) -> Json:
    """The item. Raises DataError when it cannot be reached or is no STAC item."""
    item = _read(source)
    if not _is_item(item):
        kind = item.get("type")
        found = f"a STAC {kind}" if kind in ("Catalog", "Collection") else "some other JSON"
        raise DataError(f"a STAC item is expected, but this is {found}", where=source, fix="name one item of it")
    return item


def _read(source: str) -> Json:
    """A JSON object; empty if the document holds anything else."""
    raw = fetch(source) if "://" in source else read_local(Path(source))
    try:
        content = json.loads(raw)
    except (ValueError, RecursionError) as error:  # also bytes, numbers and depths that are not taken
        raise DataError(f"this is not valid JSON: {error}", where=source) from error
    return content if isinstance(content, dict) else {}


def _is_item(content: object) -> bool:
    return isinstance(content, dict) and content.get("type") == "Feature" and isinstance(content.get("assets"), dict)


def item_draft(item: Json, source: str) -> SceneDraft:
    """A draft of the scene that an item describes. Raises DataError when it names no bands, or forbidden addresses."""
    name = str(item.get("id", "scene"))
    sensor_name = _sensor_of(item)
    sensor = load_sensor(sensor_name) if sensor_name else None
    bands: dict[str, BandDraft] = {}
    finest: dict[str, float] = {}
    mask: MaskDraft | None = None
    for key, asset in item["assets"].items():
        if not _is_raster(asset):
            continue
        if sensor and sensor.mask and key.casefold() in {text.casefold() for text in sensor.mask.names}:
            mask = MaskDraft(resolve(asset["href"], source), reject=sensor.mask.reject)
            continue
        for found in _asset_bands(key, asset, sensor):
            size = _pixel_size(asset)
            if found.role not in bands or size < finest[found.role]:
                bands[found.role] = replace(found, file=resolve(asset["href"], source))
                finest[found.role] = size
    if not bands:
        raise DataError("this item names no asset that is a reflectance band", where=source, fix="name another item")
    if "nir" not in bands and "nir_narrow" in bands:
        bands["nir"] = replace(bands.pop("nir_narrow"), role="nir")  # the only near-infrared band, whatever its width
    notes = ["bands, scale and offset are those that the STAC item states"]
    notes.append(f"the sensor is {sensor.title}" if sensor else "no preset fits the item's platform")
    notes.append(
        "the item's mask is used with its preset's usual list" if mask else "the item has no mask that is known"
    )
    return SceneDraft(
        title=f"Land cover, {name}",
        sensor=sensor_name,
        bands=tuple(bands.values()),
        mask=mask,
        assumptions=tuple(notes),
    )


def item_files(item: Json, source: str, wanted: Mapping[str, str | None]) -> tuple[dict[str, str], list[Problem]]:
    """Where an item keeps files that are wanted by name, and why some are not to be had.

    wanted: file as written -> role, if it is the file of one band. An asset fits by its file's name, by its key, or as
    the only band of that role. It may lead into the item's own folder and to public addresses, nowhere else.
    """
    assets = {key: asset for key, asset in item["assets"].items() if isinstance(asset, dict)}
    sensor_name = _sensor_of(item)
    sensor = load_sensor(sensor_name) if sensor_name else None
    hrefs: dict[str, str] = {}
    for key, asset in sorted(assets.items(), key=lambda pair: _pixel_size(pair[1])):
        href = str(asset.get("href", ""))
        single = _is_raster(asset) and len(_band_tables(asset)) <= 1
        roles = [band.role for band in _asset_bands(key, asset, sensor)] if single else []
        for name in (PurePosixPath(href).name, key, *roles):
            hrefs.setdefault(name, href)
    files: dict[str, str] = {}
    problems: list[Problem] = []
    for written, role in wanted.items():
        path = Path(written)
        given = next((hrefs[name] for name in (path.name, role, path.stem) if name in hrefs), None)
        if given is None:
            problems.append(
                Problem(f"the item has no asset for {role or path.name}", source, f"it has: {', '.join(assets)}")
            )
            continue
        try:
            files[written] = resolve(given, source)
        except DataError as error:
            problems.extend(error.problems)
    return files, problems


def acquired(item: Json) -> datetime | None:
    """When the scene of an item was taken, with a time zone; None if it does not say."""
    properties = item.get("properties")
    if not isinstance(properties, dict):
        return None
    text = properties.get("datetime") or properties.get("start_datetime")
    try:
        when = datetime.fromisoformat(str(text).replace("Z", "+00:00"))
    except ValueError:
        return None
    return when if when.tzinfo else when.replace(tzinfo=UTC)


# --- what an item says ----------------------------------------------------------------------------------------------


def _sensor_of(item: Json) -> str | None:
    """The preset whose product rule fits the item's name or its files; the longer rule where two do."""
    hrefs = (asset.get("href", "") for asset in item["assets"].values() if isinstance(asset, dict))
    text = " ".join(map(str, (item.get("id", ""), *hrefs)))
    fitting = {}
    for name in preset_names("sensors"):
        rule = load_sensor(name).product
        if rule and re.search(rule, text):
            fitting[name] = rule
    return max(fitting, key=lambda name: len(fitting[name]), default=None)


def _is_raster(asset: object) -> bool:
    if not isinstance(asset, dict) or not isinstance(asset.get("href"), str):
        return False
    if _NOT_BANDS & {str(role) for role in _list(asset.get("roles"))}:
        return False
    kind = str(asset.get("type", "")).partition(";")[0].strip().casefold()
    path = urllib.parse.urlsplit(asset["href"]).path.lower()
    if path.endswith(".vrt"):
        return False  # it could lead on to files that the item may not name
    return kind in _RASTER_TYPES or (not kind and path.endswith(_RASTER_ENDINGS))


def _asset_bands(key: str, asset: Json, sensor: Sensor | None) -> list[BandDraft]:
    """Bands of an asset: by the item's band tables, else by the preset's names or the asset's own name."""
    tables = _band_tables(asset) or [{}]
    found = []
    for number, band in enumerate(tables, 1):
        role = _role(band, [key, PurePosixPath(asset["href"]).stem] if len(tables) == 1 else [], sensor)
        if role is None:
            continue
        micrometres = _number(_either(band, "eo:center_wavelength", "center_wavelength"))
        draft = BandDraft(
            role=role,
            file="",
            band=number,
            scale=_number(_either(band, "raster:scale", "scale", otherwise=asset.get("raster:scale"))),
            offset=_number(_either(band, "raster:offset", "offset", otherwise=asset.get("raster:offset"))),
            nodata=_number(_either(band, "nodata", otherwise=asset.get("nodata"))),
            wavelength_nm=round(1000 * micrometres, 3) if micrometres and micrometres > 0 else None,
            note=str(band.get("description") or asset.get("title") or ""),
        )
        found.append(draft)
    return found


def _band_tables(asset: Json) -> list[dict[str, Any]]:
    """Band tables of an asset, from `bands` (STAC 1.1) or from `eo:bands` and `raster:bands` side by side (before)."""
    lists = [_list(asset.get(name)) for name in ("bands", "eo:bands", "raster:bands")]
    length = max(len(one) for one in lists)
    tables: list[dict[str, Any]] = [{} for _ in range(length)]
    for one in lists:
        for table, given in zip(tables, one, strict=False):
            if isinstance(given, dict):
                table.update(given)
    return tables


def _role(band: Json, names: Sequence[str], sensor: Sensor | None) -> str | None:
    """Role by the preset's band names, else by the common name, else by words in the band's or the asset's names."""
    own = [text for text in (band.get("name"), *names) if isinstance(text, str)]
    for role, known in sensor.bands.items() if sensor else ():
        if any(holds(text, name) for name in known.names for text in own):
            return role if known.ground else None
    common = _either(band, "eo:common_name", "common_name")
    micrometres = _number(_either(band, "eo:center_wavelength", "center_wavelength"))
    if common == "rededge" and micrometres:
        return red_edge_role(1000 * micrometres)
    for text in [str(common)] if common else own:
        if word := role_of_word(text) or role_in_name(text):
            return word if word != "water_vapour" else None
    return None


def _pixel_size(asset: Json) -> float:
    sizes = [
        _number(table.get(name)) for table in (asset, *_band_tables(asset)) for name in ("gsd", "spatial_resolution")
    ]
    return min((size for size in sizes if size), default=float("inf"))


def _list(value: object) -> list[Any]:
    return value if isinstance(value, list) else []


def _either(table: Json, *names: str, otherwise: object = None) -> object:
    return next((table[name] for name in names if table.get(name) is not None), otherwise)


def _number(value: object) -> float | None:
    if isinstance(value, bool) or not isinstance(value, int | float):
        return float("nan") if value == "nan" else None
    return float(value) if abs(value) < _LARGEST else None
