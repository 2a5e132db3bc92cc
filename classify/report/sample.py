"""The labelled points behind the accuracy: as a table to derive the numbers from, and as dots on the map."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import geopandas
import numpy as np
import pandas as pd
from numpy.typing import NDArray

from classify.assessment import ReferenceSample, read_reference
from classify.assessment.reference import codes_at, read_points
from classify.assessment.sample import NO_LABEL
from classify.raster.sources import open_raster
from classify.report.facts import PointFact, SampleFacts
from classify.settings import Project


def sample_facts(
    project: Project, outputs: Path, assessment: Mapping[str, Any]
) -> tuple[SampleFacts | None, tuple[PointFact, ...]]:
    """The sample that `assessment` (assessment.json) rests on, and its labelled points on the map.

    (None, ()) where the points are no longer there. Raises DataError, SampleError.
    """
    settings, cover = project.reference, outputs / "map" / "cover.tif"
    if settings is None or not cover.is_file() or not Path(project.path(settings.points)).is_file():
        return None, ()
    sample = read_reference(project, cover, outputs)
    frame = read_points(project, settings)
    if len(frame) != len(sample.map):
        frame = frame[codes_at(cover, frame.geometry) != 0]
    # The assessment leaves points out (given twice, replaced, off the map). Where the rest cannot be matched, no place
    # is shown rather than a wrong one.
    placed = len(frame) == len(sample.map) and _aligned(sample, codes_at(cover, frame.geometry))
    ids = frame["id"].astype(str) if placed and "id" in frame else [str(i + 1) for i in range(len(sample.map))]
    table = points_table(sample, list(ids))
    method = _method(project, sample, assessment)
    points = _placed(table, frame, cover) if placed else ()
    return SampleFacts(table, _strata_table(sample), method, assessment), points


def _aligned(sample: ReferenceSample, codes: NDArray[np.uint8]) -> bool:
    """Whether points and codes of the map are in one order: each code then stands for one class of the sample."""
    pairs = pd.DataFrame({"code": codes, "map": sample.map})
    return bool((pairs.groupby("code")["map"].nunique() == 1).all())


def points_table(sample: ReferenceSample, ids: list[str]) -> pd.DataFrame:
    """One row per point: id, stratum, map, reference and, where the sample has them, alternate, cluster, region."""
    strata = np.array([s.name for s in sample.strata], dtype=object)
    columns: dict[str, Any] = {
        "id": ids, "stratum": strata[sample.stratum],
        "map": _names(sample.map, sample.classes), "reference": _names(sample.reference, sample.classes),
    }  # fmt: skip
    if sample.alternate is not None:
        columns["alternate"] = _names(sample.alternate, sample.classes)
    if sample.cluster is not None:
        columns["cluster"] = sample.cluster
    if sample.region is not None:
        columns["region"] = _names(sample.region, sample.regions)
    return pd.DataFrame(columns)


def _names(codes: NDArray[np.int64], names: tuple[str, ...]) -> list[str]:
    return ["" if code == NO_LABEL else names[code] for code in codes]


def _strata_table(sample: ReferenceSample) -> pd.DataFrame:
    columns: dict[str, Any] = {"stratum": [s.name for s in sample.strata], "area": [s.area for s in sample.strata]}
    for key in ("pixels", "clusters"):
        values = [getattr(s, key) for s in sample.strata]
        if all(value is not None for value in values):
            columns[key] = values
    return pd.DataFrame(columns)


def _method(project: Project, sample: ReferenceSample, assessment: Mapping[str, Any]) -> dict[str, Any]:
    """Keywords of `AssessmentOptions` that give `assessment` from the tables."""
    mapped = {name: area["mapped"] for name, area in assessment["area"].items()}
    return {
        "confidence_level": assessment["confidence_level"], "interval": project.report.interval,
        "seed": project.project.seed, "kind": sample.kind, "evidence": sample.evidence,
        "classes": list(assessment["classes"]), "area_unit": assessment["area_unit"], "mapped_area": mapped,
        "reservations": list(sample.reservations),
    }  # fmt: skip


def _placed(table: pd.DataFrame, frame: geopandas.GeoDataFrame, cover: Path) -> tuple[PointFact, ...]:
    with open_raster(str(cover)) as source:
        there = frame.geometry.to_crs(source.crs)
        cols, rows = ~source.transform @ (there.x.to_numpy(), there.y.to_numpy())
        places = list(zip(rows / source.height, cols / source.width, strict=True))
    return tuple(
        PointFact(str(p.id), (float(place[0]), float(place[1])), str(p.map), str(p.reference), str(p.stratum))
        for p, place in zip(table.itertuples(index=False), places, strict=True) if p.map and p.reference
    )  # fmt: skip
