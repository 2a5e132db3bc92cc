"""A map as a STAC item with the classification and projection extensions, and many as a collection (STAC 1.1)."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from rasterio.warp import transform_bounds, transform_geom
from shapely.geometry import box, mapping

from classify.files import read_json, write_json
from classify.mapping.blocks import NO_CLASS
from classify.raster.grid import Grid
from classify.settings import ClassSettings

_EXTENSIONS = (
    "https://stac-extensions.github.io/projection/v2.0.0/schema.json",
    "https://stac-extensions.github.io/classification/v2.0.0/schema.json",
)
_COG = "image/tiff; application=geotiff; profile=cloud-optimized"
_KINDS = {".tif": _COG, ".gpkg": "application/geopackage+sqlite3", ".csv": "text/csv"}
_TITLES = {
    "cover": "Class map", "raw": "Class map before it was tidied", "confidence": "Confidence, percent",
    "reach": "Distance from the training data, percent of the threshold", "polygons": "Class map as polygons",
    "areas": "Areas by class",
}  # fmt: skip


@dataclass(frozen=True, slots=True)
class ItemFacts:
    """name: identifier, from `identifier`. title: for people. when: of the scene, with a time zone. source: what `when`
    rests on. properties: further ones.
    """

    name: str
    title: str
    when: datetime
    source: str
    properties: Mapping[str, Any]


def identifier(text: str) -> str:
    """`text` with anything but letters, digits, dot, hyphen and underscore replaced; never empty."""
    return re.sub(r"[^A-Za-z0-9._-]+", "-", text).strip("-.") or "map"


def write_item(
    path: Path, facts: ItemFacts, grid: Grid, files: Mapping[str, Path], classes: Sequence[ClassSettings]
) -> dict[str, Any]:
    """Write the item of a map whose files lie beside it, and return it. Raises OutputError."""
    assets: dict[str, dict[str, Any]] = {}
    for key, file in files.items():
        assets[key] = {
            "href": f"./{file.name}", "type": _KINDS[file.suffix], "title": _TITLES[key],
            "roles": ["metadata"] if file.suffix == ".csv" else ["data"],
        }  # fmt: skip
        if key in {"cover", "raw"}:
            assets[key]["classification:classes"] = _classes(classes)
    footprint = transform_geom(
        grid.crs, "EPSG:4326", mapping(box(*grid.bounds).segmentize(max(_side(grid) / 20, 1e-9)))
    )
    item = {
        "type": "Feature",
        "stac_version": "1.1.0",
        "stac_extensions": list(_EXTENSIONS),
        "id": facts.name,
        "geometry": footprint,
        "bbox": list(transform_bounds(grid.crs, "EPSG:4326", *grid.bounds)),
        "properties": {
            "title": facts.title, "datetime": _text(facts.when), "datetime_source": facts.source, **_placing(grid),
            **facts.properties,
        },
        "links": [],
        "assets": assets,
    }  # fmt: skip
    write_json(path, item)
    return item


def rename_item(path: Path, name: str, title: str) -> bool:
    """Give an item that is there another name and title; whether it had others. Raises DataError, OutputError."""
    item = read_json(path)
    properties = item.get("properties", {})
    if (item.get("id"), properties.get("title")) == (name, title):
        return False
    write_json(path, {**item, "id": name, "properties": {**properties, "title": title}})
    return True


def write_collection(path: Path, name: str, description: str, items: Mapping[str, Mapping[str, Any]]) -> None:
    """Write the collection of items by path relative to it; at least one. Raises OutputError."""
    boxes = [item["bbox"] for item in items.values()]
    west, south, east, north = zip(*boxes, strict=True)
    times = sorted(item["properties"]["datetime"] for item in items.values())
    write_json(path, {
        "type": "Collection",
        "stac_version": "1.1.0",
        "id": name,
        "description": description,
        "license": "other",
        "extent": {
            "spatial": {"bbox": [[min(west), min(south), max(east), max(north)]]},
            "temporal": {"interval": [[times[0], times[-1]]]},
        },
        "links": [{"rel": "item", "href": f"./{href}", "type": "application/geo+json"} for href in items],
    })  # fmt: skip


def _classes(classes: Sequence[ClassSettings]) -> list[dict[str, Any]]:
    rows: list[dict[str, Any]] = [{"value": NO_CLASS, "name": "no-data", "title": "No data", "nodata": True}]
    for c in classes:
        # Names are restricted to plain letters there; two of ours may fall together, their codes do not.
        name = f"{re.sub(r'[^A-Za-z0-9]+', '-', c.name).strip('-').lower() or 'class'}-{c.code}"
        colour = (c.colour or "#808080").lstrip("#").upper()
        rows.append({"value": c.code, "name": name, "title": c.name, "color_hint": colour})
    return rows


def _placing(grid: Grid) -> dict[str, Any]:
    t = grid.transform
    placing: dict[str, Any] = {"proj:shape": list(grid.shape_yx), "proj:transform": [t.a, t.b, t.c, t.d, t.e, t.f]}
    epsg = grid.crs.to_epsg()
    if epsg is not None:
        placing["proj:code"] = f"EPSG:{epsg}"
    else:
        placing["proj:wkt2"] = grid.crs.to_wkt(version="WKT2_2019")
    return placing


def _side(grid: Grid) -> float:
    left, bottom, right, top = grid.bounds
    return max(right - left, top - bottom)


def _text(when: datetime) -> str:
    return when.astimezone(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
