"""How many connections the page's server keeps, and for how long: a slow or greedy client costs no other anything."""

from __future__ import annotations

import asyncio
from typing import Any

import h11
from uvicorn.protocols.http.h11_impl import H11Protocol

# From a request's first byte (or the opening of the connection) to its last; a page sends a few hundred bytes.
REQUEST_S = 5.0
# A browser opens six at most.
MOST_CONNECTIONS = 100


class Connection(H11Protocol):
    """An HTTP connection that is given up when a request does not come in whole in time, and when it is the one longest
    without a word while there are too many: so that one who holds connections open locks no one else out."""

    _waiting: asyncio.TimerHandle | None = None
    last_heard_s = 0.0

    def connection_made(self, transport: asyncio.BaseTransport) -> None:
        """Count it, and wait for its request."""
        super().connection_made(transport)  # type: ignore[arg-type]
        self.last_heard_s = self.loop.time()
        self._await_request()
        if len(self.connections) > MOST_CONNECTIONS:
            others: list[Any] = list(self.connections)
            min(others, key=lambda other: other.last_heard_s)._give_up()

    def data_received(self, data: bytes) -> None:
        """A piece of a request."""
        self.last_heard_s = self.loop.time()
        self._await_request()
        super().data_received(data)
        if self.conn.their_state not in (h11.IDLE, h11.SEND_BODY):
            self._stop_waiting()

    def connection_lost(self, exc: Exception | None) -> None:
        """The end, from either side."""
        self._stop_waiting()
        super().connection_lost(exc)

    def timeout_keep_alive_handler(self) -> None:
        """Close what is idle, also when its client has not taken the last answer."""
        super().timeout_keep_alive_handler()
        self._give_up()

    def _await_request(self) -> None:
        if self._waiting is None:
            self._waiting = self.loop.call_later(REQUEST_S, self._give_up)

    def _stop_waiting(self) -> None:
        if self._waiting is not None:
            self._waiting.cancel()
            self._waiting = None

    def _give_up(self) -> None:
        self.transport.abort()
        # The loop tells of the loss only later, and others may come before that.
        self.connections.discard(self)
