"""A project's reference sample read against a map.

Labels come from any vector file and the map class is read at each point. Strata come from the recorded design, so that
a sample drawn from an older map still serves a newer one.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
from numpy.typing import NDArray
from rasterio.errors import RasterioError
from rasterio.windows import Window as RasterWindow

from classify.assessment.columns import Labels, faults, plain_text
from classify.assessment.compare import Comparison, compare_sample, write_comparison
from classify.assessment.design_file import RecordedDesign
from classify.assessment.drawn_points import as_drawn, design_of, stratum_of
from classify.assessment.drawn_sample import recover
from classify.assessment.estimation import estimate_sample
from classify.assessment.frames import write_assessment
from classify.assessment.inputs import sample_from_points
from classify.assessment.options import AssessmentOptions, TableName
from classify.assessment.result import Assessment
from classify.assessment.sample import NO_LABEL, DesignKind, ReferenceSample
from classify.errors import DataError, Problem, SampleError, raise_if_errors
from classify.files import sha256
from classify.raster.grid import Grid
from classify.raster.sources import open_raster
from classify.raster.vectors import read_places
from classify.settings import ClassSettings, Project, ReferenceSettings
from classify.settings.model import M2_PER_UNIT
from classify.tables import read_table

_BLOCK_PX = 512
_WHOLE_MAP = "whole map"
_OTHER_POPULATION = Problem(
    "the sample was drawn from a part of the map or from another map, and how much of each class is mapped there is "
    "not known: the estimates stand for what was sampled, and mapped areas are left out, as those of the whole map are "
    "no match for them",
    severity="warning",
)


def assess_project(project: Project, outputs: Path) -> Assessment:
    """Assess the map in `outputs` on the project's sample; writes outputs/assessment/. Raises LandassayError."""
    sample = read_reference(project, outputs / "map" / "cover.tif", outputs)
    assessment = estimate_sample(sample, project_options(project))
    write_assessment(assessment, outputs / "assessment")
    return assessment


def compare_project(project: Project, outputs: Path, other: Path) -> Comparison:
    """Compare the project's map (first) with another map of the same classes; writes outputs/comparison/.

    Raises LandassayError.
    """
    sample = read_reference(project, outputs / "map" / "cover.tif", outputs, other=other)
    comparison = compare_sample(sample, project_options(project), names=("the project's map", f"the map {other.name}"))
    write_comparison(comparison, outputs / "comparison")
    return comparison


def read_reference(project: Project, cover: Path, outputs: Path, *, other: Path | None = None) -> ReferenceSample:
    """The project's labelled sample with the classes of the map `cover` at its points, and those of a second map.

    cover, other: maps of the project's class codes, 0 where there is no data. outputs: the folder with map/areas.csv
    and, where the sample was drawn here, sample/design.json. Raises DataError, SampleError.
    """
    settings = _settings(project)
    recover(outputs / "sample")
    frame = read_points(project, settings)
    areas = read_areas(outputs / "map" / "areas.csv")
    design, warnings = design_of(project, settings, frame, outputs, cover)
    if design is not None:
        frame, found = as_drawn(frame, settings, design)
        warnings += found
    points = _points_table(frame, settings, project.classes)
    points["map"] = _classes_at(cover, frame, project.classes)
    if other is not None:
        points["other_map"] = _classes_at(other, frame, project.classes)
    if not (points["map"] != "").any():
        raise SampleError("no point of the reference sample lies on the map", where=settings.points,
                          fix="check the CRS of the points, and that this is the map they were drawn for")  # fmt: skip
    kind: DesignKind = "simple random"
    strata = areas.assign(stratum=_WHOLE_MAP).groupby("stratum", as_index=False)[["area_m2", "pixels"]].sum()
    mapped = areas if design is None else _mapped_within(design, areas, cover)
    if design is not None:
        points["stratum"], kind, strata = stratum_of(frame, settings, design), design.kind, design.strata
        if settings.cluster is None and design.cluster_of:
            points["cluster"] = frame["id"].map(plain_text).map(design.cluster_of)
    if mapped is None:
        warnings.append(_OTHER_POPULATION)
    elif len(strata) == 1:
        points, strata, found = _post_stratified(points, strata, mapped)
        warnings += found
    options = replace(
        project_options(project, kind=kind), mapped_area=_mapped_area(project, mapped),
        reservations=("design assumed",) if design is None else design.reservations,
    )  # fmt: skip
    strata = strata.assign(area=strata["area_m2"] / M2_PER_UNIT[project.report.area_unit])
    sample = sample_from_points(points, strata, options, may_lie_off_map=True)
    return sample.with_problems(tuple(warnings))


