"""Files that belong together, replaced together: all of them or none, whenever the process or the machine stops.

New files are written to a folder beside the old ones. Once that is whole it gets the name of one that is ready: from
then on its files are moved into place, by this process or by whoever comes next. What was not ready is cleared away.
"""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from classify.errors import OutputError, Problem, raise_if_errors
from classify.files import TEMPORARY_SUFFIX, flush_folder, read_json, sha256, write_errors, write_json

_STAGED, _READY = f".together{TEMPORARY_SUFFIX}", ".landassay-ready"
# What each file was when the new ones were made; "" where there was none.
_BEFORE = "before.json"


@contextmanager
def replacing_together(folder: Path) -> Iterator[Path]:
    """A folder to write files to, with `replacing` or what uses it; they replace those of `folder` that have the same
    names when the context ends well. Only one process may do so at a time. Raises OutputError."""
    staged = folder / _STAGED
    finish_replacing(folder)
    try:
        with write_errors(folder):
            staged.mkdir(parents=True)
        before = _fingerprints(folder)
        yield staged
        new = [path.name for path in staged.iterdir()]
        write_json(staged / _BEFORE, {name: before.get(name, "") for name in new})
        with write_errors(folder):
            staged.rename(folder / _READY)
            flush_folder(folder)
    finally:
        shutil.rmtree(staged, ignore_errors=True)
    finish_replacing(folder)


def finish_replacing(folder: Path) -> None:
    """Do what a process that was stopped had made ready, and clear away what it had not. To be called before any of the
    files is read. Raises OutputError where a file was changed since, before anything is moved over it."""
    shutil.rmtree(folder / _STAGED, ignore_errors=True)
    ready = folder / _READY
    if not ready.is_dir():
        return
    with write_errors(folder):
        left = sorted(path for path in ready.iterdir() if path.name != _BEFORE)
        if left:
            _refuse_changed(folder, ready, left)
        for path in left:
            with suppress(FileNotFoundError):  # another process that reads them does the same
                path.replace(folder / path.name)
        flush_folder(folder)
        (ready / _BEFORE).unlink(missing_ok=True)
        with suppress(FileNotFoundError):
            ready.rmdir()


def is_unfinished(folder: Path) -> bool:
    """Whether a process was stopped while it moved files into place."""
    return (folder / _READY).is_dir()


def _fingerprints(folder: Path) -> dict[str, str]:
    return {path.name: sha256(path) for path in folder.iterdir() if path.is_file() and path.name[0] != "."}


def _refuse_changed(folder: Path, ready: Path, left: list[Path]) -> None:
    before = read_json(ready / _BEFORE)
    raise_if_errors([
        Problem("this file was changed after a command that was replacing it had been stopped", str(folder / path.name),
                "move it elsewhere, then try again: the command then ends what it had begun")
        for path in left
        if (folder / path.name).is_file() and sha256(folder / path.name) != before.get(path.name, "")
    ], OutputError)  # fmt: skip
