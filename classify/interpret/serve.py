"""Run the page's server on a socket that is opened before anything else, so that a port in use is found at once."""

from __future__ import annotations

import ipaddress
import socket
from collections.abc import Callable
from dataclasses import dataclass

import uvicorn

from classify.errors import LandassayError
from classify.interpret.access import Access
from classify.interpret.app import make_app
from classify.interpret.connections import Connection
from classify.interpret.pictures import Pictures
from classify.interpret.session import Session

_MOST_HEADER_BYTES = 16 << 10


@dataclass(frozen=True, slots=True)
class Listening:
    """An open socket and the address that people open. is_local: whether only this machine can reach it."""

    socket: socket.socket
    access: Access
    host: str

    @property
    def is_local(self) -> bool:
        """Whether only this machine can reach it."""
        return self.host == "localhost" or ipaddress.ip_address(self.host).is_loopback

    @property
    def address(self) -> str:
        """With its one-time token."""
        return f"http://{_netloc(self.host, self.access.port)}/?token={self.access.token}"


def listen(host: str = "127.0.0.1", port: int = 0) -> Listening:
    """Open a socket; port 0 takes one that is free. host: an address of this machine. Raises LandassayError."""
    try:
        if host != "localhost" and ipaddress.ip_address(host).is_unspecified:
            raise LandassayError(f"{host} stands for every network of this machine",
                                 fix="name the one address that the page is to be reached at")  # fmt: skip
    except ValueError as error:
        raise LandassayError(f"{host!r} is not an address of this machine", fix="give it in numbers") from error
    family = socket.AF_INET6 if ":" in host else socket.AF_INET
    opened = socket.socket(family, socket.SOCK_STREAM)
    if hasattr(socket, "SO_EXCLUSIVEADDRUSE"):  # on Windows another program could otherwise take the port over
        opened.setsockopt(socket.SOL_SOCKET, socket.SO_EXCLUSIVEADDRUSE, 1)
    else:
        opened.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
    try:
        opened.bind((host, port))
        opened.listen(64)
    except OSError as error:
        opened.close()
        raise LandassayError(
            f"port {port} of {host} cannot be used: {error.strerror or error}",
            fix="another program has it, perhaps this page in another window; choose another with --port, or leave "
            "--port out to take a free one",
        ) from error  # fmt: skip
    found = int(opened.getsockname()[1])
    names = {_netloc(host, found)} | ({_netloc("localhost", found)} if host in ("127.0.0.1", "::1") else set())
    return Listening(opened, Access(frozenset(names), found), host)


def serve(listening: Listening, session: Session, pictures: Pictures, title: str, ready: Callable[[], None]) -> None:
    """Serve until interrupted; `ready` is called once pages can be answered."""
    app = make_app(session, pictures, title, listening.access)
    config = uvicorn.Config(
        app, http=Connection, ws="none", h11_max_incomplete_event_size=_MOST_HEADER_BYTES, timeout_keep_alive=30,
        log_level="error", access_log=False, server_header=False, date_header=False, lifespan="off",
        timeout_graceful_shutdown=2,
    )  # fmt: skip
    ready()
    uvicorn.Server(config).run(sockets=[listening.socket])


def _netloc(host: str, port: int) -> str:
    return f"[{host}]:{port}" if ":" in host else f"{host}:{port}"