def read_labels(project: Project) -> dict[str, int]:
    """Number of points by label (class name; "" for points without one), read without a map.

    Raises DataError or SampleError, as `read_reference` does for the same file.
    """
    settings = project.reference
    if settings is None:
        return {}
    labels = _points_table(read_points(project, settings), settings, project.classes)["reference"]
    return {str(name): int(count) for name, count in labels.value_counts().sort_index().items()}


def project_options(project: Project, *, kind: DesignKind | None = None) -> AssessmentOptions:
    """What a project file says of how to assess."""
    settings = _settings(project)
    return AssessmentOptions(
        confidence_level=project.report.confidence_level, interval=project.report.interval, seed=project.project.seed,
        kind=kind, evidence=settings.evidence, classes=tuple(c.name for c in project.classes), merge=settings.merge,
        area_unit=project.report.area_unit, points=TableName(settings.points),
    )  # fmt: skip


def read_areas(path: Path) -> pd.DataFrame:
    """Mapped pixels and ground area per class: columns code, name, pixels, area_m2. Raises DataError."""
    try:
        table = read_table(path)[["code", "name", "pixels", "area_m2"]]
        return table.astype({"code": int, "name": object, "pixels": int, "area_m2": float})
    except (DataError, KeyError, ValueError, OverflowError) as error:
        raise DataError(f"the areas of the map cannot be read: {error}", where=str(path),
                        fix="run 'landassay classify' again") from error  # fmt: skip


def codes_at(cover: Path, points: geopandas.GeoSeries) -> NDArray[np.uint8]:
    """Class codes (uint8, (n,)) of a map at points in any CRS; 0 where it has no data, and outside of it.

    Only the blocks that points fall on are read. Raises DataError.
    """
    try:
        with open_raster(str(cover)) as source:
            if source.crs is None:
                raise DataError("the map has no CRS", where=str(cover))
            grid = Grid(source.crs, source.transform, source.height, source.width)
            there = points.to_crs(source.crs)
            rows, cols = grid.rowcol(there.x.to_numpy(), there.y.to_numpy())
            inside = grid.contains(rows, cols)
            codes = np.zeros(len(there), dtype=np.uint8)
            block = rows // _BLOCK_PX * (1 + grid.width // _BLOCK_PX) + cols // _BLOCK_PX
            for number in np.unique(block[inside]):
                here = np.flatnonzero(inside & (block == number))
                row, col = int(rows[here].min()), int(cols[here].min())
                height, width = int(rows[here].max()) - row + 1, int(cols[here].max()) - col + 1
                values = source.read(1, window=RasterWindow(col, row, width, height))
                codes[here] = values[rows[here] - row, cols[here] - col]
    except RasterioError as error:
        raise DataError(f"the map cannot be read: {error}", where=str(cover)) from error
    return codes


def _settings(project: Project) -> ReferenceSettings:
    if project.reference is None:
        raise SampleError("the project has no reference sample", where=project.file.name,
                          fix="add a section [reference] with 'points' and 'label'")  # fmt: skip
    return project.reference


def read_points(project: Project, settings: ReferenceSettings) -> geopandas.GeoDataFrame:
    """The records of the project's reference sample, checked to be single points with the columns it names.

    Raises DataError.
    """
    path = project.path(settings.points)
    frame = read_places(path, "reference points", layer=settings.layer, setting="[reference] points")
    there = [column for column in frame.columns if column != frame.geometry.name]
    wanted = (settings.label, settings.alternate, settings.stratum, settings.cluster, settings.region)
    problems = [
        Problem(f"there is no column {column!r}", path, f"its columns are {', '.join(map(repr, there))}")
        for column in wanted if column is not None and column not in there
    ]  # fmt: skip
    odd = np.flatnonzero((frame.geometry.geom_type != "Point").to_numpy() | frame.geometry.is_empty.to_numpy())
    if len(odd):
        problems.append(
            Problem(f"{len(odd)} records are not single points, first record {odd[0] + 1}", path,
                    "give one point per record; turn polygons into points before")
        )  # fmt: skip
    raise_if_errors(problems, DataError)
    return frame.reset_index(drop=True)


