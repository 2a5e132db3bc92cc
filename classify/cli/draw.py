"""`landassay draw`: draw the reference sample, add to it, replace what cannot be reached."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from classify.cli.common import Call, common_options, refuse_spoken
from classify.cli.plan import ALLOCATIONS, Assigned

if TYPE_CHECKING:
    from classify.assessment.design import Allocation
    from classify.assessment.draw import DrawKind
    from classify.assessment.drawn_sample import DrawnSample

_KINDS: dict[str, DrawKind] = {
    "stratified": "stratified random", "simple": "simple random", "systematic": "systematic",
}  # fmt: skip


@click.command(
    "draw",
    help="""Draw the reference sample from the map, with the sizes of 'plan' or those given here.

    Writes points.gpkg (and .gpx, .geojson, .csv) without map class or stratum, and design.json, which holds the key:
    keep it from whoever labels. A sample that was drawn is never drawn over.""",
)
@click.option("--points", type=click.IntRange(min=1), help="Points in all; without it, the sizes of 'plan'.")
@click.option("--in", "sizes", type=Assigned(), multiple=True, help="Points of one stratum, such as --in 'Water=60'.")
@click.option("--allocation", type=click.Choice(ALLOCATIONS), help="How --points are spread; floor unless given.")
@click.option("--floor", type=click.IntRange(min=2), default=50, show_default=True, help="Least points per stratum.")
@click.option("--kind", type=click.Choice(list(_KINDS)), default="stratified", show_default=True, help="Design.")
@click.option("--reserve", type=click.IntRange(min=0), default=0, help="Reserve points per stratum.")
@click.option("--apart", type=click.FloatRange(min=0), default=0.0, help="Least distance between points, metres.")
@click.option("--segment", type=click.IntRange(min=1), default=1, help="Draw squares of so many pixels a side.")
@click.option("--away-from-training", type=click.FloatRange(min=0),
              help="Leave out training polygons and so many metres around them.")  # fmt: skip
@click.option("--map", "map_file", type=click.Path(path_type=Path), help="Another map of the project's class codes.")
@click.option("--seed", type=click.IntRange(0, 2**32 - 1), help="In place of the project's seed.")
@click.option("--add", type=click.IntRange(min=1), help="Add so many points to the sample that was drawn.")
@click.option("--add-to", type=Assigned(), multiple=True, help="Add points of one stratum, such as 'Water=20'.")
@click.option("--replace", "replaced", help="Id of a point that cannot be reached.")
@click.option("--reason", default="", help="Why, with --replace.")
@common_options
def command(
    call: Call,
    *,
    add: int | None,
    add_to: tuple[tuple[str, float], ...],
    replaced: str | None,
    reason: str,
    **fresh: Any,  # noqa: ANN401 - options of many types
) -> None:
    """Draw, add or replace; then show the sample."""
    from classify.assessment.project_sample import add_to_sample, replace_point

    if sum((add is not None, bool(add_to), replaced is not None)) > 1:
        raise click.UsageError("give one of --add, --add-to and --replace")
    if replaced is None:
        refuse_spoken(["reason"], "only with --replace")
    if replaced is not None or add is not None or add_to:
        refuse_spoken(list(fresh), "only for a first draw; points that come later are drawn as the first ones were")
    else:
        _refuse_unused(fresh)
    project = call.project()
    outputs = project.folder / "outputs"
    said = ""
    if replaced is not None:
        sample, new = replace_point(project, outputs, replaced, reason)
        said = f"point {replaced} is replaced by point {new}"
    elif add is not None or add_to:
        more = add if add is not None else _counts(add_to)
        sample = add_to_sample(project, outputs, more, call.jobs, call.progress())
    else:
        sample = _draw(call, outputs, **fresh)
    folder = outputs / "sample"
    design = {key: value for key, value in sample.design.items() if key not in ("points", "reserves")}
    call.show({**design, "folder": str(folder)}, "\n".join(filter(None, [said, _text(sample), f"written to {folder}"])))
    for note in (*sample.design["notes"], *sample.design["cautions"]):
        call.warn(f"note: {note}")


def _refuse_unused(fresh: dict[str, Any]) -> None:
    """Raise UsageError for options that would change nothing about this draw."""
    if fresh["kind"] != "stratified":
        refuse_spoken(["sizes", "allocation", "floor"], "only with --kind stratified")
    elif fresh["points"] is None:
        refuse_spoken(["floor"], "only with --points; 'plan' has its own")
        if fresh["sizes"]:
            refuse_spoken(["allocation"], "only with --points, or the sizes of 'plan'")
    elif fresh["allocation"] not in (None, "floor"):
        refuse_spoken(["floor"], "only with --allocation floor")


def _draw(  # noqa: PLR0917 - options
    call: Call, outputs: Path, points: int | None, sizes: tuple[tuple[str, float], ...], allocation: Allocation | None,
    floor: int, kind: str, reserve: int, apart: float, segment: int, away_from_training: float | None,
    map_file: Path | None, seed: int | None,
) -> DrawnSample:  # fmt: skip
    from classify.assessment.draw import DrawOptions
    from classify.assessment.project_sample import SampleRequest, draw_sample

    project = call.project()
    options = DrawOptions(
        _KINDS[kind], project.project.seed if seed is None else seed, reserve, apart, segment, call.jobs
    )
    request = SampleRequest(options, points, _counts(sizes), allocation, floor, away_from_training, map_file)
    return draw_sample(project, outputs, request, call.progress())


def _counts(given: tuple[tuple[str, float], ...]) -> dict[str, int]:
    for name, number in given:
        if number < 0 or number != int(number):
            raise click.UsageError(f"{name}={number:g} is not a whole number of points")
    return {name: int(number) for name, number in given}


def _text(sample: DrawnSample) -> str:
    from classify.cli.render import table

    design = sample.design
    rows = [[s["stratum"], f"{s['pixels']:,}", f"{s['n']:,}"] for s in design["strata"]]
    head = [design["kind"], "pixels", "points" if design["unit"]["kind"] == "pixel" else "segments"]
    return f"{table(head, rows)}\n{len(sample.active_ids):,} points to label"
