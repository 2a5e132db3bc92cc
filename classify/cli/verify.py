"""`landassay verify`: check a delivered report against its own tables and fingerprints. Needs no project."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path

import click

from classify.cli.common import echo_json, say


@click.command("verify", help="Check a delivered report: fingerprints, numbers derived again, cells as printed.")
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--quiet", is_flag=True, help="Say nothing but what differs.")
@click.option("--json", "as_json", is_flag=True, help="Machine-readable result on standard output.")
def command(folder: Path, quiet: bool, as_json: bool) -> None:
    """Say what differs; exit with 1 if anything does."""
    from classify.report import verify

    result = verify(folder)
    if as_json:
        echo_json({"sound": result.sound, **asdict(result)})
    else:
        for finding in result.findings:
            say(f"{finding.where}: {finding.what}", err=True)
        for note in () if quiet else result.notes:
            say(f"note: {note}", err=True)
        if not quiet:
            checked = (
                f"{result.files} files, {result.derived:,} numbers derived again, {result.printed:,} cells as printed"
            )
            differing = f"{len(result.findings)} differences" if result.findings else "nothing differs"
            say(f"{checked}: {differing}")
    if not result.sound:
        raise click.exceptions.Exit(1)