def class_lookup(classes: Sequence[ClassSettings]) -> dict[str, str]:
    """What a label may say, casefolded -> class name: the name whatever its case, or the code."""
    return {c.name.casefold(): c.name for c in classes} | {str(c.code): c.name for c in classes}


def _points_table(
    frame: geopandas.GeoDataFrame, settings: ReferenceSettings, classes: Sequence[ClassSettings]
) -> pd.DataFrame:
    """Labels as class names ("" where there is none), by name whatever its case, or by code; and the other columns."""
    lookup = class_lookup(classes)
    name, table, problems = TableName(settings.points), pd.DataFrame(index=frame.index), []
    # Two records at one place are one point.
    table["id"] = [f"{x!r}, {y!r}" for x, y in zip(frame.geometry.x, frame.geometry.y, strict=True)]
    for target, column in (("reference", settings.label), ("alternate", settings.alternate)):
        if column is None:
            continue
        labels = Labels.of(frame[column]).without(settings.unlabelled)
        labels = labels.renamed({given: lookup.get(given.casefold(), given) for given in labels.names})
        strange = ~labels.blank & (labels.places_in([c.name for c in classes]) == NO_LABEL)
        fix = (
            f"classes are {', '.join(repr(c.name) for c in classes)}; list labels for 'could not tell' in 'unlabelled'"
        )
        problems += faults(strange, labels, column, name, lambda value: f"{value!r} is no class", fix)
        table[target] = [labels.text(i) for i in range(len(frame))]
    raise_if_errors(problems, SampleError)
    for target, column in (("cluster", settings.cluster), ("region", settings.region)):
        if column is not None:
            table[target] = frame[column]
    return table


def _classes_at(cover: Path, frame: geopandas.GeoDataFrame, classes: Sequence[ClassSettings]) -> list[str]:
    """Class names of a map at the points, "" off the map."""
    codes = codes_at(cover, frame.geometry)
    names = {0: ""} | {c.code: c.name for c in classes}
    strange = sorted({int(code) for code in np.unique(codes)} - set(names))
    if strange:
        raise DataError(f"the map holds code {strange[0]}, which is no class of the project", where=str(cover))
    return [names[int(code)] for code in codes]


def _mapped_within(design: RecordedDesign, areas: pd.DataFrame, cover: Path) -> pd.DataFrame | None:
    """Mapped areas by class (columns name, pixels, area_m2) within the population of the design; None where unknown.

    areas: those of the whole map. They are the population's where nothing of the map was left out and both have as many
    pixels and as much area: so it is for a newer map of the same scene. Else the design may tell, of its own map alone.
    """
    same = design.strata["pixels"].sum() == areas["pixels"].sum() and np.isclose(
        design.strata["area_m2"].sum(), areas["area_m2"].sum(), rtol=1e-3
    )
    if design.whole and same:
        return areas
    if design.class_areas is not None and design.drawn_from.sha256 == sha256(cover):
        return design.class_areas
    return None


def _mapped_area(project: Project, mapped: pd.DataFrame | None) -> dict[str, float | None]:
    """Mapped area by class in the project's unit: 0 for classes that are not mapped, None where nothing is known."""
    if mapped is None:
        return {c.name: None for c in project.classes}
    unit = M2_PER_UNIT[project.report.area_unit]
    known = dict(zip(mapped["name"], mapped["area_m2"] / unit, strict=True))
    return {c.name: float(known.get(c.name, 0.0)) for c in project.classes}


def _post_stratified(
    points: pd.DataFrame, strata: pd.DataFrame, areas: pd.DataFrame
) -> tuple[pd.DataFrame, pd.DataFrame, list[Problem]]:
    """A sample of one stratum sharpened by the known areas of the map's classes, where each has points enough."""
    on_map = (points["map"] != "").to_numpy()
    off = int((~on_map).sum())
    labelled = points.loc[on_map & (points["reference"] != "").to_numpy(), "map"].value_counts()
    classes = areas.loc[areas["area_m2"] > 0, ["name", "area_m2", "pixels"]].rename(columns={"name": "stratum"})
    if (classes["stratum"].map(labelled).fillna(0) < 2).any():
        return points.assign(stratum=str(strata["stratum"].iat[0])), strata, []
    what = f"{off} points lie outside the map or where it has no data, and are left out"
    found = [Problem(what, severity="warning")] if off else []
    # Strata made of map classes hold no point off the map.
    points = points[on_map].reset_index(drop=True)
    return points.assign(stratum=points["map"]), classes, found
