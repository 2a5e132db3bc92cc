"""Training polygons from any vector file, in any CRS, brought onto the grid and checked before a pixel is read.

A polygon's number is its place in the file, counted from 1; it stays the same whatever is left out, so that a number
in a message, in `exclude` and in the review always means the same feature.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

import geopandas as gpd
import numpy as np
import pandas as pd
import shapely
from numpy.typing import NDArray

from classify.errors import DataError, Problem, TrainingError, raise_if_errors
from classify.raster.grid import Grid
from classify.raster.vectors import read_places
from classify.settings import ClassSettings, Project

_AREAL = {3, 6}  # shapely type ids of Polygon and MultiPolygon


@dataclass(frozen=True, eq=False)
class PolygonSet:
    """Labelled polygons on a grid.

    frame: one row per usable polygon in the grid's CRS, with `polygon` (int32, its number in the file, from 1),
    `code` (uint8), `class_name`, `area_m2` (float64, ground area on the ellipsoid) and the geometry.
    """

    frame: gpd.GeoDataFrame
    grid: Grid
    problems: tuple[Problem, ...] = ()


def read_polygons(project: Project, grid: Grid) -> PolygonSet:
    """Read the project's training polygons and bring them onto `grid`.

    Broken geometries are repaired and said to be; polygons without label, without area or outside the scene are left
    out and said to be. Raises DataError for an unreadable or empty file or one without CRS, TrainingError listing
    every unknown label, both at once naming what to do.
    """
    settings = project.training
    path = project.path(settings.polygons)
    frame = read_places(path, "polygons", layer=settings.layer, setting="[training] polygons")
    frame["polygon"] = np.arange(1, len(frame) + 1, dtype=np.int32)
    problems: list[Problem] = []
    frame = _labelled(frame, project, path, problems)
    frame = _left_out(frame, settings.exclude, path, problems)
    frame = _areal(frame, path, problems)
    frame = _on_grid(frame, grid, path, settings.inset_m, problems)
    raise_if_errors(problems, TrainingError)
    columns = ["polygon", "code", "class_name", "area_m2", "geometry"]
    return PolygonSet(frame[columns].reset_index(drop=True), grid, tuple(problems))


def _labelled(frame: gpd.GeoDataFrame, project: Project, path: str, problems: list[Problem]) -> gpd.GeoDataFrame:
    column = project.training.label
    if column not in frame.columns or column == "geometry":
        present = [str(name) for name in frame.columns if name not in ("geometry", "polygon")]
        near = difflib.get_close_matches(column, present, n=1, cutoff=0.6)
        fix = f"did you mean {near[0]!r}?" if near else f"columns present: {', '.join(present) or 'none'}"
        raise DataError(
            f"there is no column {column!r} that holds the label", where=path, fix=f"set [training] label; {fix}"
        )
    labels = frame[column]
    empty = labels.isna() | (labels.astype(str).str.strip() == "")
    if empty.any():
        problems.append(_warning(f"{_numbers(frame[empty])} without a label", path, "left out; fill in the label"))
    frame, labels = frame[~empty], labels[~empty]
    classes = {value: _class_of(value, project.classes) for value in labels.unique()}
    for value, found in classes.items():
        if found is None:
            there = _numbers(frame[labels == value])
            problems.append(Problem(f"unknown label {value!r} ({there})", path, _suggest(value, project.classes)))
    known = labels.map(lambda value: classes[value] is not None).to_numpy(dtype=bool)
    frame = frame[known].copy()
    found_classes = [found for found in (classes[value] for value in labels[known]) if found is not None]
    frame["code"] = np.array([found.code for found in found_classes], dtype=np.uint8)
    frame["class_name"] = [found.name for found in found_classes]
    return frame


def _class_of(value: Any, classes: Sequence[ClassSettings]) -> ClassSettings | None:  # noqa: ANN401 - any cell
    """The class that a cell names: by name exactly, or by code written as a number or as text."""
    by_name = {c.name: c for c in classes}
    if isinstance(value, str) and value in by_name:
        return by_name[value]
    try:
        number = float(value)
    except (TypeError, ValueError):
        return None
    return {float(c.code): c for c in classes}.get(number)


def _suggest(value: Any, classes: Sequence[ClassSettings]) -> str:  # noqa: ANN401 - any cell
    folded = {" ".join(c.name.casefold().split()): c.name for c in classes}
    given = " ".join(str(value).casefold().split())
    if given in folded:
        return f"it differs from {folded[given]!r} only by case or blanks: write it the same way"
    near = difflib.get_close_matches(given, folded, n=1, cutoff=0.6)
    if near:
        return f"did you mean {folded[near[0]]!r}?"
    return f"classes of this project: {', '.join(f'{c.code} = {c.name}' for c in classes)}"


def _left_out(
    frame: gpd.GeoDataFrame, exclude: Sequence[int], path: str, problems: list[Problem]
) -> gpd.GeoDataFrame:  # fmt: skip
    unknown = sorted(set(exclude) - set(frame["polygon"]))
    if unknown:
        listed = ", ".join(map(str, unknown))
        problems.append(_warning(f"[training] exclude names {listed}, which no usable polygon is called", path, ""))
    return frame[~frame["polygon"].isin(list(exclude))]


def _areal(frame: gpd.GeoDataFrame, path: str, problems: list[Problem]) -> gpd.GeoDataFrame:
    """Keep what has an area; repair what crosses itself."""
    geometry = frame.geometry.to_numpy()
    missing = shapely.is_missing(geometry) | shapely.is_empty(geometry)
    if missing.any():
        problems.append(_warning(f"{_numbers(frame[missing])} without geometry", path, "left out"))
    flat = ~missing & ~np.isin(shapely.get_type_id(geometry), [*_AREAL, 7])
    if flat.any():
        problems.append(_warning(f"{_numbers(frame[flat])} that is not an area (point or line)", path, "left out"))
    frame = frame[~(missing | flat)].copy()
    geometry = shapely.force_2d(frame.geometry.to_numpy())
    broken = ~shapely.is_valid(geometry)
    if broken.any():
        reasons = sorted({str(reason).split("[")[0] for reason in shapely.is_valid_reason(geometry[broken])})
        problems.append(
            _warning(
                f"{_numbers(frame[broken])} broken ({', '.join(reasons)})", path, "repaired for this run; mend the file"
            )
        )
    # By structure: the older way takes time by the square of the parts.
    geometry[broken] = shapely.make_valid(geometry[broken], method="structure", keep_collapsed=False)
    # A repair may leave lines beside the areas, and a collection may hold them from the start.
    mixed = ~np.isin(shapely.get_type_id(geometry), list(_AREAL))
    geometry[mixed] = [_areas_of(item) for item in geometry[mixed]]
    frame["geometry"] = geometry
    empty = shapely.is_empty(geometry)
    if empty.any():
        problems.append(_warning(f"{_numbers(frame[empty])} without any area", path, "left out"))
    return frame[~empty]


def _areas_of(geometry: shapely.Geometry) -> shapely.Geometry:
    parts = [part for part in shapely.get_parts(geometry) if shapely.get_type_id(part) in _AREAL]
    return shapely.union_all(parts) if parts else shapely.Polygon()


def _on_grid(
    frame: gpd.GeoDataFrame, grid: Grid, path: str, inset_m: float, problems: list[Problem]
) -> gpd.GeoDataFrame:
    if not len(frame):
        problems.append(Problem("no polygon can be used", path, "see the other findings"))
        return frame.assign(area_m2=np.zeros(0))
    if inset_m > 0:
        frame = _inset(frame, inset_m, path, problems)
    frame = frame.assign(area_m2=_ground_areas_m2(frame)).to_crs(grid.crs.to_wkt())
    outside, partly = _outside(frame.geometry.to_numpy(), grid)
    if len(frame) and outside.all():
        problems.append(
            Problem(
                "every polygon lies outside the scene",
                path,
                "are polygons and scene of the same place, and is each CRS the true one?",
            )
        )
    elif outside.any():
        problems.append(_warning(f"{_numbers(frame[outside])} outside the scene", path, "left out"))
    if partly.any():
        problems.append(
            _warning(f"{_numbers(frame[partly])} partly outside the scene", path, "only the part inside is used")
        )
    return frame[~outside]


def _outside(geometry: NDArray[Any], grid: Grid) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """Whether each geometry lies wholly, or only partly, outside the grid; in pixel space, as grids may be turned."""
    inverse = ~grid.transform

    def to_pixels(xy: NDArray[np.float64]) -> NDArray[np.float64]:
        x, y = xy[:, 0], xy[:, 1]
        return np.column_stack([inverse.a * x + inverse.b * y + inverse.c, inverse.d * x + inverse.e * y + inverse.f])

    # Places that the grid's CRS does not know have come out as infinite.
    corners, owner = shapely.get_coordinates(geometry, return_index=True)
    finite = np.ones(len(geometry), dtype=bool)
    finite[owner[~np.isfinite(corners).all(axis=1)]] = False
    bounds = np.full((len(geometry), 4), np.nan)
    bounds[finite] = shapely.bounds(shapely.transform(geometry[finite], to_pixels))
    left, top, right, bottom = bounds.T
    with np.errstate(invalid="ignore"):
        inside = finite & (right > 0) & (bottom > 0) & (left < grid.width) & (top < grid.height)
        whole = inside & (left >= 0) & (top >= 0) & (right <= grid.width) & (bottom <= grid.height)
    return ~inside, inside & ~whole


def _inset(frame: gpd.GeoDataFrame, inset_m: float, path: str, problems: list[Problem]) -> gpd.GeoDataFrame:
    # Metres mean metres on the ground, so the buffer is made in the UTM zone of the polygons, not in the grid's CRS.
    local = frame.to_crs(frame.estimate_utm_crs())
    shrunk = frame.assign(geometry=local.geometry.buffer(-inset_m).to_crs(frame.crs).to_numpy())
    gone = shrunk.geometry.is_empty.to_numpy()
    if gone.any():
        problems.append(_warning(f"{_numbers(frame[gone])} too narrow for inset_m = {inset_m:g}", path, "left out"))
    return shrunk[~gone]


def _ground_areas_m2(frame: gpd.GeoDataFrame) -> NDArray[np.float64]:
    geographic = frame.to_crs("EPSG:4326").geometry
    geod = frame.to_crs("EPSG:4326").crs.get_geod()
    return np.array([abs(geod.geometry_area_perimeter(shapely.normalize(item))[0]) for item in geographic])


def _numbers(frame: pd.DataFrame, most: int = 8) -> str:
    """'polygon 3' or 'polygons 3, 5, 9 and 4 more', for messages."""
    return polygon_list(frame["polygon"], most)


def polygon_list(numbers: Iterable[int], most: int = 8) -> str:
    """'polygon 3' or 'polygons 3, 5, 9 and 4 more', for messages."""
    listed = [str(number) for number in numbers]
    if len(listed) == 1:
        return f"polygon {listed[0]}"
    rest = f" and {len(listed) - most} more" if len(listed) > most else ""
    return f"polygons {', '.join(listed[:most])}{rest}"


def _warning(what: str, where: str, fix: str) -> Problem:
    return Problem(what, where, fix, severity="warning")
