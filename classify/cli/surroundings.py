"""What a command finds around it, made fit for work: signals, standard streams, the encoding of file names."""

from __future__ import annotations

import os
import signal
import sys
from io import TextIOWrapper
from types import FrameType

# Stopping by Ctrl-C is SIGINT; a batch system, or a machine that shuts down, sends SIGTERM.
_SIGNALS = (signal.SIGINT, signal.SIGTERM)


class Stopping:
    """Turns the first signal into KeyboardInterrupt, so that everything is closed on the way out, and the second into
    the end of the process: what is not finished then is cleared away by the next command.

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
            os.write(2, b"Stopped at once. Run the same command again to go on.\n")
            os._exit(self.exit_code)
        self._begun = True
        raise KeyboardInterrupt


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
