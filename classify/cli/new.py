"""`landassay new`: start a project, or export the schema of project files."""

from __future__ import annotations

from pathlib import Path

import click

from classify.cli.common import Call, common_options, echo_json


@click.command("new", help="Start a project in FOLDER (default: the current one), or export the schema.")
@click.argument("folder", required=False, type=click.Path(path_type=Path, file_okay=False))
@click.option(
    "--scene", "source", help="A product folder, a stack of bands, or a STAC item (file or https address) to recognise."
)
@click.option("--seed", type=click.IntRange(0, 2**32 - 1), default=1, show_default=True, help="The project's seed.")
@click.option("--schema", is_flag=True, help="Only print the JSON Schema of project files, for editors.")
@common_options
def command(call: Call, folder: Path | None, source: str | None, seed: int, schema: bool) -> None:
    """Write a commented project file, never over one that is there."""
    from classify.settings import project_schema
    from classify.settings.starter import PLACEHOLDER, start_project

    if schema:
        echo_json(project_schema())
        return
    target, draft = folder or call.project_path, PLACEHOLDER
    if source is not None:
        from classify.raster.discover import discover, relative_to

        draft = relative_to(discover(source), target)
    written = start_project(target, draft, seed=seed)
    result = {"project": str(written), "assumptions": list(draft.assumptions)}
    lines = [f"Started {written}", *(f"  assumed: {text}" for text in draft.assumptions)]
    lines.append("Next: edit it, then 'landassay check' lists what is still wrong or missing.")
    call.show(result, "\n".join(lines))
