"""`landassay run`: every stage that is stale, in order; and how any stage is run and shown."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import click

from classify.cli.common import Call, common_options, say

if TYPE_CHECKING:
    from classify.workflow import StageName, StageResult


@click.command("run", help="Run every stage that is stale, in order.")
@click.option("--force", is_flag=True, help="Run all stages, also those that are up to date.")
@common_options
def command(call: Call, force: bool) -> None:
    """Run and say what was done."""
    run_stages(call, None, force=force)
    report = call.project().folder / "outputs" / "report" / "report.html"
    if not call.as_json and not call.quiet and report.is_file():
        say(f"\nThe report: {report}")


def run_stages(
    call: Call,
    stages: Sequence[StageName] | None,
    *,
    force: bool,
    cluster: str | None = None,
    skip_unreadable: bool = False,
) -> None:
    """Run stages of the project, showing each as it ends: a few lines as text, everything at the end as JSON."""
    from classify.cli.render import stage_text
    from classify.workflow import Job, run

    said: set[str] = set()

    def show(name: StageName, result: StageResult | None) -> None:
        if not call.as_json:
            call.show({}, stage_text(name, result))
        # Stages that read the same polygons warn of the same things; once is enough on the screen.
        for warning in dict.fromkeys(map(str, result.warnings if result else ())):
            if warning not in said:
                call.warn(f"warning: {warning}")
            said.add(warning)

    job = Job(call.project(), call.jobs, call.progress(), cluster, skip_unreadable)
    results = run(job, stages, force=force, done=show)
    if call.as_json:
        call.show({name: _content(result) for name, result in results.items()}, "")


def _content(result: StageResult | None) -> dict[str, object]:
    if result is None:
        return {"state": "up to date"}
    return {"state": "run", **result.summary, "warnings": [str(warning) for warning in result.warnings]}
