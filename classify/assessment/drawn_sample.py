"""A drawn sample on disk: design.json with the key to the strata, and the points in forms that give nothing away.

Points carry ids dealt at random, coordinates and empty columns for labels; neither their order nor their numbers tell
of the map. A sample that was drawn is never drawn over: it can be added to, and a point that cannot be reached can be
replaced by the next in reserve. points.gpkg then gets further rows and keeps all else that is in it; the other files
are written anew, unless they are no longer as they were written (design.json has their SHA-256): then nothing is done.
"""

from __future__ import annotations

import json
import shutil
import xml.etree.ElementTree as ET
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import geopandas
import numpy as np
import pandas as pd

from classify.assessment.design_file import drawn_grid, grid_facts
from classify.assessment.draw import IDS, Cells, Draw, DrawOptions, pixels_of
from classify.assessment.lots import lots, stream
from classify.assessment.population import Population
from classify.errors import DataError, OutputError, Problem, SampleError, raise_if_errors
from classify.files import replacing, sha256, write_bytes, write_text
from classify.raster.grid import Grid
from classify.raster.vectors import layers_of, read_places
from classify.raster.written import check_layer
from classify.shapes import Design, read_shaped
from classify.tables import csv_text
from classify.together import finish_replacing, is_unfinished, replacing_together

LABEL_COLUMNS = ("observed", "alternate", "confidence", "note")
# Written whole each time, so that they must not have been changed; points.gpkg grows instead.
_WHOLE_FILES = ("points.gpx", "points.geojson", "points.csv")
# What a sample that was drawn leaves; labels of an earlier one would be taken for those of points of the same number.
_TRACES = ("design.json", "points.gpkg", *_WHOLE_FILES, "labels.sqlite")
NUMBERS_CAUTION = (
    "Points that were added to some strata only, or that stand in for others, have the highest numbers: whoever sees "
    "these can tell that such points are alike. Tell nobody who labels how these points came about."
)
DRAW_CAUTION = (
    "Keep design.json from whoever labels the points: it tells the map's classes. Every point drawn must be labelled "
    "or accounted for; dropping awkward ones breaks what the intervals rest on."
)


@dataclass(frozen=True, slots=True, eq=False)
class DrawnSample:
    """design: as in design.json. points: GeoDataFrame in the map's CRS with id (int), longitude, latitude and the label
    columns, in the order of ids, and segment where segments were drawn."""

    design: Mapping[str, Any]
    points: geopandas.GeoDataFrame

    @property
    def active_ids(self) -> list[int]:
        """Ids of the points to be labelled, ascending: all but those that were replaced."""
        return sorted(int(i) for i, entry in self.design["points"].items() if "replaced_by" not in entry)


def first_design(
    population: Population, drawn: Draw, options: DrawOptions, map_facts: Mapping[str, Any], more: Mapping[str, Any]
) -> dict[str, Any]:
    """design.json of a first draw, without points yet. map_facts: file and sha256 of the map. more: further keys."""
    found = drawn.scan
    stratified = options.kind == "stratified random"
    by_name = {d.stratum: d for d in drawn.strata}
    strata = []
    for place, name in enumerate(population.names):
        if found.pixels[place]:
            mapped_as = name if stratified else None
            area_m2 = round(found.area_m2[place], 1)
            strata.append(
                {"stratum": name, "mapped_as": mapped_as, "area_m2": area_m2, "pixels": found.pixels[place], "n": 0}
            )
            if options.segment_px > 1:
                strata[-1]["clusters"] = found.units[place]
    left_out = [s["stratum"] for s in strata if s["stratum"] not in by_name]
    notes = [*drawn.notes, *(f"No points were drawn in {name!r}: no estimate covers it." for name in left_out)]
    return {
        "schema": 1, "kind": options.kind, "seed": options.seed,
        "map": {**map_facts, **grid_facts(population.grid)},
        "unit": {"kind": "pixel" if options.segment_px == 1 else "segment", "side_px": options.segment_px},
        "apart_m": options.apart_m, **more,
        "population": {"pixels": sum(found.pixels), "area_m2": round(sum(found.area_m2), 1),
                       "excluded_pixels": found.excluded_pixels,
                       "excluded_area_m2": round(found.excluded_area_m2, 1)},
        "strata": strata, "draws": [], "notes": notes, "cautions": [DRAW_CAUTION], "reserves": {}, "points": {},
    }  # fmt: skip


