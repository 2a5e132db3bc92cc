"""Commands in processes of their own that can be killed, interrupted or starved, without loading the libraries anew.

One process imports everything and then forks for each command, so that faults hit work and not the start of Python.
"""

from __future__ import annotations

import json
import os
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

_FORKING = """
import encodings.utf_8_sig, json, os, resource, signal, sys, traceback
from classify.cli.main import entry
from classify import workflow
import classify.cli.render, classify.cli.run, classify.cli.status

def command(arguments, file_kb, user, said):
    signal.signal(signal.SIGINT, signal.default_int_handler)
    os.dup2(os.open(said, os.O_RDWR | os.O_CREAT | os.O_TRUNC, 0o666), 2)
    os.dup2(2, 1)
    if file_kb is not None:
        resource.setrlimit(resource.RLIMIT_FSIZE, (file_kb * 1024, file_kb * 1024))
    if user is not None:
        os.setgroups([]); os.setgid(user); os.setuid(user)
    sys.argv = ["landassay", *arguments]
    try:
        entry()
        return 0
    except SystemExit as end:
        return end.code or 0
    except BaseException:
        traceback.print_exc()
        return 70

for line in sys.stdin:
    child = os.fork()
    if child == 0:
        code = command(*json.loads(line))
        sys.stdout.flush(), sys.stderr.flush()
        os._exit(code)
    print(child, flush=True)
    print(os.waitstatus_to_exitcode(os.waitpid(child, 0)[1]), flush=True)
"""


class Commands:
    """Use `commands`."""

    def __init__(self, process: subprocess.Popen, said: Path) -> None:
        self._process, self._said = process, said

    def start(self, *arguments: object, file_kb: int | None = None, user: int | None = None) -> int:
        """Begin a command and return its process id. file_kb: no file may grow beyond; user: who runs it."""
        call = [[str(argument) for argument in arguments], file_kb, user, str(self._said)]
        self._process.stdin.write(json.dumps(call) + "\n")
        self._process.stdin.flush()
        return int(self._process.stdout.readline())

    def end(self) -> tuple[int, str]:
        """Wait; exit code (negative: the signal that ended it) and all that was said on both streams."""
        code = int(self._process.stdout.readline())
        return code, self._said.read_text(encoding="utf-8", errors="replace")

    def run(self, *arguments: object, file_kb: int | None = None, user: int | None = None) -> tuple[int, str]:
        """Begin and wait."""
        self.start(*arguments, file_kb=file_kb, user=user)
        return self.end()


@contextmanager
def commands(said: Path) -> Iterator[Commands]:
    """A process that runs commands one after the other. said: file for what they say."""
    environment = {**os.environ, "PYTHONUNBUFFERED": "1"}
    with subprocess.Popen(
        [sys.executable, "-c", _FORKING], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True, env=environment
    ) as process:
        yield Commands(process, said)
        process.kill()
