"""`landassay status`: which stages are done, stale or missing, and why."""

from __future__ import annotations

import click

from classify.cli.common import Call, common_options


@click.command("status", help="Say which stages are done, stale or missing.")
@common_options
def command(call: Call) -> None:
    """Show the state of every stage."""
    from classify.workflow import status

    project = call.project()
    stages = status(project)
    width = max(len(stage.state) for stage in stages)
    lines = [f"{stage.name:<10}{stage.state:<{width}}  {stage.why}".rstrip() for stage in stages]
    content = [{"stage": stage.name, "state": stage.state, "why": stage.why} for stage in stages]
    call.show({"project": project.project.title, "stages": content}, "\n".join([project.project.title, *lines]))
