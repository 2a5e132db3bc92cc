"""`landassay classify`: map the scene with the trained model."""

from __future__ import annotations

import click

from classify.cli.common import Call, common_options
from classify.cli.run import run_stages


@click.command("classify", help="Map the scene with the trained model.")
@click.option("--force", is_flag=True, help="Do it again even if nothing has changed.")
@common_options
def command(call: Call, force: bool) -> None:
    """Run the stage if it is stale."""
    run_stages(call, ["classify"], force=force)
