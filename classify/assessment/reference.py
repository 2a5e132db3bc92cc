"""A project's reference sample read against a map: labels from any vector file, the map class at each point, strata from
the recorded design, so that a sample drawn from an older map still serves a newer one."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import geopandas
import numpy as np
import pandas as pd
import rasterio
from numpy.typing import NDArray
from rasterio.errors import RasterioError

from classify.assessment.assess import write_assessment
from classify.assessment.inputs import sample_from_points
from classify.assessment.options import AssessmentOptions, TableName
from classify.assessment.result import Assessment
from classify.assessment.sample import DesignKind, ReferenceSample
from classify.assessment.statistics import estimate_sample
from classify.errors import DataError, Problem, SampleError, raise_if_errors
from classify.files import read_json
from classify.raster.grid import Grid
from classify.settings import Project, ReferenceSettings
from classify.settings.model import M2_PER_UNIT

_BLOCK_PX = 512
_ROWS_NAMED = 5


@dataclass(frozen=True, slots=True, eq=False)
class RecordedDesign:
    """How a sample was drawn. strata: columns stratum, area_m2, pixels, mapped_as. stratum_of: point id -> stratum."""

    kind: str
    strata: pd.DataFrame
    stratum_of: Mapping[str, str]


def assess_project(project: Project, outputs: Path) -> Assessment:
    """Assess the map in `outputs` on the project's reference sample; writes outputs/assessment/. Raises LandassayError."""
    sample, options = _read(project, outputs / "map" / "cover.tif", outputs)
    assessment = estimate_sample(sample, options)
    write_assessment(assessment, outputs / "assessment")
    return assessment


def read_reference(project: Project, cover: Path, outputs: Path) -> ReferenceSample:
    """The project's labelled sample with the classes of the map `cover` at its points.

    cover: a map of class codes, 0 where there is no data; outputs: the folder with map/areas.csv and, where the sample
    was drawn here, sample/design.json. Raises DataError, SampleError.
    """
    return _read(project, cover, outputs)[0]


def read_labels(project: Project) -> dict[str, int]:
    """Number of points by label (class name; "" for points without one), read without a map.

    Raises DataError or SampleError, as `read_reference` does for the same file.
    """
    settings = project.reference
    if settings is None:
        return {}
    frame = _read_points(project, settings)
    labels = _labels(project, frame[settings.label], settings.label, TableName(settings.points))
    return {str(name): int(count) for name, count in labels.value_counts().sort_index().items()}


def read_design(path: Path) -> RecordedDesign:
    """Read design.json as the sample was drawn. Raises DataError."""
    content = read_json(path)
    try:
        strata = pd.DataFrame(content["strata"])[["stratum", "area_m2", "pixels", "mapped_as"]]
        points = {str(key): str(entry["stratum"]) for key, entry in content["points"].items()}
        return RecordedDesign(str(content["kind"]), strata.astype({"stratum": str, "area_m2": float}), points)
    except (KeyError, TypeError, ValueError, AttributeError) as error:
        raise DataError(
            f"this is not a recorded design: {error!r} is missing or of the wrong kind", where=str(path),
            fix="name the design.json that was written when the sample was drawn",
        ) from error  # fmt: skip


