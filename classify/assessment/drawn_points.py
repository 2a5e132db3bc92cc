"""Points of a file beside the design they were drawn by: is it theirs, do they lie where it says, which are wanting."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import geopandas
import numpy as np
import pandas as pd

from classify.assessment.columns import Labels, faults, plain_text
from classify.assessment.design_file import RecordedDesign, grid_facts, read_design
from classify.assessment.options import TableName
from classify.errors import DataError, Problem, SampleError, raise_if_errors
from classify.raster.grid import Grid
from classify.raster.sources import open_raster
from classify.settings import Project, ReferenceSettings

ASSUMED = Problem(
    "no design was recorded for the sample, so it is taken as a simple random one",
    fix="if it was drawn otherwise, name its design with 'design'; if places were chosen, set evidence to "
    "'purposive sample', as no interval holds then",
    severity="warning",
)
_ELSEWHERE = Problem(
    "the ids of the points are those of the sample drawn in outputs/sample, but the points lie elsewhere: they are "
    "taken as another sample",
    severity="warning",
)


def design_of(
    project: Project, settings: ReferenceSettings, frame: geopandas.GeoDataFrame, outputs: Path, cover: Path
) -> tuple[RecordedDesign | None, list[Problem]]:
    """The recorded design of the points in a file, None where they have none; and what must be said of that.

    cover: the assessed map. Raises DataError, and SampleError where points of the design were moved.
    """
    drawn_here = outputs / "sample" / "design.json"
    if settings.design is not None:
        design = read_design(Path(project.path(settings.design)))
        return design, _places(frame, settings, design, _maps(project, design, cover))
    if drawn_here.is_file():
        design = read_design(drawn_here)
        maps = _maps(project, design, cover)
        if settings.stratum is not None:
            return design, _places(frame, settings, design, maps)
        drawn = [*design.stratum_of, *design.replaced]
        if "id" in frame.columns and frame["id"].map(plain_text).isin(drawn).all():
            # Another sample may well count its points from 1 too. Most points of this one lie where they were drawn.
            if 2 * len(_moved(frame, design, maps) or ()) > len(frame):
                return None, [_ELSEWHERE, ASSUMED]
            return design, _places(frame, settings, design, maps)
    if settings.stratum is not None:
        raise SampleError(
            "a column with strata is named, but their areas are not known", where=f"{project.file.name}: reference",
            fix="name the recorded design with 'design', or leave 'stratum' out if strata are the map's classes",
        )  # fmt: skip
    return None, [ASSUMED]


def stratum_of(frame: geopandas.GeoDataFrame, settings: ReferenceSettings, design: RecordedDesign) -> pd.Series[Any]:
    """Stratum of each point: from its column where one is named, else by the key of the design. Raises SampleError."""
    if settings.stratum is not None:
        return pd.Series(frame[settings.stratum])
    if "id" not in frame.columns:
        raise SampleError("there is no column 'id'", where=settings.points,
                          fix="keep the ids of the drawn points, by which the design finds their strata")  # fmt: skip
    ids = Labels.of(frame["id"])
    known = [design.stratum_of.get(ids.text(i), "") for i in range(len(frame))]
    strange = np.array([not stratum for stratum in known])
    raise_if_errors(
        faults(strange, ids, "id", TableName(settings.points), lambda value: f"point {value!r} is not in the design",
               "name the design that this sample was drawn by"), SampleError,
    )  # fmt: skip
    return pd.Series(known, index=frame.index)


def as_drawn(
    frame: geopandas.GeoDataFrame, settings: ReferenceSettings, design: RecordedDesign
) -> tuple[geopandas.GeoDataFrame, list[Problem]]:
    """Points without those that others stand in for; and warnings of what the design tells, and of drawn points that
    the file lacks."""
    said = [Problem(remark, severity="warning") for remark in design.remarks]
    if "id" not in frame.columns:
        return frame, said
    ids = frame["id"].map(plain_text)
    lacking = sorted(set(design.stratum_of) - set(ids), key=lambda point: (len(point), point))
    kept = frame[~ids.isin(design.replaced)].reset_index(drop=True)
    if lacking:
        which = f"{len(lacking)} of {len(design.stratum_of)} drawn points"
        fix = "keep every drawn point, blank where it cannot be labelled: points left out by choice bias the estimates"
        what = f"{which} are not in {settings.points}, first {lacking[0]!r}"
        said.append(Problem(what, fix=fix, severity="warning"))
    return kept, said


# --- places ---------------------------------------------------------------------------------------------------------


def _places(
    frame: geopandas.GeoDataFrame, settings: ReferenceSettings, design: RecordedDesign, maps: Sequence[Path]
) -> list[Problem]:
    """A warning where places cannot be checked. Raises SampleError where points were moved."""
    if "id" not in frame.columns:
        return []  # strata then come from a column, and nothing is looked up by point
    moved = _moved(frame, design, maps)
    if moved is None:
        return [
            Problem(
                "whether the points lie where they were drawn could not be checked, as the design does not tell their "
                "pixels or the map they were drawn from is not there",
                fix="keep that map, or see to it that ids and places belong together", severity="warning",
            )
        ]  # fmt: skip
    if moved:
        raise SampleError(
            f"{len(moved)} of {len(frame)} points do not lie in the pixel they were drawn in, first point {moved[0]!r}",
            where=settings.points,
            fix="put the points back, or name the design that this sample was drawn by: a label tells of its own place",
        )  # fmt: skip
    return []


def _moved(frame: geopandas.GeoDataFrame, design: RecordedDesign, maps: Sequence[Path]) -> list[str] | None:
    """Ids of points of the design that lie in another pixel than it has them in; None where that cannot be known."""
    grid = _grid(design, maps)
    ids = frame["id"].map(plain_text)
    known = ids.isin(list(design.place_of)).to_numpy()
    if grid is None or not known.any():
        return None
    there = frame.geometry[known].to_crs(grid.crs.to_wkt())
    rows, cols = grid.rowcol(there.x.to_numpy(), there.y.to_numpy())
    return [
        point for point, row, col in zip(ids[known], rows, cols, strict=True)
        if design.place_of[point] != (int(row), int(col))
    ]  # fmt: skip


def _maps(project: Project, design: RecordedDesign, cover: Path) -> list[Path]:
    """Maps that may have the grid that the sample was drawn on."""
    return [cover, *([Path(project.path(design.drawn_from.file))] if design.drawn_from.file else [])]


def _grid(design: RecordedDesign, maps: Sequence[Path]) -> Grid | None:
    """The grid that the design records; where it has no CRS, that of the first map that is there and fits it."""
    if design.drawn_from.grid is not None:
        return design.drawn_from.grid
    for path in maps:
        if not path.is_file():
            continue
        try:
            with open_raster(str(path)) as source:
                crs, grid = source.crs, Grid(source.crs, source.transform, source.height, source.width)
        except DataError:
            continue  # the assessed map is read, and found faulty, elsewhere
        known = design.drawn_from.transform_and_shape
        if crs is not None and len(known) == 8 and np.allclose(grid_facts(grid)["grid"], known, rtol=1e-12, atol=1e-12):
            return grid
    return None
