"""`landassay classify`: map the scene, or many, with the trained model."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from classify.cli.common import Call, common_options
from classify.cli.run import run_stages

if TYPE_CHECKING:
    from classify.mapping.many import ManyResult

_HELP = """Map the scene with the trained model.

With SCENES, map these instead of the scene of the project: folders that hold files with the names of the project's
bands, folders of such folders or of STAC items, STAC items, or text files with one of these per line.
"""


@click.command("classify", help=_HELP)
@click.argument("scenes", nargs=-1)
@click.option("--force", is_flag=True, help="Do it again even if nothing has changed.")
@click.option("--out", type=click.Path(path_type=Path), help="With SCENES: where the maps go [default: outputs/maps].")
@click.option("--overwrite", is_flag=True, help="With SCENES: replace maps made from other inputs.")
@click.option("--skip-unreadable", is_flag=True, help="Map blocks that cannot be read as no data, and count them.")
@click.option("--cluster", metavar="ADDRESS", help="Compute on a Dask cluster: the address of its scheduler.")
@common_options
def command(
    call: Call,
    *,
    scenes: tuple[str, ...],
    force: bool,
    out: Path | None,
    overwrite: bool,
    skip_unreadable: bool,
    cluster: str | None,
) -> None:
    """Run the stage if it is stale, or map the scenes given."""
    if not scenes:
        if out or overwrite:
            raise click.UsageError("--out and --overwrite go with SCENES")
        run_stages(call, ["classify"], force=force, cluster=cluster, skip_unreadable=skip_unreadable)
        return
    if force:
        raise click.UsageError("with SCENES, use --overwrite instead of --force")
    from classify.workflow import Job, map_scenes

    job = Job(call.project(), call.jobs, call.progress(), cluster, skip_unreadable)
    result = map_scenes(job, scenes, out or job.outputs / "maps", overwrite=overwrite)
    _show(call, result)
    if result.failed:
        raise SystemExit(1)


def _show(call: Call, result: ManyResult) -> None:
    content = {
        "mapped": list(result.mapped),
        "kept": list(result.kept),
        "failed": {name: [str(problem) for problem in problems] for name, problems in result.failed.items()},
        "warnings": {name: [str(problem) for problem in problems] for name, problems in result.warnings.items()},
        "areas": result.areas.to_dict("records"),
    }
    lines = [f"{len(result.mapped)} scenes mapped, {len(result.kept)} up to date, {len(result.failed)} failed"]
    if len(result.areas):
        total = result.areas.groupby(["code", "name", "unit"], sort=True)[["pixels", "area"]].sum().reset_index()
        lines += [f"  {row.name}: {row.area:,.1f} {row.unit}" for row in total.itertuples(index=False)]
    call.show(content, "\n".join(lines))
    for kind, found in (("failed", result.failed), ("warning", result.warnings)):
        for name, problems in found.items():
            for problem in problems:
                call.warn(f"{kind}: {name}: {problem}")