def with_drawn(design: Mapping[str, Any], population: Population, drawn: Draw) -> dict[str, Any]:
    """The design with the units of a draw as new points, numbered at random after those that are there."""
    points = dict(design["points"])
    side = population.segment_px
    fresh = []
    segment = max((entry.get("segment", 0) for entry in points.values()), default=0)
    for stratum in drawn.strata:
        for unit, pixels in zip(stratum.units, pixels_of(population, stratum.units), strict=True):
            fresh += [(cell, stratum.stratum, unit) for cell in pixels]
    numbers = np.array([cell[0] * population.grid.width + cell[1] for cell, _, _ in fresh], dtype=np.int64)
    order = np.argsort(lots(stream(int(design["seed"]), IDS), numbers), kind="stable")
    following = max((int(i) for i in points), default=0) + 1
    segments: dict[Cells, int] = {}
    for place, which in enumerate(order):
        cell, stratum_name, unit = fresh[which]
        entry: dict[str, Any] = {"stratum": stratum_name, "row": cell[0], "col": cell[1]}
        if side > 1:
            entry["segment"] = segments.setdefault(unit, segment + len(segments) + 1)
        points[str(following + place)] = entry
    sizes = {d.stratum: len(d.units) for d in drawn.strata}
    strata = [{**s, "n": s["n"] + sizes.get(s["stratum"], 0)} for s in design["strata"]]
    reserves = {name: list(cells) for name, cells in design["reserves"].items()}
    for d in drawn.strata:
        if d.reserves:
            reserves.setdefault(d.stratum, []).extend({"row": r, "col": c} for r, c in d.reserves)
    grown = {**design, "strata": strata, "draws": [*design["draws"], sizes], "reserves": reserves, "points": points}
    alike = design["points"] and {name for name, n in sizes.items() if n} < {s["stratum"] for s in strata if s["n"]}
    return _with_caution(grown) if alike else grown


def _with_caution(design: Mapping[str, Any]) -> dict[str, Any]:
    return {**design, "cautions": list(dict.fromkeys([*design.get("cautions", ()), NUMBERS_CAUTION]))}


