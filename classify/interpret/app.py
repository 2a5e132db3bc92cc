"""The page's server: a handful of routes over a session, each answer computed from ids and whole numbers alone.

Nothing that the browser sends names a file. The map and the design's strata are not known here, so that no answer can
give them away.
"""

from __future__ import annotations

import json
import re
from collections.abc import Awaitable, Callable, Mapping
from pathlib import Path
from typing import Any

from starlette.applications import Starlette
from starlette.concurrency import run_in_threadpool
from starlette.requests import ClientDisconnect, Request
from starlette.responses import JSONResponse, Response
from starlette.routing import Route

from classify.errors import LandassayError, SampleError
from classify.interpret.access import Access, Guard
from classify.interpret.journal import CONFIDENCES, Label, StaleEntryError
from classify.interpret.pictures import Look, Pictures
from classify.interpret.session import Place, Session

_ASSETS = {
    "": ("page.html", "text/html"), "page.css": ("page.css", "text/css"), "page.js": ("page.js", "text/javascript"),
    "views.js": ("views.js", "text/javascript"), "spectrum.js": ("spectrum.js", "text/javascript"),
    "talk.js": ("talk.js", "text/javascript"), "mark.svg": ("mark.svg", "image/svg+xml"),
}  # fmt: skip
_LONGEST_BODY = 8192

Answer = Callable[[Request], Awaitable[Response]]


def make_app(session: Session, pictures: Pictures, title: str, access: Access) -> Starlette:
    """The web application of one session, behind its guard."""
    desk = _Desk(session, pictures, title)
    routes = [
        *(Route(f"/{name}", _asset(file, media), methods=["GET"]) for name, (file, media) in _ASSETS.items()),
        Route("/api/start", desk.start, methods=["GET"]),
        Route("/api/points", desk.points, methods=["GET"]),
        Route("/api/point/{id}", desk.point, methods=["GET"]),
        Route("/api/picture/{id}/{view}", desk.picture, methods=["GET"]),
        Route("/api/label/{id}", desk.label, methods=["POST"]),
        Route("/api/undo", desk.undo, methods=["POST"]),
    ]
    app = Starlette(routes=routes, exception_handlers={LandassayError: _failure})
    app.router.redirect_slashes = False
    app.add_middleware(Guard, access=access)
    return app


def _asset(file: str, media: str) -> Answer:
    """An answer with one file of ours, read when the server starts."""
    content = (Path(__file__).parent / "assets" / file).read_bytes()

    async def answer(_: Request) -> Response:
        return Response(content, media_type=media, headers={"Cache-Control": "no-cache"})

    return answer


class _Desk:
    """Answers to the page."""

    def __init__(self, session: Session, pictures: Pictures, title: str) -> None:
        self.session, self.pictures, self.title = session, pictures, title

    async def start(self, _: Request) -> Response:
        """What does not change while the page is open."""
        session = self.session
        views = [
            {"key": v.key, "title": v.title, "date": v.date, "bands": [r.partition("@")[0] for r in v.roles]}
            for v in self.pictures.views.values()
        ]
        return _json(
            {
                "title": self.title, "interpreter": session.journal.interpreter, "role": session.journal.role,
                "classes": [{"name": c.name, "colour": c.colour} for c in session.classes],
                "confidences": CONFIDENCES, "sides_px": self.pictures.sides_px, "views": views,
            }
        )  # fmt: skip

    async def points(self, _: Request) -> Response:
        """All points in the interpreter's order, and what was said of them."""
        return _json(await run_in_threadpool(self.session.overview))

    async def point(self, request: Request) -> Response:
        """One point: where it lies, its spectrum, and what was said of it."""
        place = self._place(request)
        if place is None:
            return _refusal("there is no such point", 404)
        spectrum = await run_in_threadpool(self.pictures.spectrum, place.row, place.col)
        said = await run_in_threadpool(self.session.said, place.id)
        return _json(
            {"id": place.id, "longitude": place.longitude, "latitude": place.latitude, "spectrum": spectrum, **said}
        )

    async def picture(self, request: Request) -> Response:
        """A picture around one point."""
        place = self._place(request)
        look = _look(request.query_params)
        if place is None or look is None or request.path_params["view"] not in self.pictures.views:
            return _refusal("there is no such picture", 404)
        png = await run_in_threadpool(self.pictures.picture, place.row, place.col, request.path_params["view"], look)
        return Response(png, media_type="image/png", headers={"Cache-Control": "private, max-age=3600"})

    async def label(self, request: Request) -> Response:
        """Store a label; the answer comes once it is on disk."""
        place, body = self._place(request), await _body(request)
        if place is None:
            return _refusal("there is no such point", 404)
        if body is None or type(body.get("seen")) is not int:
            return _refusal("this is not a label", 400)
        texts = {key: body.get(key) for key in ("label", "alternate", "confidence", "note")}
        if not all(value is None or isinstance(value, str) for value in texts.values()):
            return _refusal("this is not a label", 400)
        label = Label(
            texts["label"], texts["alternate"], texts["confidence"] or "high", (texts["note"] or "").strip()
        )  # fmt: skip
        try:
            revision = await run_in_threadpool(self.session.label, place.id, label, body["seen"])
        except StaleEntryError:
            return _json(await run_in_threadpool(self.session.said, place.id), 409)
        except SampleError as error:
            return _refusal(error.problems[0].what, 400)
        return _json({"revision": revision})

    async def undo(self, _: Request) -> Response:
        """Take back the last label."""
        return _json({"point": await run_in_threadpool(self.session.journal.undo)})

    def _place(self, request: Request) -> Place | None:
        text = str(request.path_params["id"])
        return self.session.places.get(int(text)) if re.fullmatch("[0-9]{1,15}", text) else None


async def _failure(_: Request, error: Exception) -> Response:
    """A scene or journal that cannot be read or written now: said on the page; no label is taken for stored."""
    assert isinstance(error, LandassayError)
    return _refusal(error.problems[0].what, 500)


async def _body(request: Request) -> dict[str, Any] | None:
    raw = b""
    try:
        async for piece in request.stream():
            raw += piece
            if len(raw) > _LONGEST_BODY:
                return None
        content = json.loads(raw)
    except (ValueError, RecursionError, ClientDisconnect):
        return None
    return content if isinstance(content, dict) else None


def _look(query: Mapping[str, str]) -> Look | None:
    try:
        look = Look(
            int(query.get("side", "31")), (int(query.get("down", "0")), int(query.get("right", "0"))),
            float(query.get("low", "2")), float(query.get("high", "98")), query.get("local") == "1",
        )  # fmt: skip
    except ValueError:
        return None
    return look if look.is_sound else None


def _json(content: Mapping[str, Any], status: int = 200) -> Response:
    return JSONResponse(content, status, headers={"Cache-Control": "no-store"})


def _refusal(what: str, status: int) -> Response:
    return _json({"problem": what}, status)
