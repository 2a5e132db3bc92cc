"""`landassay compare`: two maps on one reference sample, of a project or from tables alone."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from classify.cli.common import Call, common_options
from classify.cli.sample_tables import SampleTables, table_options

if TYPE_CHECKING:
    from classify.assessment import Comparison


@click.command(
    "compare",
    help="""Compare two maps on one reference sample: the project's map with OTHER_MAP, a raster of the same class
    codes; or, with --points, two maps of which a table tells the classes.

    Points have the columns of 'assess' and other_map, the class on the second map.""",
)
@click.argument("other_map", required=False, type=click.Path(path_type=Path))
@table_options
@common_options
def command(call: Call, other_map: Path | None, tables: SampleTables) -> None:
    """Compare, and write comparison.json and comparison.csv."""
    if (other_map is None) == (tables.points is None):
        raise click.UsageError("name the other map (a raster), or give --points with a column other_map")
    if other_map is not None:
        tables.refuse()
        comparison, out = _project(call, other_map)
    else:
        tables.refuse_unused()
        comparison, out = _tables(tables)
    call.show(comparison.to_json(), f"{_text(comparison)}\nwritten to {out}")
    for warning in comparison.warnings:
        call.warn(f"warning: {warning}")


def _project(call: Call, other_map: Path) -> tuple[Comparison, Path]:
    from classify.assessment import compare_project

    project = call.project()
    outputs = project.folder / "outputs"
    return compare_project(project, outputs, other_map), outputs / "comparison"


def _tables(tables: SampleTables) -> tuple[Comparison, Path]:
    from classify.assessment import compare, write_comparison

    out, points = tables.require_out(), tables.points
    assert points is not None
    comparison = compare(*tables.read(points))
    write_comparison(comparison, out, inputs=tables.files(points))
    return comparison, out


def _text(comparison: Comparison) -> str:
    from classify.cli.render import percent, table

    rows = []
    for measure, pairs in (("user's", comparison.users_accuracy), ("producer's", comparison.producers_accuracy)):
        for name, pair in pairs.items():
            d = pair.difference
            interval = "-" if d.lower is None or d.upper is None else f"{100 * d.lower:+.1f} to {100 * d.upper:+.1f}"
            change = "-" if d.estimate is None else f"{100 * d.estimate:+.1f}"
            rows.append(
                [f"{name}, {measure}", percent(pair.first.estimate), percent(pair.second.estimate), change, interval]
            )
    head = ["accuracy", "first", "second", "points", f"{100 * comparison.confidence_level:g} % interval"]
    return f"{comparison.in_words}\n{table(head, rows)}"
