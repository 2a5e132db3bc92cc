"""`landassay assess`: accuracy and areas from a labelled reference sample, of a project or from tables alone."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from classify.cli.common import Call, common_options

if TYPE_CHECKING:
    from classify.assessment import Assessment, AssessmentOptions


@click.command(
    "assess",
    help="Estimate accuracy and areas from a labelled reference sample: of the project or, with --points or --matrix, from "
    "tables alone.",
)
@click.option("--points", type=click.Path(path_type=Path), help="CSV: stratum, map, reference; optional cluster.")
@click.option("--matrix", type=click.Path(path_type=Path), help="CSV of counts: rows map, columns reference.")
@click.option("--strata", type=click.Path(path_type=Path), help="CSV: stratum, area or pixels; optional mapped_as.")
@click.option("--out", type=click.Path(path_type=Path), help="Folder for the results of a run from tables.")
@click.option(
    "--pixel-area", type=click.FloatRange(min=0, min_open=True), help="Area of a pixel, where strata give pixels."
)
@click.option("--unit", "area_unit", default="", help="Name of the area unit, for the tables.")
@click.option("--confidence", type=click.FloatRange(0.5, 1, min_open=True, max_open=True), default=0.95, show_default=True,
              help="Confidence level of intervals (tables only; a project states its own).")  # fmt: skip
@click.option("--force", is_flag=True, help="Do it again even if nothing has changed (project only).")
@common_options
def command(  # noqa: PLR0917 - one parameter per option
    call: Call, points: Path | None, matrix: Path | None, strata: Path | None, out: Path | None,
    pixel_area: float | None, area_unit: str, confidence: float, force: bool,
) -> None:  # fmt: skip
    """Run the project's stage, or assess from tables."""
    if points is None and matrix is None:
        if strata or out:
            raise click.UsageError("--strata and --out go with --points or --matrix")
        _project(call, force)
        return
    if points is not None and matrix is not None:
        raise click.UsageError("give either --points or --matrix, not both")
    if out is None:
        raise click.UsageError("--out is needed: the folder to write to")
    from classify.assessment import AssessmentOptions
    from classify.assessment.options import TableName

    table = points or matrix
    assert table is not None
    options = AssessmentOptions(
        confidence_level=confidence, pixel_area=pixel_area, area_unit=area_unit,
        points=TableName(str(table), 2), strata=TableName(str(strata), 2),
    )  # fmt: skip
    _tables(call, table, matrix is not None, strata, out, options)


def _project(call: Call, force: bool) -> None:
    from classify.cli.run import show_stages
    from classify.workflow import Job, run

    show_stages(call, run(Job(call.project(), call.jobs, call.progress()), ["assess"], force=force))


def _tables(
    call: Call, table: Path, is_matrix: bool, strata: Path | None, out: Path, options: AssessmentOptions
) -> None:
    from classify.assessment import assess, assess_matrix, write_assessment
    from classify.assessment.inputs import read_table

    of_strata = None if strata is None else read_table(strata)
    assessment = (assess_matrix if is_matrix else assess)(read_table(table), of_strata, options)
    write_assessment(assessment, out)
    call.show(assessment.to_json(), _text(assessment, out))
    for warning in assessment.warnings:
        call.warn(f"warning: {warning}")


def _text(assessment: Assessment, out: Path) -> str:
    from classify.cli.render import assessment_text

    return f"{assessment_text(assessment.to_json())}\nwritten to {out}"
