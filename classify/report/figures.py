"""Drawings of the report: the map with its frame, intervals of accuracies and areas. All text stays text."""

from __future__ import annotations

import base64
from collections.abc import Sequence
from dataclasses import dataclass

from classify.assessment.intervals import Estimate
from classify.report.facts import ClassFact, Layer, MapFact
from classify.report.numbers import NumberStyle, is_symmetric, margin_decimals, share_decimals
from classify.report.picture import nice_step
from classify.report.svg import Drawing, fitted

_WIDTH = 720.0
_NAME = 190.0
_VALUES = 150.0
_ROW = 30.0


# --- the map --------------------------------------------------------------------------------------------------------


def map_drawing(fact: MapFact, layer: Layer, title: str, style: NumberStyle, width: float = _WIDTH) -> Drawing:
    """A layer with frame, coordinates, scale bar and north arrow."""
    left, top, bottom = 30.0, 8.0, 58.0
    across = width - left - 10
    # Pictures are set by ground size, so that a map in degrees is not stretched.
    down = across * (fact.picture_yx[0] * fact.step_m[0]) / (fact.picture_yx[1] * fact.step_m[1])
    if down > 820:
        across, down = across * 820 / down, 820.0
    drawing = Drawing(left + across + 10, top + down + bottom, title, 11)
    drawing.add("image", href=data_uri(layer), x=left, y=top, width=round(across, 2), height=round(down, 2),
                preserveAspectRatio="none", style="image-rendering:pixelated")  # fmt: skip
    drawing.rect(left, top, across, down, "none", "ink")
    for share, label in fact.x_ticks:
        x = left + share * across
        drawing.line(x, top + down, x, top + down + 5, "ink")
        half = 3.1 * len(label)
        middle = min(max(x, half), drawing.width - half)
        drawing.text(middle, top + down + 17, label, anchor="middle", colour="soft")
    for share, label in fact.y_ticks:
        y = top + share * down
        drawing.line(left - 5, y, left, y, "ink")
        half = 3.1 * len(label)
        middle = min(max(y, half), drawing.height - half)
        turn = f"translate({left - 9:.1f} {middle:.1f}) rotate(-90)"
        drawing.text(0, 0, label, anchor="middle", colour="soft", transform=turn)
    _scale_bar(drawing, left, top + down + 40, fact.picture_yx[1] * fact.step_m[1] / across, style)
    _north(drawing, left + across - 14, top + down + 40, fact.north_deg)
    return drawing


def _scale_bar(drawing: Drawing, x: float, y: float, m_per_px: float, style: NumberStyle) -> None:
    """Two alternating halves with their distances on the ground at the centre of the map."""
    half_m = nice_step(m_per_px * 60)
    half = half_m / m_per_px
    unit, per = ("km", 1000.0) if half_m >= 1000 else ("m", 1.0)
    drawing.rect(x, y, half, 5, "ink")
    drawing.rect(x + half, y, half, 5, "paper", "ink")
    for i, label in enumerate((0.0, half_m / per, 2 * half_m / per)):
        text = style.number(label, 0 if label == int(label) else 1) + (f" {unit}" if i == 2 else "")
        drawing.text(x + i * half, y + 17, text, anchor="start" if i == 0 else "middle", colour="soft")


def _north(drawing: Drawing, x: float, y: float, degrees: float) -> None:
    turn = f"translate({x:.1f} {y:.1f}) rotate({degrees:.2f})"
    drawing.add("path", d="M0 -16l6 18l-6 -5l-6 5z", fill="#17242b", transform=turn)
    drawing.text(0, 14, "N", anchor="middle", transform=turn, font_weight="600")


def data_uri(layer: Layer) -> str:
    """A layer's bytes as a data URI."""
    return f"data:{layer.media};base64,{base64.b64encode(layer.data).decode('ascii')}"


# --- intervals ------------------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Axis:
    """A linear axis: values start..end over x0..x1 px."""

    start: float
    end: float
    x0: float
    x1: float

    def at(self, value: float) -> float:
        """Position of a value, kept within the axis."""
        share = (min(max(value, self.start), self.end) - self.start) / (self.end - self.start)
        return self.x0 + share * (self.x1 - self.x0)


def accuracy_drawing(
    classes: Sequence[ClassFact], users: Sequence[Estimate], producers: Sequence[Estimate], title: str,
    style: NumberStyle,
) -> Drawing:  # fmt: skip
    """User's (disc) and producer's (diamond) accuracy of each class with their intervals on a common axis."""
    row = _ROW + 6
    drawing = Drawing(_WIDTH, 30 + row * len(classes) + 8, title)
    axis = Axis(0, 1, _NAME, _WIDTH - _VALUES)
    _grid(drawing, axis, [(i / 5, style.percent(i / 5, 0)) for i in range(6)], 24, drawing.height - 6)
    for i, (c, user, producer) in enumerate(zip(classes, users, producers, strict=True)):
        y = 30 + row * i + row / 2
        _class_label(drawing, c, y)
        for estimate, shift, mark in ((user, -7.0, drawing.dot), (producer, 7.0, drawing.diamond)):
            colour = "accent" if shift < 0 else "second"
            _interval(drawing, axis, estimate, y + shift, colour)
            if estimate.estimate is not None:
                mark(axis.at(estimate.estimate), y + shift)
            drawing.text(_WIDTH - _VALUES + 12, y + shift + 4, _share(estimate, style), colour=colour, font_size=12)
    return drawing


