"""`landassay assess`: accuracy and areas from a labelled reference sample, of a project or from tables alone."""

from __future__ import annotations

from pathlib import Path

import click

from classify.cli.common import Call, common_options
from classify.cli.run import run_stages
from classify.cli.sample_tables import SampleTables, table_options


@click.command(
    "assess",
    help="""Estimate accuracy and areas from a labelled reference sample: that of the project or, with --points or
    --matrix, one in tables alone.

    Points have columns stratum, map, reference (blank: could not be labelled) and, optionally, alternate, cluster,
    region, id. A matrix holds counts: its first column names the map class of each row, the others the reference
    classes.""",
)
@click.option("--matrix", type=click.Path(path_type=Path), help="CSV of counts: rows map, columns reference.")
@click.option("--force", is_flag=True, help="Do it again even if nothing has changed (project only).")
@table_options
@common_options
def command(call: Call, matrix: Path | None, force: bool, tables: SampleTables) -> None:
    """Run the project's stage, or assess from tables."""
    if tables.points is None and matrix is None:
        tables.refuse()
        run_stages(call, ["assess"], force=force)
    elif tables.points is None or matrix is None:
        tables.refuse_unused(matrix=matrix is not None)
        _tables(call, matrix, tables)
    else:
        raise click.UsageError("give either --points or --matrix, not both")


def _tables(call: Call, matrix: Path | None, tables: SampleTables) -> None:
    from classify.assessment import assess, assess_matrix, write_assessment
    from classify.cli.render import assessment_text

    out, file = tables.require_out(), matrix or tables.points
    assert file is not None
    assessment = (assess if matrix is None else assess_matrix)(*tables.read(file))
    write_assessment(assessment, out, inputs=tables.files(file))
    call.show(assessment.to_json(), f"{assessment_text(assessment.to_json())}\nwritten to {out}")
    for warning in assessment.warnings:
        call.warn(f"warning: {warning}")
