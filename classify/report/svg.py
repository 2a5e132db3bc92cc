"""A tiny SVG builder: elements with escaped attributes and text that stays text."""

from __future__ import annotations

import textwrap
from dataclasses import dataclass, field
from html import escape

from classify.report.identity import COLOURS, FONTS

_FAMILY = FONTS["plain"].replace('"', "'")


@dataclass
class Drawing:
    """One drawing, width by height in px. `title` is what a screen reader says of it."""

    width: float
    height: float
    title: str
    font_size: float = 13
    _parts: list[str] = field(default_factory=list)

    def add(self, tag: str, content: str | None = None, **attributes: object) -> None:
        """Add an element; underscores in attribute names become hyphens. `content` is escaped."""
        self._parts.append(element(tag, None if content is None else escape(content), **attributes))

    def line(  # noqa: PLR0917 - two points
        self, x1: float, y1: float, x2: float, y2: float, colour: str = "line", width: float = 1
    ) -> None:
        """A straight line in a colour of the identity."""
        self.add("line", x1=_px(x1), y1=_px(y1), x2=_px(x2), y2=_px(y2), stroke=_ink(colour), stroke_width=width)

    def rect(  # noqa: PLR0917 - place, size and fill
        self, x: float, y: float, width: float, height: float, fill: str, outline: str | None = None
    ) -> None:
        """A rectangle, with a hairline around it in a colour of the identity if asked for."""
        edge = {"stroke": _ink(outline), "stroke_width": 0.7} if outline else {}
        self.add("rect", None, x=_px(x), y=_px(y), width=_px(width), height=_px(height), fill=_ink(fill), **edge)

    def text(
        self, x: float, y: float, content: str, *, anchor: str = "start", colour: str = "ink", **more: object
    ) -> None:
        """One line of text with its baseline at y. Each piece finds its own direction (left or right to left)."""
        self.add("text", content, x=_px(x), y=_px(y), text_anchor=anchor, fill=_ink(colour), **more)

    def dot(self, x: float, y: float, colour: str = "accent", r: float = 4) -> None:
        """A filled disc."""
        self.add("circle", cx=_px(x), cy=_px(y), r=r, fill=_ink(colour))

    def diamond(self, x: float, y: float, colour: str = "second", r: float = 4.6) -> None:
        """A filled diamond."""
        self.add("path", d=f"M{_px(x)} {_px(y - r)}l{r} {r}l-{r} {r}l-{r}-{r}z", fill=_ink(colour))

    def square(self, x: float, y: float, colour: str = "ink", r: float = 4) -> None:
        """A hollow square."""
        self.add("rect", x=_px(x - r), y=_px(y - r), width=2 * r, height=2 * r, fill=COLOURS["paper"],
                 stroke=_ink(colour), stroke_width=1.4)  # fmt: skip

    def path(self, d: str, colour: str, width: float, dash: str = "", opacity: float = 1) -> None:
        """An open path drawn with a pen in a colour of the identity."""
        pen = {"fill": "none", "stroke": _ink(colour), "stroke_width": width, "stroke_linejoin": "round"}
        if dash:
            pen["stroke_dasharray"] = dash
        if opacity < 1:
            pen["stroke_opacity"] = opacity
        self.add("path", None, d=d, **pen)

    @staticmethod
    def ink(colour: str) -> str:
        """A colour of the identity by name, or #rrggbb as it is."""
        return _ink(colour)

    def markup(self) -> str:
        """The whole drawing. It scales with its container and never grows beyond its own size."""
        head = (
            f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {_px(self.width)} {_px(self.height)}" '
            f'width="{_px(self.width)}" height="{_px(self.height)}" role="img" aria-label="{escape(self.title)}" '
            f'font-family="{_FAMILY}" font-size="{self.font_size}">'
        )
        return head + f"<title>{escape(self.title)}</title>" + "".join(self._parts) + "</svg>"


def element(tag: str, content: str | None = None, **attributes: object) -> str:
    """One element; `content` is markup."""
    listed = "".join(f' {name.replace("_", "-")}="{escape(str(value))}"' for name, value in attributes.items())
    return f"<{tag}{listed}/>" if content is None else f"<{tag}{listed}>{content}</{tag}>"


def fitted(text: str, width_px: float, font_px: float = 13, lines: int = 2) -> list[str]:
    """`text` in at most `lines` lines of about `width_px`; what is too long loses its middle, as ends tell names apart.

    Average glyph widths are taken, as no font is known here.
    """
    room = max(8, int(width_px / (0.53 * font_px)))
    wrapped = textwrap.wrap(text, room) or [""]
    if len(wrapped) > lines:
        keep = room * lines - 4
        wrapped = textwrap.wrap(f"{text[: keep - keep // 2].rstrip()}…{text[-(keep // 2) :].lstrip()}", room)[:lines]
    return wrapped


def _ink(colour: str) -> str:
    return COLOURS.get(colour, colour)


def _px(value: float) -> str:
    return f"{value:.1f}".rstrip("0").rstrip(".")
