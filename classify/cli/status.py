"""`landassay status`: which stages are done, stale or missing, and which model there is."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import click

from classify.cli.common import Call, common_options
from classify.cli.render import percent


@click.command("status", help="Say which stages are done, stale or missing.")
@common_options
def command(call: Call) -> None:
    """Show the state of every stage."""
    from classify.workflow import model_facts, status

    project = call.project()
    stages, model = status(project), model_facts(project)
    width = max(len(stage.state) for stage in stages)
    lines = [project.project.title]
    lines += [f"{stage.name:<10}{stage.state:<{width}}  {stage.why}".rstrip() for stage in stages]
    if model is not None:
        lines.append(_model_text(model))
    content = [{"stage": stage.name, "state": stage.state, "why": stage.why} for stage in stages]
    call.show({"project": project.project.title, "stages": content, "model": model}, "\n".join(lines))


def _model_text(model: Mapping[str, Any]) -> str:
    accuracy = percent(model["screening_accuracy"])
    return (
        f"model: {model['kind']}, {len(model['classes'])} classes, {len(model['features'])} features from bands "
        f"{', '.join(model['needs'])}; screening accuracy {accuracy}"
    )
