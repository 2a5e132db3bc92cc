"""A server of this machine's own network, as a process of its own, that notes who asks for what. For attacks: nothing
may ask it for anything unless the user named it. A path /to/ADDRESS is passed on to that address."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path


class Listener:
    """host: as it stands in an address. asked: paths that were asked for."""

    def __init__(self, port: int, log: Path) -> None:
        self.host, self._log = f"127.0.0.1:{port}", log

    @property
    def asked(self) -> list[str]:
        return self._log.read_text().split()


@contextmanager
def listening(folder: Path) -> Iterator[Listener]:
    """A listener that notes in a file of `folder`."""
    log = folder / "asked.log"
    log.write_text("")
    with subprocess.Popen([sys.executable, __file__, str(log)], stdout=subprocess.PIPE, text=True) as process:
        try:
            assert process.stdout is not None
            yield Listener(int(process.stdout.readline()), log)
        finally:
            process.kill()


class _Noting(BaseHTTPRequestHandler):
    def do_GET(self) -> None:
        with Path(sys.argv[1]).open("a") as log:
            log.write(self.path + "\n")
        _, passed_on, to = self.path.partition("/to/")
        self.send_response(302 if passed_on else 404)
        if passed_on:
            self.send_header("Location", to)
        self.send_header("Content-Length", "0")
        self.end_headers()

    do_HEAD = do_GET

    def log_message(self, *args: object) -> None:
        """Keep the test's output clean."""


if __name__ == "__main__":
    server = ThreadingHTTPServer(("127.0.0.1", 0), _Noting)
    print(server.server_port, flush=True)  # noqa: T201 - how the test learns it
    server.serve_forever()
