"""`landassay report`: the report from what the other stages have written."""

from __future__ import annotations

import click

from classify.cli.common import Call, common_options
from classify.cli.run import run_stages


@click.command("report", help="Write the report.")
@click.option("--force", is_flag=True, help="Do it again even if nothing has changed.")
@common_options
def command(call: Call, force: bool) -> None:
    """Run the stage if it is stale."""
    run_stages(call, ["report"], force=force)