def taken_cells(design: Mapping[str, Any]) -> dict[str, list[Cells]]:
    """Units already drawn or in reserve, by stratum."""
    side = int(design["unit"]["side_px"])
    taken: dict[str, list[Cells]] = {}
    for entry in design["points"].values():
        taken.setdefault(entry["stratum"], []).append((entry["row"] // side, entry["col"] // side))
    for name, cells in design["reserves"].items():
        taken.setdefault(name, []).extend((c["row"], c["col"]) for c in cells)
    return {name: list(dict.fromkeys(units)) for name, units in taken.items()}


def with_replacement(design: Mapping[str, Any], point: str, reason: str) -> tuple[dict[str, Any], str]:
    """The design with the next reserve of its stratum in a point's place, and the reserve's new id. Raises
    SampleError."""
    if point not in design["points"]:
        raise SampleError(f"there is no point {point!r} in the sample", fix="name the id of a drawn point")
    entry = design["points"][point]
    if "replaced_by" in entry:
        raise SampleError(f"point {point} was replaced by point {entry['replaced_by']} before")
    if not reason.strip():
        raise SampleError("the reason is missing", fix="say why the place cannot be reached")
    waiting = list(design["reserves"].get(entry["stratum"], []))
    if not waiting:
        raise SampleError("there is no point in reserve for it", fix="add points with 'landassay draw --add-to'")
    fresh = str(max(int(i) for i in design["points"]) + 1)
    points = {
        **design["points"], point: {**entry, "replaced_by": int(fresh), "reason": reason.strip()},
        fresh: {"stratum": entry["stratum"], **waiting[0], "replaces": int(point)},
    }  # fmt: skip
    reserves = {**design["reserves"], entry["stratum"]: waiting[1:]}
    replaced = {**design, "points": points, "reserves": reserves}
    return (_with_caution(replaced) if len(design["strata"]) > 1 else replaced), fresh


def points_frame(design: Mapping[str, Any], grid: Grid) -> geopandas.GeoDataFrame:
    """The points of a design with empty label columns, in the order of ids, at pixel centres."""
    ids = sorted(int(i) for i in design["points"])
    entries = [design["points"][str(i)] for i in ids]
    x, y = grid.xy(np.array([e["row"] for e in entries], np.int64), np.array([e["col"] for e in entries], np.int64))
    frame = geopandas.GeoDataFrame({"id": ids}, geometry=geopandas.points_from_xy(x, y), crs=grid.crs.to_wkt())
    degrees = frame.geometry.to_crs(4326)
    frame["longitude"], frame["latitude"] = degrees.x.round(8), degrees.y.round(8)
    if entries and "segment" in entries[0]:
        frame["segment"] = [e["segment"] for e in entries]
    for column in LABEL_COLUMNS:
        frame[column] = pd.array([""] * len(frame), dtype="object")
    return frame[[*(c for c in frame.columns if c != "geometry"), "geometry"]]


def write_first(folder: Path, design: Mapping[str, Any], grid: Grid) -> DrawnSample:
    """Write a sample that was just drawn. Raises OutputError if there is one already."""
    refuse_if_drawn(folder)
    points = points_frame(design, grid)
    with replacing_together(folder) as staged:
        with replacing(staged / "points.gpkg", RuntimeError) as temporary:  # which every error of pyogrio is
            points.to_file(temporary, layer="points", driver="GPKG")
            check_layer(temporary, "points", len(points))
        return _with_files(staged, DrawnSample(design, points), points)


def write_more(folder: Path, before: DrawnSample, design: Mapping[str, Any], grid: Grid) -> DrawnSample:
    """Write a sample that got more points; whatever was entered in points.gpkg stays as it is, in its further columns
    and layers too. Raises OutputError, before anything is written, when another file of points was changed or
    points.gpkg is open elsewhere."""
    refuse_if_changed(folder, before.design)
    whole = points_frame(design, grid)
    fresh = whole[~whole["id"].isin(before.points["id"])]
    path = folder / "points.gpkg"
    # Labels of new points are null: an empty text would be 0 in a column that was made one of numbers.
    known = [c for c in fresh.columns if c in before.points.columns and c not in LABEL_COLUMNS]
    with replacing_together(folder) as staged:
        with replacing(staged / path.name, RuntimeError) as temporary:
            shutil.copyfile(path, temporary)
            fresh[known].to_crs(before.points.crs).to_file(temporary, layer=_layer(path), driver="GPKG", mode="a")
            points = _read_points(temporary)
        return _with_files(staged, DrawnSample(design, whole), points)


def _with_files(staged: Path, sample: DrawnSample, points: geopandas.GeoDataFrame) -> DrawnSample:
    """The sample as written beside points.gpkg: its other files, and the design that knows them."""
    design = {**sample.design, "files": _write_whole(staged, sample)}
    write_text(staged / "design.json", _lines(design))
    return DrawnSample(design, points)


def recover(folder: Path) -> None:
    """End what a command that was stopped had begun to write. Raises OutputError where that is not possible."""
    if is_unfinished(folder):
        refuse_if_open(folder)
        finish_replacing(folder)


def refuse_if_drawn(folder: Path) -> None:
    """Raise OutputError when a sample, or what is left of one, lies in the folder."""
    recover(folder)
    there = [folder / name for name in _TRACES if (folder / name).exists()]
    if there:
        raise OutputError(
            "a sample was drawn already, and it is left as it is", where=str(there[0]),
            fix="add points to it with --add, or move the folder away to draw another one",
        )  # fmt: skip


def refuse_if_changed(folder: Path, design: Mapping[str, Any]) -> None:
    """Raise OutputError naming each file of points that is to be written anew and is not as it was written."""
    written = design.get("files", {})
    raise_if_errors([
        Problem("this file was changed since it was written here, and is left as it is", str(folder / name),
                "nothing was written: move it elsewhere first; labels in it are taken in with 'landassay interpret "
                "--import'")
        for name in _WHOLE_FILES if (folder / name).exists() and sha256(folder / name) != written.get(name)
    ], OutputError)  # fmt: skip


def refuse_if_open(folder: Path) -> None:
    """Raise OutputError when another program holds points.gpkg open, with changes that it has not written back: a copy
    would lack them, and would be mixed up with them afterwards. To be called before the file is opened here."""
    for path in (folder / "points.gpkg-wal", folder / "points.gpkg-journal"):
        if path.exists() and path.stat().st_size:
            raise OutputError("points.gpkg is open in another program", where=str(path),
                              fix="nothing was written: save and close it there, then try again")  # fmt: skip


def read_drawn(folder: Path) -> DrawnSample:
    """A drawn sample, checked: the points are those of the design, where the design has them. Raises DataError,
    SampleError."""
    recover(folder)
    path = folder / "design.json"
    if not path.exists():
        raise DataError("no sample was drawn yet", where=str(path), fix="run 'landassay draw' first")
    design = read_shaped(path, Design, fix="put back the design.json that 'draw' wrote")
    points_path = folder / "points.gpkg"
    points = _read_points(points_path)
    _check_points(design, points, points_path)
    sample = DrawnSample(design, points)
    grid = drawn_grid(design["map"], path)
    if grid is not None:
        check_places(sample, grid, points_path)
    return sample


def _read_points(path: Path) -> geopandas.GeoDataFrame:
    return read_places(path, "drawn points", layer=_layer(path) if path.is_file() else None)


def _layer(path: Path) -> str:
    """The layer of the points, whatever others were put beside it; the first one where a program renamed it."""
    names = layers_of(path, "drawn points")
    return "points" if "points" in names else names[0]


def _check_points(design: Mapping[str, Any], points: geopandas.GeoDataFrame, path: Path) -> None:
    if "id" not in points.columns:
        raise DataError("the points have no column 'id'", where=str(path), fix="restore the file as it was drawn")
    ids = [str(i) for i in points["id"]]
    known, there = set(design["points"]), set(ids)
    problems = []
    if len(ids) != len(there):
        problems.append(Problem("an id is given to more than one point", str(path)))
    for what, which in (("is not in the design", there - known), ("of the design is missing", known - there)):
        if which:
            first = min(which, key=lambda i: (len(i), i))
            problems.append(Problem(f"point {first} {what} ({len(which)} such points)", str(path),
                                    "put back the design.json and points.gpkg that were written together"))  # fmt: skip
    raise_if_errors(problems, SampleError)


def check_places(sample: DrawnSample, grid: Grid, path: Path) -> None:
    """Raise SampleError when points do not lie in the pixels that the design has them in."""
    there = sample.points.to_crs(grid.crs.to_wkt())
    rows, cols = grid.rowcol(there.geometry.x.to_numpy(), there.geometry.y.to_numpy())
    moved = [
        str(i) for i, r, c in zip(sample.points["id"], rows, cols, strict=True)
        if (sample.design["points"][str(i)]["row"], sample.design["points"][str(i)]["col"]) != (int(r), int(c))
    ]  # fmt: skip
    if moved:
        raise SampleError(f"{len(moved)} points do not lie where they were drawn, first {moved[0]}", where=str(path),
                          fix="put back the design.json and points.gpkg that were written together")  # fmt: skip


# --- files ----------------------------------------------------------------------------------------------------------


def _write_whole(folder: Path, sample: DrawnSample) -> dict[str, str]:
    """Write all but points.gpkg and design.json; returns the SHA-256 by file name."""
    shown = sample.points[[c for c in ("id", "longitude", "latitude", "segment") if c in sample.points.columns]]
    active = shown[shown["id"].isin(sample.active_ids)]
    table = pd.DataFrame(active).assign(x=sample.points.geometry.x, y=sample.points.geometry.y)
    for column in LABEL_COLUMNS:
        table[column] = ""
    csv = csv_text(table)
    contents = (_gpx(active), _geojson(active).encode("utf-8"), csv.encode("utf-8"))
    for name, content in zip(_WHOLE_FILES, contents, strict=True):
        write_bytes(folder / name, content)
    return {name: sha256(folder / name) for name in _WHOLE_FILES}


def _gpx(points: pd.DataFrame) -> bytes:
    root = ET.Element("gpx", version="1.1", creator="landassay", xmlns="http://www.topografix.com/GPX/1/1")
    for row in points.itertuples():
        place = ET.SubElement(root, "wpt", lat=f"{row.latitude:.8f}", lon=f"{row.longitude:.8f}")
        ET.SubElement(place, "name").text = str(row.id)
    ET.indent(root)
    return bytes(ET.tostring(root, encoding="utf-8", xml_declaration=True))


def _geojson(points: pd.DataFrame) -> str:
    """As RFC 7946 has it: longitude and latitude on WGS 84."""
    empty: dict[str, Any] = dict.fromkeys(LABEL_COLUMNS, "")
    features = [
        {"type": "Feature", "id": i, "properties": {"id": i, **empty},
         "geometry": {"type": "Point", "coordinates": [longitude, latitude]}}
        for i, longitude, latitude in zip(*(points[c].tolist() for c in ("id", "longitude", "latitude")), strict=True)
    ]  # fmt: skip
    return _lines({"type": "FeatureCollection", "features": features})


def _lines(content: Mapping[str, Any]) -> str:
    """JSON with a line for each key, and for each item of what it holds: many times as quick as with more."""

    def text(value: object) -> str:
        return json.dumps(value, ensure_ascii=False, allow_nan=False)

    def part(value: object) -> str:
        if isinstance(value, dict) and value:
            return "{\n    " + ",\n    ".join(f"{text(k)}: {text(v)}" for k, v in value.items()) + "\n  }"
        if isinstance(value, list) and value:
            return "[\n    " + ",\n    ".join(map(text, value)) + "\n  ]"
        return text(value)

    return "{\n" + ",\n".join(f"  {text(key)}: {part(value)}" for key, value in content.items()) + "\n}\n"
