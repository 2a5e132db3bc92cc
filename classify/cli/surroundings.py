"""What a command finds around it, made fit for work: signals, standard streams, the encoding of file names."""

from __future__ import annotations

import _thread
import os
import signal
import sys
import time
import warnings
from contextlib import suppress
from io import TextIOWrapper
from types import FrameType
from typing import NoReturn

# Stopping by Ctrl-C is SIGINT; a batch system, or a machine that shuts down, sends SIGTERM.
_SIGNALS = (signal.SIGINT, signal.SIGTERM)

# How long closing everything may take before it is done without, in seconds.
_CLOSING_S = 1.5


def hush_libraries() -> None:
    """Warnings of libraries, meant for programmers, stay off the user's terminal, unless Python was told to show some.

    Not by a filter: libraries that fit models in threads set the filters of the whole process aside for moments.
    """
    if not sys.warnoptions:
        warnings.showwarning = lambda *_args, **_named: None


class Stopping:
    """Turns the first signal into KeyboardInterrupt, so that everything is closed on the way out. A second signal, or
    the time that closing may take, is the end of the process: what is not finished then is cleared away by the next
    command. A library at work on something long does not let itself be closed.

    exit_code: as shells have it, 128 and the number of the signal.
    """

    def __init__(self) -> None:
        self.exit_code = 128 + signal.SIGINT
        self._begun = False

    def heed(self) -> None:
        """Take the signals over, but for those that whoever started this process wants ignored."""
        for number in _SIGNALS:
            if signal.getsignal(number) is not signal.SIG_IGN:
                signal.signal(number, self._stop)

    def _stop(self, number: int, frame: FrameType | None) -> None:
        self.exit_code = 128 + number
        if self._begun:
            self._leave()
        self._begun = True
        # An interrupt that falls into a library's callback ends there, with a traceback of no use to anyone; the time
        # that closing may take then ends the process.
        sys.unraisablehook = lambda _: None
        # Not a Thread of the library above, which takes a lock that the interrupted code may hold.
        _thread.start_new_thread(self._leave, (_CLOSING_S,))
        raise KeyboardInterrupt

    def _leave(self, after_s: float = 0.0) -> None:
        time.sleep(after_s)
        os.write(2, b"Stopped at once. Run the same command again to go on.\n")
        os._exit(self.exit_code)

    def leave(self) -> NoReturn:
        """End a process that was stopped and has closed everything; freeing its memory piece by piece takes seconds."""
        for stream in (sys.stdout, sys.stderr):
            with suppress(OSError, ValueError):
                stream.flush()
        os._exit(self.exit_code)


def prepare_streams() -> None:
    """Make sure that there are three standard streams and that no character is too much for them.

    A stream that whoever started this process has closed would leave its number to the next file that is opened, and
    whatever a library says there would end up in a result.
    """
    for number in range(3):
        try:
            os.fstat(number)
        except OSError:
            os.open(os.devnull, os.O_RDWR)  # takes the lowest number that is free, which is this one
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, TextIOWrapper):
            stream.reconfigure(errors="backslashreplace")


def ensure_utf8() -> None:
    """Start over in Python's UTF-8 mode where file names are taken for ASCII (`LC_ALL=C`, no locale at all).

    That says nothing of the files, whose names are UTF-8 nearly everywhere and to GDAL in any case.
    """
    if sys.getfilesystemencoding() == "ascii":
        os.execv(sys.executable, [sys.executable, "-X", "utf8", *sys.orig_argv[1:]])