def codes_at(cover: Path, points: geopandas.GeoSeries) -> tuple[NDArray[np.uint8], NDArray[np.bool_]]:
    """Class codes (uint8, (n,)) of a map at points in any CRS, and whether each lies on the map at all (bool (n,)).

    Only the blocks that points fall on are read. Raises DataError.
    """
    try:
        with rasterio.open(cover) as source:
            grid = Grid(source.crs, source.transform, source.height, source.width)
            there = points.to_crs(source.crs)
            rows, cols = grid.rowcol(there.x.to_numpy(), there.y.to_numpy())
            inside = grid.contains(rows, cols)
            codes = np.zeros(len(there), dtype=np.uint8)
            block = np.where(inside, rows // _BLOCK_PX * (1 + grid.width // _BLOCK_PX) + cols // _BLOCK_PX, -1)
            for number in np.unique(block[inside]):
                here = np.flatnonzero(block == number)
                row, col = int(rows[here].min()), int(cols[here].min())
                height, width = int(rows[here].max()) - row + 1, int(cols[here].max()) - col + 1
                values = source.read(1, window=rasterio.windows.Window(col, row, width, height))
                codes[here] = values[rows[here] - row, cols[here] - col]
    except RasterioError as error:
        raise DataError(f"the map cannot be read: {error}", where=str(cover)) from error
    return codes, inside


def _read(project: Project, cover: Path, outputs: Path) -> tuple[ReferenceSample, AssessmentOptions]:
    settings = project.reference
    if settings is None:
        raise SampleError("the project has no reference sample", where=f"{project.file.name}: reference",
                          fix="add a section [reference] with 'points' and 'label'")  # fmt: skip
    frame = _read_points(project, settings)
    name = TableName(settings.points)
    labels = _labels(project, frame[settings.label], settings.label, name)
    codes, inside = codes_at(cover, frame.geometry)
    areas = read_areas(outputs / "map" / "areas.csv")
    design, key = _design(project, settings, frame, outputs)
    if design is None:
        strata = areas.rename(columns={"name": "stratum"})[["stratum", "area_m2", "pixels"]]
        strata, kind = strata[strata["area_m2"] > 0], "post-stratified"
    else:
        strata, kind = design.strata.drop(columns="mapped_as"), design.kind
    unit = project.report.area_unit
    strata = strata.assign(area=strata["area_m2"] / M2_PER_UNIT[unit]).drop(columns="area_m2")
    names = {c.code: c.name for c in project.classes}
    mapped = pd.Series([names.get(int(code), "") for code in codes], index=frame.index)
    points = pd.DataFrame({"stratum": mapped if key is None else key, "map": mapped, "reference": labels})
    on_map = (mapped != "").to_numpy()
    options = AssessmentOptions(
        confidence_level=project.report.confidence_level, classes=tuple(names.values()), area_unit=unit,
        kind=_kind(kind), mapped_area=dict(zip(areas["name"], areas["area_m2"] / M2_PER_UNIT[unit], strict=True)),
        points=name,
    )  # fmt: skip
    if not on_map.any():
        raise SampleError("no point of the reference sample lies on the map", where=settings.points,
                          fix="check the CRS of the points")  # fmt: skip
    sample = sample_from_points(points[on_map].reset_index(drop=True), strata, options)
    return sample.with_problems(_off_map(inside, on_map) + _assumed(design)), options


def read_areas(path: Path) -> pd.DataFrame:
    """Mapped pixels and ground area per class: columns code, name, pixels, area_m2. Raises DataError."""
    try:
        return pd.read_csv(path, dtype={"name": str}, keep_default_na=False)[["code", "name", "pixels", "area_m2"]]
    except (OSError, KeyError, ValueError) as error:
        raise DataError(f"the areas of the map cannot be read: {error}", where=str(path),
                        fix="run 'landassay classify' again") from error  # fmt: skip


def _read_points(project: Project, settings: ReferenceSettings) -> geopandas.GeoDataFrame:
    path = project.path(settings.points)
    try:
        frame = geopandas.read_file(path, layer=settings.layer) if settings.layer else geopandas.read_file(path)
    except Exception as error:  # pyogrio raises errors of many kinds, none of a common type
        raise DataError(f"the reference sample cannot be read: {error}", where=path) from error
    if not isinstance(frame, geopandas.GeoDataFrame) or frame.geometry.isna().all():
        raise DataError("the reference sample has no geometries", where=path)
    if frame.crs is None:
        raise DataError("the reference sample has no CRS", where=path, fix="save it with the CRS of its coordinates")
    problems = [
        Problem(f"there is no column {column!r}", f"{path}", f"its columns are {', '.join(map(repr, frame.columns[:-1]))}")
        for column in (settings.label, settings.stratum) if column is not None and column not in frame.columns
    ]  # fmt: skip
    odd = np.flatnonzero((frame.geometry.geom_type != "Point").to_numpy())
    if len(odd):
        problems.append(Problem(f"{len(odd)} features are not single points, first feature {odd[0] + 1}", path,
                                "give one point per record; convert polygons to points before"))  # fmt: skip
    raise_if_errors(problems, DataError)
    return frame.reset_index(drop=True)


def _labels(project: Project, given: pd.Series, column: str, name: TableName) -> pd.Series:
    """Class names; "" where there is no label. A label is a class name, whatever its case, or a class code."""
    lookup = {c.name.casefold(): c.name for c in project.classes} | {str(c.code): c.name for c in project.classes}
    text = given.map(_plain)
    labels = text.map(lambda value: lookup.get(value.casefold(), ""))
    faulty = np.flatnonzero((text != "") & (labels == ""))
    problems = [Problem(f"{text.iat[i]!r} is no class", name.row(int(i), column)) for i in faulty[:_ROWS_NAMED]]
    if len(faulty) > _ROWS_NAMED:
        problems.append(Problem(f"{len(faulty) - _ROWS_NAMED} more rows with such a label", name.column(column)))
    if problems:
        classes = ", ".join(repr(c.name) for c in project.classes)
        problems.append(Problem("labels must be class names or codes", name.column(column), f"classes are {classes}"))
    raise_if_errors(problems, SampleError)
    return labels


def _plain(value: Any) -> str:  # noqa: ANN401 - whatever the vector file holds
    if value is None or (isinstance(value, float) and np.isnan(value)) or value is pd.NA:
        return ""
    return str(int(value)) if isinstance(value, float) and value.is_integer() else str(value).strip()


def _design(
    project: Project, settings: ReferenceSettings, frame: geopandas.GeoDataFrame, outputs: Path
) -> tuple[RecordedDesign | None, pd.Series | None]:
    """The recorded design and the stratum of each point; None where the sample has none."""
    drawn_here = outputs / "sample" / "design.json"
    ids = frame["id"].map(_plain) if "id" in frame.columns else None
    if settings.design is not None:
        design = read_design(Path(project.path(settings.design)))
    elif drawn_here.is_file():
        design = read_design(drawn_here)
        if settings.stratum is None and (ids is None or not ids.isin(list(design.stratum_of)).all()):
            return None, None  # the sample is another one than that drawn here
    elif settings.stratum is None:
        return None, None
    else:
        raise SampleError("strata are named, but their areas are not known", where=f"{project.file.name}: reference.stratum",
                          fix="name the recorded design with 'design', or leave 'stratum' out if strata are map classes")  # fmt: skip
    if settings.stratum is not None:
        return design, frame[settings.stratum].map(_plain)
    if ids is None:
        raise SampleError("there is no column 'id'", where=settings.points,
                          fix="keep the ids of the drawn points: the design finds the stratum by them")  # fmt: skip
    strange = ids[~ids.isin(list(design.stratum_of))]
    if len(strange):
        raise SampleError(f"{len(strange)} points are not in the recorded design, first id {strange.iloc[0]!r}",
                          where=settings.points, fix="name the design that this sample was drawn by")  # fmt: skip
    return design, ids.map(design.stratum_of)


def _kind(written: str) -> DesignKind:
    for kind in ("post-stratified", "systematic", "stratified", "simple random"):
        if written.startswith(kind):
            return kind  # type: ignore[return-value]
    return "stratified"


def _off_map(inside: NDArray[np.bool_], on_map: NDArray[np.bool_]) -> tuple[Problem, ...]:
    outside, no_data = int((~inside).sum()), int((inside & ~on_map).sum())
    found = []
    if outside:
        found.append(f"{outside} points lie outside the map")
    if no_data:
        found.append(f"{no_data} points lie where the map has no data")
    text = " and ".join(found)
    return (Problem(f"{text}; they are left out", severity="warning"),) if found else ()


def _assumed(design: RecordedDesign | None) -> tuple[Problem, ...]:
    if design is not None:
        return ()
    return (
        Problem(
            "no design was recorded for the sample, so it is taken as a simple random one, post-stratified by map class",
            fix="if it was drawn otherwise, name its design with [reference] design; if places were chosen, no interval holds",
            severity="warning",
        ),
    )
