"""Who may talk to the page's server: the browser that opened the address printed at the start, and no other.

The address carries a token that works once and is exchanged for a cookie. Every request must name this server as its
host (so that a foreign name that resolves to this machine is refused), and every request with an origin must come from
the page itself.
"""

from __future__ import annotations

import asyncio
import hmac
import secrets
import threading
from collections.abc import Awaitable, Callable
from dataclasses import dataclass, field

from starlette.middleware.base import BaseHTTPMiddleware
from starlette.requests import Request
from starlette.responses import PlainTextResponse, RedirectResponse, Response
from starlette.types import ASGIApp

_HEADERS = {
    "Content-Security-Policy": "default-src 'none'; script-src 'self'; style-src 'self'; img-src 'self'; "
    "connect-src 'self'; base-uri 'none'; form-action 'none'; frame-ancestors 'none'",
    "X-Content-Type-Options": "nosniff",
    "Referrer-Policy": "no-referrer",
    "Cross-Origin-Opener-Policy": "same-origin",
    "Cross-Origin-Resource-Policy": "same-origin",
    "Permissions-Policy": "camera=(), geolocation=(), microphone=()",
}

_WRONG_S = 0.5


@dataclass
class Access:
    """The token, whether it was used, and the names that this server answers to (host:port)."""

    hosts: frozenset[str]
    port: int
    token: str = field(default_factory=lambda: secrets.token_urlsafe(24))
    _key: str = field(default_factory=lambda: secrets.token_urlsafe(32), repr=False)
    _used: bool = False
    _lock: threading.Lock = field(default_factory=threading.Lock, repr=False)

    @property
    def cookie(self) -> str:
        """Name of the cookie. Browsers share cookies between ports of a host, so that the port is part of it."""
        return f"landassay_{self.port}"

    def exchange(self, token: str) -> str | None:
        """The cookie's value for the right token, the first time; None afterwards and for any other."""
        with self._lock:
            right = hmac.compare_digest(token.encode(), self.token.encode()) and not self._used
            self._used = self._used or right
            return self._key if right else None

    def knows(self, key: str | None) -> bool:
        """Whether a cookie's value is ours."""
        return key is not None and hmac.compare_digest(key.encode(), self._key.encode())

    def answers_to(self, host: str | None) -> bool:
        """Whether a Host header names this server."""
        return host is not None and host.lower() in self.hosts

    def comes_from_page(self, origin: str | None) -> bool:
        """Whether an Origin header is that of our own page."""
        return origin is not None and origin.lower() in {f"http://{host}" for host in self.hosts}


class Guard(BaseHTTPMiddleware):
    """Refuses requests before they reach a route, and puts the security headers on every answer."""

    def __init__(self, app: ASGIApp, access: Access) -> None:
        super().__init__(app)
        self.access = access

    async def dispatch(self, request: Request, call_next: Callable[[Request], Awaitable[Response]]) -> Response:
        """Check, then pass on."""
        response = self._refusal(request) or await self._entrance(request) or await call_next(request)
        for name, value in _HEADERS.items():
            response.headers[name] = value
        return response

    def _refusal(self, request: Request) -> Response | None:
        access, headers = self.access, request.headers
        if not access.answers_to(headers.get("host")):
            return PlainTextResponse("This server does not answer to that name.", 421)
        origin = headers.get("origin")
        if (origin is not None or request.method != "GET") and not access.comes_from_page(origin):
            return PlainTextResponse("Only the page itself may ask for this.", 403)
        if headers.get("sec-fetch-site", "none") not in ("same-origin", "none"):
            return PlainTextResponse("Only the page itself may ask for this.", 403)
        return None

    async def _entrance(self, request: Request) -> Response | None:
        access = self.access
        token = request.query_params.get("token")
        if request.url.path == "/" and token is not None and not access.knows(request.cookies.get(access.cookie)):
            key = access.exchange(token)
            if key is not None:
                answer = RedirectResponse("/", 303)
                answer.set_cookie(access.cookie, key, httponly=True, samesite="strict", path="/")
                return answer
        elif request.url.path == "/" and token is not None:
            return RedirectResponse("/", 303)
        if access.knows(request.cookies.get(access.cookie)):
            return None
        # Who guesses waits; the right token and the cookie never do, however many guess.
        await asyncio.sleep(_WRONG_S)
        text = "This address is not valid, or was used in another browser. Start 'landassay interpret' again."
        return PlainTextResponse(text, 403)
