"""The way in from data frames and tables, and the way out to files."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import pandas as pd

from classify.assessment.estimation import estimate_sample
from classify.assessment.inputs import sample_from_matrix, sample_from_points
from classify.assessment.options import AssessmentOptions
from classify.assessment.result import Assessment
from classify.assessment.user_folder import write_results
from classify.files import json_text
from classify.tables import csv_text

DEFAULTS = AssessmentOptions()


def assess(
    points: pd.DataFrame, strata: pd.DataFrame | None = None, options: AssessmentOptions = DEFAULTS
) -> Assessment:
    """Estimate accuracy and areas from labelled points.

    points: one row per point; columns stratum, map, reference (blank: could not be labelled); optional alternate
    (second label), cluster, region, id. strata: columns stratum and area (or pixels with `options.pixel_area`),
    optional mapped_as, clusters; None for a simple random sample of an area of unknown size. Raises SampleError naming
    table, row and column of every problem.
    """
    return estimate_sample(sample_from_points(points, strata, options), options)


def assess_matrix(
    matrix: pd.DataFrame, strata: pd.DataFrame | None = None, options: AssessmentOptions = DEFAULTS
) -> Assessment:
    """Estimate accuracy and areas from a square matrix of counts.

    matrix: the first column names the map class of each row, the other columns the reference classes. strata: as for
    `assess`; they are the map classes, or there is a single one. Raises SampleError.
    """
    return estimate_sample(sample_from_matrix(matrix, strata, options), options)


def write_assessment(assessment: Assessment, folder: Path, *, inputs: Sequence[Path] | None = None) -> list[Path]:
    """Write assessment.json and the tables as CSV into `folder`, each whole or not at all. Returns the paths.

    inputs: the files it was made from, where `folder` is of the user's choosing: neither they nor any file that was not
    written here is written over. Raises OutputError, and then has written nothing.
    """
    tables = {
        "accuracy.csv": assessment.accuracy_frame,
        "areas.csv": assessment.area_frame,
        "matrix.csv": assessment.matrix_frame,
        "strata.csv": assessment.strata_frame,
    }
    if assessment.regions:
        tables["regions.csv"] = assessment.region_frame
    files = {"assessment.json": json_text(assessment.to_json())}
    files |= {name: csv_text(table) for name, table in tables.items()}
    return write_results(folder, files, "assessment.files.json", inputs)
