"""The command `landassay`: imports only the command asked for, and turns our errors into exit code 1."""

from __future__ import annotations

import errno
import sys
from importlib import import_module

import click

from classify import __version__
from classify.cli.common import say
from classify.cli.surroundings import Stopping, ensure_utf8, hush_libraries, prepare_streams

# command -> (module that defines `command`, one line of help). Kept here so that --help imports nothing else.
COMMANDS = {
    "new": ("classify.cli.new", "Start a project, or export the schema of project files."),
    "check": ("classify.cli.check", "Read everything, touch nothing, list every problem."),
    "train": ("classify.cli.train", "Fit the model and screen it on held-out polygons."),
    "classify": ("classify.cli.classify", "Map the scene with the trained model."),
    "plan": ("classify.cli.plan", "Plan a reference sample: its size and allocation."),
    "draw": ("classify.cli.draw", "Draw the reference sample, without giving the map away."),
    "interpret": ("classify.cli.interpret", "Label the reference sample in the browser, blind to the map."),
    "assess": ("classify.cli.assess", "Estimate accuracy and areas from a labelled reference sample."),
    "compare": ("classify.cli.compare", "Compare two maps on one reference sample."),
    "report": ("classify.cli.report", "Write the report."),
    "verify": ("classify.cli.verify", "Check a delivered report: fingerprints, and every number derived again."),
    "run": ("classify.cli.run", "Run every stage that is stale, in order."),
    "status": ("classify.cli.status", "Say which stages are done, stale or missing."),
}


# Failures of the machine rather than of this program, wherever they come up.
_MACHINE = {errno.ENOSPC, errno.EDQUOT, errno.EFBIG, errno.EROFS, errno.EIO, errno.EMFILE, errno.ENOMEM}


class _LazyGroup(click.Group):
    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in COMMANDS:
            return None
        command = import_module(COMMANDS[cmd_name][0]).command
        assert isinstance(command, click.Command), cmd_name
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl([(name, line) for name, (_, line) in COMMANDS.items()])


@click.group(cls=_LazyGroup, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="landassay")
def cli() -> None:
    """Land-cover maps from reflectance scenes, with accuracy and areas that say what evidence they rest on."""


def entry() -> None:
    """Run the command line. Exits 0 on success, 1 on a problem the user can mend, 2 on wrong usage, and with 128 and
    the number of the signal when it was stopped."""
    ensure_utf8()
    prepare_streams()
    hush_libraries()
    stopping = Stopping()
    stopping.heed()
    try:
        cli.main(standalone_mode=False)
    except click.exceptions.Abort:
        click.echo("Stopped. Finished outputs are kept; run the same command again to go on.", err=True)
        stopping.leave()
    except click.ClickException as error:
        error.show()
        sys.exit(error.exit_code)
    except click.exceptions.Exit as error:
        sys.exit(error.exit_code)
    except Exception as error:
        from classify.errors import LandassayError

        if isinstance(error, OSError) and error.errno in _MACHINE:
            error = LandassayError(error.strerror or str(error), where=str(error.filename or ""))
        if not isinstance(error, LandassayError):
            raise
        say(f"landassay: {error}", err=True)
        sys.exit(1)
