"""One writer at a time: a folder of results is held by a lock of the operating system while it is written.

The lock goes with its process, however that ends, so that a crash leaves nothing to be cleared away by hand. Beside it
a small file says who holds it, for the message that others get. Reading needs no lock: files are replaced whole.
"""

from __future__ import annotations

import errno
import os
import socket
import sys
from collections.abc import Iterable, Iterator
from contextlib import contextmanager, suppress
from datetime import datetime
from pathlib import Path
from typing import Any

from filelock import FileLock, Timeout

from classify.errors import DataError, OutputError
from classify.files import read_json, remove_leftovers, write_errors, write_json
from classify.progress import SILENT, Progress

LOCK_FILE, HOLDER_FILE = ".landassay-lock", ".landassay-lock.json"
# Another process may hold the lock for the moment in which it finds that it has nothing to do, in seconds.
_PATIENCE_S = 0.5
# What systems answer when a disk (mostly one in a network) has no locks.
_NO_LOCKS = {errno.ENOSYS, errno.ENOLCK, errno.ENOTSUP, errno.EOPNOTSUPP}


@contextmanager
def writing(folder: Path, progress: Progress = SILENT, *, rooms: Iterable[str] = ()) -> Iterator[None]:
    """Hold `folder` (made if needed) for writing, and clear away what a killed writer left half written in it.

    rooms: folders below it that have no lock of their own, and are cleared with all that is below them. Where the disk
    has no locks this is noted to `progress` and the work goes on. Raises OutputError naming the holder when another
    process writes there, or when the folder cannot be written to.
    """
    path = folder / LOCK_FILE
    lock = FileLock(path, timeout=_PATIENCE_S, fallback_to_soft=False)
    with write_errors(folder):
        folder.mkdir(parents=True, exist_ok=True)
        try:
            lock.acquire()
        except Timeout:
            raise _refusal(folder) from None
        except OSError as error:
            if error.errno not in _NO_LOCKS:
                raise
            path.unlink(missing_ok=True)
            progress.note(
                f"warning: the disk of {folder} has no locks ({error.strerror}): nothing keeps two commands from "
                "writing there at once, so see to it that only one does"
            )
    try:
        remove_leftovers(folder)
        for room in rooms:
            remove_leftovers(folder / room, below=True)
        write_json(folder / HOLDER_FILE, _this_process())
        yield
    finally:
        with suppress(OSError):
            (folder / HOLDER_FILE).unlink(missing_ok=True)
        # Removed while it is held: whoever waits on the removed file sees that it is gone and looks again.
        with suppress(OSError):
            path.unlink(missing_ok=True)
        lock.release()
        # A command that could write nothing leaves no empty folder.
        with suppress(OSError):
            folder.rmdir()


def _this_process() -> dict[str, Any]:
    return {
        "host": socket.gethostname(),
        "process": os.getpid(),
        "command": " ".join([Path(sys.argv[0]).name, *sys.argv[1:]]),
        "since": datetime.now().astimezone().isoformat(timespec="seconds"),
    }


def _refusal(folder: Path) -> OutputError:
    try:
        holder = read_json(folder / HOLDER_FILE)
        who = f"process {holder['process']} on {holder['host']}, since {holder['since']}: {holder['command']}"
    except (DataError, KeyError):
        who = "who it is cannot be read"
    return OutputError(
        f"another command is writing here ({who})", where=str(folder),
        fix="nothing was changed: wait until it ends or stop it, then try again; 'status', 'check' and 'verify' work "
        "meanwhile",
    )  # fmt: skip
