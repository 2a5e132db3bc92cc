"""One progress interface: a bar with time left on a terminal, log lines elsewhere, silent in tests and with --quiet.

The library takes a `Progress` and never prints. A task is advanced in whole units (blocks, polygons, replicates); it
may be advanced from several threads.
"""

from __future__ import annotations

import math
import sys
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Protocol, TextIO

from classify.text import plain


class Task(Protocol):
    """One piece of work whose length is known."""

    def advance(self, units: int = 1) -> None:
        """Say that `units` more are done. Thread-safe."""


class Progress(Protocol):
    """Where long work says how far it is."""

    @contextmanager
    def task(self, label: str, total: int) -> Iterator[Task]:
        """Open a task of `total` units; it closes with the context."""
        ...

    def note(self, message: str) -> None:
        """Say one line that is worth reading while the work goes on."""


class _SilentTask:
    def advance(self, units: int = 1) -> None:
        """Do nothing."""


class Silent:
    """Progress that shows nothing; the default everywhere in the library."""

    @contextmanager
    def task(self, label: str, total: int) -> Iterator[Task]:
        """Open a task that shows nothing."""
        yield _SilentTask()

    def note(self, message: str) -> None:
        """Show nothing."""


SILENT = Silent()


class _LogTask:
    def __init__(self, label: str, total: int, stream: TextIO, every_s: float) -> None:
        self._label, self._total, self._stream, self._every_s = label, total, stream, every_s
        self._done, self._start = 0, time.monotonic()
        self._said = self._start
        self._lock = threading.Lock()

    def advance(self, units: int = 1) -> None:
        """Count, and write a line if the last one is old enough."""
        with self._lock:
            self._done += units
            now = time.monotonic()
            if now - self._said < self._every_s or not self._total:
                return
            self._said = now
            share = min(self._done / self._total, 1.0)
            left_s = (now - self._start) * (1 - share) / share if share else float("nan")
            self._stream.write(f"{self._label}: {share:.0%}, about {duration(left_s)} left\n")
            self._stream.flush()


class LogLines:
    """Progress as plain lines on a stream (standard error), for logs and pipes."""

    def __init__(self, stream: TextIO | None = None, every_s: float = 10.0) -> None:
        self._stream = stream or sys.stderr
        self._every_s = every_s

    @contextmanager
    def task(self, label: str, total: int) -> Iterator[Task]:
        """Open a task that writes a line when it starts to take long, and one at the end."""
        start = time.monotonic()
        yield _LogTask(label, total, self._stream, self._every_s)
        self.note(f"{label}: done in {duration(time.monotonic() - start)}")

    def note(self, message: str) -> None:
        """Write one line."""
        self._stream.write(plain(message) + "\n")
        self._stream.flush()


class _BarTask:
    def __init__(self, bar: object, task_id: object) -> None:
        self._bar, self._task_id = bar, task_id

    def advance(self, units: int = 1) -> None:
        """Move the bar."""
        self._bar.advance(self._task_id, units)  # type: ignore[attr-defined]


class TerminalBar:
    """Progress as a bar with elapsed time and time left, on a terminal's standard error."""

    def __init__(self) -> None:
        from rich.console import Console

        self._console = Console(stderr=True)

    @contextmanager
    def task(self, label: str, total: int) -> Iterator[Task]:
        """Open a bar."""
        from rich.progress import BarColumn, Progress, TaskProgressColumn, TextColumn, TimeElapsedColumn
        from rich.progress import TimeRemainingColumn as TimeLeft

        columns = (
            TextColumn("{task.description:<28}"), BarColumn(bar_width=32), TaskProgressColumn(),
            TimeElapsedColumn(), TextColumn("[dim]left"), TimeLeft(),
        )  # fmt: skip
        with Progress(*columns, console=self._console) as bar:
            yield _BarTask(bar, bar.add_task(label, total=total))

    def note(self, message: str) -> None:
        """Print one line above the bar."""
        self._console.print(plain(message), markup=False, highlight=False)


def for_stream(*, quiet: bool) -> Progress:
    """Choose: silent when quiet or without standard error, a bar when that is a terminal, log lines otherwise."""
    if quiet or sys.stderr is None:
        return SILENT
    return TerminalBar() if sys.stderr.isatty() else LogLines()


def duration(seconds: float) -> str:
    """Seconds as people say them: "8 s", "3 min 20 s", "2 h 05 min"."""
    if math.isnan(seconds):
        return "unknown time"
    whole = round(seconds)
    if whole < 60:
        return f"{whole} s"
    minutes, rest = divmod(whole, 60)
    if minutes < 60:
        return f"{minutes} min {rest:02d} s"
    return f"{minutes // 60} h {minutes % 60:02d} min"
