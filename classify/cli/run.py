"""`landassay run`: every stage that is stale, in order."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

from classify.cli.common import Call, common_options

if TYPE_CHECKING:
    from classify.workflow import StageName, StageResult


@click.command("run", help="Run every stage that is stale, in order.")
@click.option("--force", is_flag=True, help="Run all stages, also those that are up to date.")
@common_options
def command(call: Call, force: bool) -> None:
    """Run and say what was done."""
    from classify.workflow import Job, run

    job = Job(call.project(), call.jobs, call.progress())
    results = run(job, force=force)
    show_stages(call, results)
    report = job.outputs / "report" / "report.html"
    if not call.as_json and not call.quiet and report.is_file():
        click.echo(f"\nThe report: {report}")


def show_stages(call: Call, results: dict[StageName, StageResult | None]) -> None:
    """Render stage results: one paragraph per stage as text, everything as JSON."""
    from classify.cli.render import stage_text

    content = {
        name: {"state": "up to date"}
        if result is None
        else {"state": "run", **result.summary, "warnings": [str(w) for w in result.warnings]}
        for name, result in results.items()
    }
    call.show(content, "\n".join(stage_text(name, result) for name, result in results.items()))
    for result in results.values():
        for warning in result.warnings if result else ():
            call.warn(f"warning: {warning}")
