"""`landassay plan`: what a reference sample of a given size buys, before it is drawn."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from classify.cli.common import Call, common_options, refuse_spoken

if TYPE_CHECKING:
    from classify.assessment.design import Allocation, Design, Measure
    from classify.assessment.plan import Plan

# Spelled here, so that --help need not import the library; a test holds them to the library's own list.
ALLOCATIONS = ("proportional", "equal", "neyman", "floor")
_MEASURES: dict[str, Measure] = {
    "overall": "overall accuracy", "users": "user's accuracy", "producers": "producer's accuracy", "area": "area",
}  # fmt: skip


class Assigned(click.ParamType[Any]):
    """NAME=NUMBER on the command line."""

    name = "NAME=NUMBER"

    def convert(self, value: object, param: click.Parameter | None, ctx: click.Context | None) -> tuple[str, float]:
        """Split at the last equals sign, as names may hold one."""
        if isinstance(value, tuple):
            return value
        name, sign, number = str(value).rpartition("=")
        try:
            return name.strip(), float(number if sign else "?")
        except ValueError:
            self.fail(f"{value!r} is not of the form NAME=NUMBER, such as 'Water=0.9'", param, ctx)


@click.command(
    "plan",
    help="""Compare sample sizes and allocations before drawing: give --points to see what they buy, or --half-width to
    see how many points it takes.

    Strata are the classes of the project's map, or the rows of --strata (columns stratum, area; optional pixels,
    accuracy). Writes plan.json and plan.svg.""",
)
@click.option("--points", type=click.IntRange(min=1), help="What is the best that so many points buy?")
@click.option("--half-width", type=float, help="Half of the interval wanted: a proportion, or an area in its unit.")
@click.option("--standard-error", type=float, help="The same as a standard error.")
@click.option("--of", "measure", type=click.Choice(list(_MEASURES)), default="overall", show_default=True,
              help="The estimate that the half-width is wanted for.")  # fmt: skip
@click.option("--class", "class_name", help="Its class, except for overall.")
@click.option("--accuracy", "accuracies", type=Assigned(), multiple=True,
              help="Conjectured user's accuracy of a class, 0..1; may be given for each.")  # fmt: skip
@click.option("--usual-accuracy", type=click.FloatRange(0, 1), default=0.85, show_default=True,
              help="That of classes not named.")  # fmt: skip
@click.option("--pilot", type=click.Path(path_type=Path), help="assessment.json of an earlier sample to learn from.")
@click.option("--allocation", type=click.Choice(ALLOCATIONS), default="floor", show_default=True,
              help="The one that 'draw' is to use.")  # fmt: skip
@click.option("--floor", type=click.IntRange(min=2), default=50, show_default=True,
              help="Least points per stratum of the allocation 'floor'.")  # fmt: skip
@click.option("--level", type=click.FloatRange(0.5, 1, min_open=True, max_open=True), default=0.95, show_default=True,
              help="Confidence level, with --strata; a project states its own.")  # fmt: skip
@click.option("--strata", type=click.Path(path_type=Path), help="Table of strata, in place of a project's map.")
@click.option("--out", type=click.Path(path_type=Path), help="Folder to write to, with --strata.")
@common_options
def command(
    call: Call,
    *,
    points: int | None,
    half_width: float | None,
    standard_error: float | None,
    measure: str,
    class_name: str | None,
    allocation: Allocation,
    floor: int,
    **source: Any,  # noqa: ANN401 - options of many types
) -> None:
    """Plan, write, show."""
    from classify.assessment.plan import PlanRequest, make_plan, write_plan
    from classify.files import write_text
    from classify.report.plan_figure import plan_drawing

    if [points, half_width, standard_error].count(None) != 2:
        raise click.UsageError("give one of --points, --half-width and --standard-error")
    if (measure == "overall") != (class_name is None):
        raise click.UsageError("--class goes with --of users, producers or area, and these need it")
    design, basis, unit, out = _design(call, **source)
    half_width = design.z * standard_error if standard_error is not None else half_width
    request = PlanRequest(points, half_width, _MEASURES[measure], class_name, allocation, floor)
    plan = make_plan(design, request, area_unit=unit, basis=basis)
    path = write_plan(plan, out)
    write_text(out / "plan.svg", plan_drawing(plan).markup())
    call.show(plan.to_json(), f"{_text(plan)}\nwritten to {path} and plan.svg")


def _design(  # noqa: PLR0917 - options
    call: Call, accuracies: tuple[tuple[str, float], ...], usual_accuracy: float, pilot: Path | None, level: float,
    strata: Path | None, out: Path | None,
) -> tuple[Design, str, str, Path]:  # fmt: skip
    from classify.assessment.plan import project_design, table_design

    if (strata is None) != (out is None):
        raise click.UsageError("--strata and --out go together")
    if strata is not None and out is not None:
        refuse_spoken(["project_path"], "not with --strata")
        return *table_design(strata, dict(accuracies), usual_accuracy, pilot, level), "", out
    refuse_spoken(["level"], "only with --strata; a project says this in its [report]")
    project = call.project()
    outputs = project.folder / "outputs"
    found = project_design(project, outputs, dict(accuracies), usual_accuracy, pilot)
    return *found, project.report.area_unit, outputs / "sample"


def _text(plan: Plan) -> str:
    from classify.assessment.plan import PLAN_CAUTION
    from classify.cli.render import table

    hows = list(plan.sizes)
    spent = sum(plan.sizes[plan.request.allocation])
    rows = [[s.name, *(f"{sizes[i]:,}" for sizes in plan.sizes.values())] for i, s in enumerate(plan.design.strata)]
    rows.append(["all", *(f"{sum(sizes):,}" for sizes in plan.sizes.values())])
    lines = [f"rests on {plan.basis}", "", table(["points", *hows], rows), ""]
    rows = []
    for quantity, alone in zip(plan.design.quantities, plan.alone, strict=True):
        shown = _area if quantity.measure == "area" else _points
        widths = [shown(width) for width in plan.half_widths(quantity).values()]
        value = _area(quantity.value) if quantity.measure == "area" else f"{100 * quantity.value:.1f} %"
        rows.append([quantity.name, value, *(f"± {width}" for width in widths), f"± {shown(alone)}"])
    lines.append(table([f"half-width, {plan.design.level:.0%}", "conjectured", *hows, f"{spent:,} for it alone"], rows))
    unit = f"areas in {plan.area_unit}" if plan.area_unit else "areas in the unit of the strata"
    lines.append(f"accuracies in percentage points, {unit}; 'draw' will use: {plan.request.allocation}")
    return "\n".join([*lines, PLAN_CAUTION])


def _points(width: float) -> str:
    return f"{100 * width:.1f}"


def _area(value: float) -> str:
    return f"{value:,.0f}" if value >= 1000 else f"{value:.3g}"
