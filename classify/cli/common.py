"""What every command shares: the options --project, --jobs, --quiet, --json, and how a result is shown."""

from __future__ import annotations

import functools
import json
import os
import sys
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from classify.text import plain, printable_json

if TYPE_CHECKING:
    from classify.progress import Progress
    from classify.settings import Project


@dataclass(frozen=True, slots=True)
class Call:
    """How a command was called. project_path: project file or folder; jobs: workers, at least 1."""

    project_path: Path
    jobs: int
    quiet: bool
    as_json: bool

    def project(self) -> Project:
        """Read the project file. Raises SettingsError listing every problem."""
        from classify.settings import load_project

        return load_project(self.project_path)

    def progress(self) -> Progress:
        """Where long work reports."""
        from classify.progress import for_stream

        return for_stream(quiet=self.quiet)

    def show(self, result: Mapping[str, Any], text: str) -> None:
        """Print the result: `result` as JSON on standard output with --json, else `text` unless --quiet."""
        if self.as_json:
            echo_json(result)
        elif not self.quiet and text:
            say(text)

    def warn(self, message: str) -> None:
        """Say something on standard error, whatever the output mode (not with --quiet)."""
        if not self.quiet:
            say(message, err=True)


def say(text: str, *, err: bool = False) -> None:
    """Print text. Names in it may come from anyone's files: none of them is to command the terminal."""
    click.echo(plain(text), err=err)


def echo_json(content: Mapping[str, Any]) -> None:
    """Print JSON; with characters spelt in ASCII where standard output could not take them."""
    unicode = "utf" in (getattr(sys.stdout, "encoding", None) or "").casefold()
    click.echo(printable_json(json.dumps(content, indent=2, ensure_ascii=not unicode, allow_nan=False)))


def spoken(names: Sequence[str]) -> tuple[str, ...]:
    """Options among `names`, of parameters, that stand on the command line, as they are spelt in its help."""
    context = click.get_current_context()
    options = {p.name: p.opts[0] for p in context.command.params if p.name}
    given = click.core.ParameterSource.COMMANDLINE
    return tuple(options[name] for name in names if name in options and context.get_parameter_source(name) is given)


def refuse_spoken(names: Sequence[str], reason: str) -> None:
    """Raise UsageError if any of these options was given, as it would change nothing. reason: when it would."""
    unused = spoken(names)
    if unused:
        raise click.UsageError(f"{', '.join(unused)}: {reason}")


def common_options(command: Callable[..., Any]) -> Callable[..., Any]:
    """Add the shared options to a command function whose first parameter is a `Call`."""

    @click.option(
        "--project", "project_path", type=click.Path(path_type=Path), default=Path(),
        show_default="the current folder", help="Project file, or the folder that holds project.toml.",
    )  # fmt: skip
    @click.option(
        "--jobs", type=click.IntRange(min=1), default=os.cpu_count() or 1, show_default="all cores", help="Workers."
    )
    @click.option("--quiet", is_flag=True, help="Say nothing but errors.")
    @click.option("--json", "as_json", is_flag=True, help="Machine-readable result on standard output.")
    @functools.wraps(command)
    def wrapped(project_path: Path, jobs: int, quiet: bool, as_json: bool, **rest: Any) -> Any:  # noqa: ANN401
        return command(Call(project_path, jobs, quiet, as_json), **rest)

    return wrapped