def area_drawing(
    classes: Sequence[ClassFact], areas: Sequence[Estimate] | None, unit: str, title: str, style: NumberStyle
) -> Drawing:
    """Areas as estimated (with intervals) and as mapped; classes far smaller than the rest get a panel of their own."""
    estimates = list(areas) if areas is not None else [Estimate(None)] * len(classes)
    panels = _panels(classes, estimates)
    height = sum(34 + _ROW * len(panel) + 14 for panel in panels)
    drawing = Drawing(_WIDTH, height, title)
    top = 0.0
    for panel in panels:
        most = max(_reach(classes[i], estimates[i]) for i in panel) or 1.0
        step = nice_step(most / 4)
        axis = Axis(0, max(step, -(-most // step) * step), _NAME, _WIDTH - _VALUES)
        places = max(0, -_exponent(step))
        ticks = [(k * step, style.number(k * step, places)) for k in range(round(axis.end / step) + 1)]
        bottom = top + 34 + _ROW * len(panel)
        _grid(drawing, axis, ticks, top + 24, bottom, unit)
        for place, i in enumerate(panel):
            y = top + 34 + _ROW * place + _ROW / 2 - 3
            _class_label(drawing, classes[i], y)
            _area_row(drawing, axis, classes[i], estimates[i], y, (style, area_decimals(estimates)))
        top = bottom + 14
    return drawing


def _area_row(  # noqa: PLR0917 - where, what and how
    drawing: Drawing, axis: Axis, c: ClassFact, estimate: Estimate, y: float, form: tuple[NumberStyle, int]
) -> None:
    style, places = form
    if estimate.estimate is None and c.mapped is not None:
        drawing.rect(axis.x0, y - 6, axis.at(c.mapped) - axis.x0, 12, c.colour, "ink")
        drawing.text(_WIDTH - _VALUES + 12, y + 4, style.rounded(c.mapped), font_size=12)
        return
    _interval(drawing, axis, estimate, y, "accent")
    if c.mapped is not None:
        drawing.square(axis.at(c.mapped), y)
    if estimate.estimate is not None:
        drawing.dot(axis.at(estimate.estimate), y)
        # The places of the table beside the drawing, so that the two read the same.
        text = style.with_margin(estimate.estimate, estimate.lower, estimate.upper, decimals=places)
        drawing.text(_WIDTH - _VALUES + 12, y + 4, text, font_size=12)


def _panels(classes: Sequence[ClassFact], estimates: Sequence[Estimate], ratio: float = 8.0) -> list[list[int]]:
    """Class positions in one or two groups: the second holds those below 1/ratio of the largest, if two or more are."""
    reach = [_reach(c, e) for c, e in zip(classes, estimates, strict=True)]
    small = [i for i, r in enumerate(reach) if r < max(reach) / ratio]
    if not small:
        return [list(range(len(classes)))]
    return [[i for i in range(len(classes)) if i not in small], small]


def _reach(c: ClassFact, estimate: Estimate) -> float:
    return max(value for value in (c.mapped, estimate.estimate, estimate.upper, 0.0) if value is not None)


def _exponent(step: float) -> int:
    return len(str(int(step))) - 1 if step >= 1 else -len(f"{step:.10f}".rstrip("0").partition(".")[2])


def _grid(  # noqa: PLR0917 - where and what
    drawing: Drawing, axis: Axis, ticks: Sequence[tuple[float, str]], top: float, bottom: float, unit: str = ""
) -> None:
    for i, (value, label) in enumerate(ticks):
        x = axis.at(value)
        drawing.line(x, top, x, bottom)
        text = f"{label} {unit}" if unit and i == len(ticks) - 1 else label
        drawing.text(x, top - 8, text, anchor="middle", colour="soft", font_size=11)


def _class_label(drawing: Drawing, c: ClassFact, y: float) -> None:
    drawing.rect(0, y - 6, 12, 12, c.colour, "ink")
    lines = fitted(c.name, _NAME - 36, 12)
    for i, line in enumerate(lines):
        drawing.text(20, y + 4.5 + 13 * (i - (len(lines) - 1) / 2), line, font_size=12)


def _interval(drawing: Drawing, axis: Axis, estimate: Estimate, y: float, colour: str) -> None:
    if estimate.lower is None or estimate.upper is None:
        return
    x1, x2 = axis.at(estimate.lower), axis.at(estimate.upper)
    drawing.line(x1, y, x2, y, colour, 2)
    for x in (x1, x2):
        drawing.line(x, y - 4, x, y + 4, colour, 1.4)


def _share(estimate: Estimate, style: NumberStyle) -> str:
    """An accuracy right-sized: "88 % ± 7", or with its interval written out when that is lopsided."""
    value, lower, upper = estimate.estimate, estimate.lower, estimate.upper
    if value is None or lower is None or upper is None:
        return style.percent(value, 1 if value is not None else 0)
    places = share_decimals(lower, upper)
    if is_symmetric(value, lower, upper):
        return f"{style.percent(value, places)} ± {style.number(50 * (upper - lower), places)}"
    return f"{style.percent(value, places)} ({style.number(100 * lower, places)}–{style.number(100 * upper, places)})"


def area_decimals(areas: Sequence[Estimate]) -> int:
    """Decimals of a column of areas."""
    return margin_decimals([(a.lower, a.upper) for a in areas])
