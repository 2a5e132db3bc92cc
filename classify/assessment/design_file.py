"""The recorded design of a drawn sample, design.json: strata with their areas, and the key from point id to stratum."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from affine import Affine
from rasterio.crs import CRS
from rasterio.errors import CRSError

from classify.assessment.evidence import Reservation
from classify.assessment.sample import DESIGN_KINDS, DesignKind
from classify.errors import DataError
from classify.files import read_json
from classify.raster.grid import Grid


@dataclass(frozen=True, slots=True)
class DrawnMap:
    """The map that a sample was drawn from, as far as its design tells: file as written there, "" where it is not;
    SHA-256; transform and shape as plain numbers, () where they are not recorded; grid, None where the CRS is not."""

    file: str
    sha256: str
    transform_and_shape: tuple[float, ...]
    grid: Grid | None


@dataclass(frozen=True, slots=True, eq=False)
class RecordedDesign:
    """How a sample was drawn. strata: columns stratum, area_m2, pixels, clusters (NaN where points were drawn singly).

    stratum_of: point id -> stratum, of all points that are to be labelled. cluster_of: point id -> the segment that was
    drawn as one unit; empty where points were drawn singly. replaced: id -> reason, of points that others stand in for.
    place_of: point id -> (row, col) in the grid of `drawn_from`. class_areas: columns name, pixels, area_m2 of the map
    classes within the population; None where the design does not tell. whole: whether the population was all of the
    map. remarks: what a reader of estimates must know of the draw. reservations: what takes something from the claim.
    """

    kind: DesignKind
    strata: pd.DataFrame
    stratum_of: Mapping[str, str]
    cluster_of: Mapping[str, str]
    replaced: Mapping[str, str]
    place_of: Mapping[str, tuple[int, int]]
    drawn_from: DrawnMap
    class_areas: pd.DataFrame | None
    whole: bool
    remarks: tuple[str, ...]
    reservations: tuple[Reservation, ...]


def read_design(path: Path) -> RecordedDesign:
    """Read design.json as it was written when the sample was drawn. Raises DataError."""
    content = read_json(path)
    try:
        points = {str(point): entry for point, entry in content["points"].items()}
        replaced = {p: str(entry.get("reason", "")) for p, entry in points.items() if "replaced_by" in entry}
        key = {point: str(entry["stratum"]) for point, entry in points.items() if point not in replaced}
        population = content.get("population", {})
        return RecordedDesign(
            kind=_kind(content), strata=_strata(content), stratum_of=key,
            cluster_of={point: str(points[point]["segment"]) for point in key if "segment" in points[point]},
            replaced=replaced,
            place_of={p: (int(e["row"]), int(e["col"])) for p, e in points.items() if "row" in e and "col" in e},
            drawn_from=_drawn_from(content.get("map", {}), path), class_areas=_class_areas(content),
            whole=not population.get("excluded_pixels"),
            remarks=(*_notes(content), *_replacements(replaced, len(key))),
            reservations=tuple(_reservations(content, replaced)),
        )  # fmt: skip
    except (KeyError, TypeError, ValueError, AttributeError) as error:
        raise DataError(
            f"this is not a recorded design ({type(error).__name__}: {error})", where=str(path),
            fix="name the design.json that was written when the sample was drawn",
        ) from error  # fmt: skip


def _kind(content: Mapping[str, Any]) -> DesignKind:
    """ "stratified random" and the like, by its first words."""
    written = str(content["kind"])
    found = [kind for kind in DESIGN_KINDS if written.startswith(kind)]
    if not found:
        raise ValueError(f"kind {written!r} is none of {', '.join(DESIGN_KINDS)}")
    return found[0]


def _strata(content: Mapping[str, Any]) -> pd.DataFrame:
    strata = pd.DataFrame(content["strata"])
    if "clusters" not in strata.columns:
        strata["clusters"] = np.nan
    return strata[["stratum", "area_m2", "pixels", "clusters"]].astype({"stratum": str, "area_m2": float})


def _drawn_from(content: Mapping[str, Any], path: Path) -> DrawnMap:
    plain = tuple(float(value) for value in content.get("grid", ()))
    return DrawnMap(str(content.get("file", "")), str(content.get("sha256", "")), plain, drawn_grid(content, path))


def grid_facts(grid: Grid) -> dict[str, Any]:
    """A grid as a design records that of its map: grid, transform and shape as plain numbers, and crs."""
    return {"grid": [*tuple(grid.transform)[:6], grid.height, grid.width], "crs": grid.crs.to_string()}


def drawn_grid(content: Mapping[str, Any], path: Path) -> Grid | None:
    """The grid that a design records of its map; None where it has no CRS, as old ones have not. Raises DataError."""
    if "crs" not in content:
        return None
    try:
        *transform, height, width = (float(value) for value in content["grid"])
        return Grid(CRS.from_user_input(content["crs"]), Affine(*transform), int(height), int(width))
    except (CRSError, KeyError, TypeError, ValueError) as error:
        raise DataError(f"the grid of the map is not readable: {error}", where=f"{path}: map",
                        fix="put back the design as it was drawn") from error  # fmt: skip


def _class_areas(content: Mapping[str, Any]) -> pd.DataFrame | None:
    """Recorded as such, or by the strata where they are map classes."""
    classes = content.get("population", {}).get("classes")
    if classes is None and all(s.get("mapped_as") for s in content["strata"]):
        classes = [{**s, "name": s["mapped_as"]} for s in content["strata"]]
    if classes is None:
        return None
    table = pd.DataFrame(classes)[["name", "pixels", "area_m2"]].astype({"name": str, "area_m2": float})
    return table.groupby("name", as_index=False, sort=False).sum()


def _notes(content: Mapping[str, Any]) -> Iterator[str]:
    """Notes but for those on a stratum: whether it has points is told by the points, as some may have been added."""
    names = [repr(str(s["stratum"])) for s in content["strata"]]
    return (str(note) for note in content.get("notes", ()) if not any(name in str(note) for name in names))


def _replacements(replaced: Mapping[str, str], points: int) -> Iterator[str]:
    if not replaced:
        return
    counts = Counter(reason or "no reason given" for reason in replaced.values())
    reasons = ", ".join(f"{reason} ({n})" for reason, n in counts.most_common())
    yield (
        f"{len(replaced)} places could not be reached and others, drawn in reserve, are among the {points} points in "
        f"their stead: {reasons}. The estimates take such places to be like those that can be reached"
    )


def _reservations(content: Mapping[str, Any], replaced: Mapping[str, str]) -> Iterator[Reservation]:
    if content.get("population", {}).get("excluded_pixels"):
        yield "part left out"
    if content.get("apart_m"):
        yield "distance kept"
    if replaced:
        yield "reserves used"
