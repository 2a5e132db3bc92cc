"""Drawing of a plan: every estimate under each allocation, and how the target's half-width falls with points."""

from __future__ import annotations

import math
from collections.abc import Callable

from classify.assessment.design import Allocation, Quantity
from classify.assessment.plan import Plan
from classify.report.identity import COLOURS
from classify.report.svg import Drawing, fitted

_WIDTH, _LEFT, _RIGHT, _ROW = 760.0, 230.0, 40.0, 22.0
_CURVE_HEIGHT = 230.0
_WORDS: dict[Allocation, str] = {
    "proportional": "proportional to area", "equal": "equal", "neyman": "Neyman", "floor": "floor, then proportional",
}  # fmt: skip
# A shape and a colour per allocation, so that they hold in grey.
_COLOUR: dict[Allocation, str] = {"proportional": "ink", "equal": "soft", "neyman": "second", "floor": "accent"}
_DASH: dict[Allocation, str] = {"proportional": "2 3", "equal": "7 4", "neyman": "10 3 2 3", "floor": "none"}


def plan_drawing(plan: Plan) -> Drawing:
    """One drawing: above, half-widths of every estimate by allocation; below, that of the target against points."""
    quantities = plan.design.quantities
    height = 92 + _ROW * len(quantities) + 70 + _CURVE_HEIGHT + 60
    drawing = Drawing(_WIDTH, height, f"Expected half-widths for {sum(plan.sizes[plan.request.allocation])} points", 12)
    drawing.rect(0, 0, _WIDTH, height, "paper")
    drawing.text(12, 24, f"Expected half-width at {plan.design.level:.0%} confidence", font_size=15, font_weight="600")
    _legend(drawing, plan, 46)
    bottom = _dots(drawing, plan, quantities, 78)
    _curve(drawing, plan, bottom + 62)
    return drawing


def _mark(drawing: Drawing, how: Allocation, x: float, y: float) -> None:
    if how == "neyman":
        drawing.diamond(x, y)
    elif how == "equal":
        drawing.square(x, y, "soft", 3.4)
    elif how == "floor":
        drawing.dot(x, y, "accent", 4.2)
    else:
        drawing.line(x, y - 6, x, y + 6, "ink", 2.2)


def _legend(drawing: Drawing, plan: Plan, y: float) -> None:
    x, alike = 18.0, len({sum(sizes) for sizes in plan.sizes.values()}) == 1
    for how, sizes in plan.sizes.items():
        label = _WORDS[how] if alike else f"{_WORDS[how]} ({sum(sizes):,})"
        _mark(drawing, how, x, y - 4)
        drawing.text(x + 10, y, label)
        x += 34 + 6.1 * len(label)


def _dots(drawing: Drawing, plan: Plan, quantities: tuple[Quantity, ...], top: float) -> float:
    """Areas are drawn relative to their conjectured value, so that all rows share one axis of per cent."""
    rows = [(q, {how: _relative(q, w) for how, w in plan.half_widths(q).items()}) for q in quantities]
    highest = min(max(max(widths.values()) for _, widths in rows), 1.0)
    step = _step(highest)
    end = math.ceil(highest / step) * step
    bottom = top + _ROW * len(rows)
    at = _scale(0, end, _LEFT, _WIDTH - _RIGHT)
    for i in range(round(end / step) + 1):
        x = at(i * step)
        drawing.line(x, top - 6, x, bottom, "line")
        drawing.text(x, bottom + 16, f"{100 * i * step:g} %", anchor="middle", colour="soft")
    for i, (quantity, widths) in enumerate(rows):
        y = top + _ROW * (i + 0.5)
        drawing.text(12, y + 4, fitted(quantity.name, _LEFT, 12, 1)[0])
        for how, width in widths.items():
            _mark(drawing, how, at(min(width, end)), y)
    note = "accuracies: percentage points; areas: per cent of the conjectured area"
    drawing.text(_LEFT, bottom + 34, note, colour="soft")
    return bottom + 20


def _curve(drawing: Drawing, plan: Plan, top: float) -> None:
    title = f"Half-width of {plan.target.name} against points drawn"
    drawing.text(12, top, title, font_size=14, font_weight="600")
    top, bottom = top + 18, top + _CURVE_HEIGHT
    points = [n for n, _ in plan.curve]
    highest = max(_relative(plan.target, w) for _, widths in plan.curve for w in widths.values())
    step = _step(highest)
    end = math.ceil(highest / step) * step
    x_at = _scale(math.log(points[0]), math.log(max(points[-1], points[0] + 1)), 70, _WIDTH - _RIGHT)
    y_at = _scale(0, end, bottom, top)
    for i in range(round(end / step) + 1):
        drawing.line(70, y_at(i * step), _WIDTH - _RIGHT, y_at(i * step), "line")
        drawing.text(62, y_at(i * step) + 4, f"{100 * i * step:g} %", anchor="end", colour="soft")
    spent = sum(plan.sizes[plan.request.allocation])
    ticks = sorted({points[0], round(points[0] * 2), spent, points[-1]} & set(range(points[0], points[-1] + 1)))
    for n in ticks:
        drawing.text(x_at(math.log(n)), bottom + 18, f"{n:,}", anchor="middle", colour="soft")
    drawing.line(x_at(math.log(spent)), top, x_at(math.log(spent)), bottom, "second", 1)
    for how in plan.sizes:
        known = [(n, w[how]) for n, w in plan.curve if how in w]
        path = "M" + "L".join(f"{x_at(math.log(n)):.1f} {y_at(_relative(plan.target, w)):.1f}" for n, w in known)
        drawing.add(
            "path", d=path, fill="none", stroke=COLOURS[_COLOUR[how]], stroke_width=2, stroke_dasharray=_DASH[how]
        )
        if known:
            _mark(drawing, how, x_at(math.log(known[-1][0])), y_at(_relative(plan.target, known[-1][1])))
    drawing.text((70 + _WIDTH - _RIGHT) / 2, bottom + 38, "points", anchor="middle", colour="soft")


def _relative(quantity: Quantity, width: float) -> float:
    if quantity.measure != "area":
        return width
    return width / quantity.value if quantity.value > 0 else 0.0


def _scale(start: float, end: float, x0: float, x1: float) -> Callable[[float], float]:
    return lambda value: x0 + (value - start) / (end - start) * (x1 - x0)


def _step(highest: float) -> float:
    """A step of 1, 2 or 5 times a power of ten that gives four to nine lines."""
    if highest <= 0:
        return 0.01
    power = 10.0 ** math.floor(math.log10(highest / 4))
    return float(next(power * m for m in (1, 2, 5, 10) if highest / (power * m) <= 8))
