"""Line charts of the report and of the training review: spectra, learning curves, reliability."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from classify.report.numbers import NumberStyle
from classify.report.picture import nice_step
from classify.report.svg import Drawing, fitted

_DASHES = ("", "7 3", "2 3", "9 3 2 3")


@dataclass(frozen=True, slots=True)
class Line:
    """One line: points (x, y), an optional ribbon (x, low, high), its name and its colour. thin: without a label."""

    points: tuple[tuple[float, float], ...]
    name: str = ""
    colour: str = "accent"
    ribbon: tuple[tuple[float, float, float], ...] = ()
    thin: bool = False
    dash: str = ""


@dataclass(frozen=True, slots=True)
class Frame:
    """A plot area in a drawing: its corner, its size and the ranges of its axes."""

    left: float
    top: float
    width: float
    height: float
    x: tuple[float, float]
    y: tuple[float, float]

    def at(self, x: float, y: float) -> tuple[float, float]:
        """Position of a point, kept within the frame's height."""
        share = min(max((y - self.y[0]) / (self.y[1] - self.y[0]), 0.0), 1.0)
        across = (x - self.x[0]) / ((self.x[1] - self.x[0]) or 1.0)
        return self.left + self.width * across, self.top + self.height * (1 - share)


def draw_frame(drawing: Drawing, frame: Frame, y_labels: Mapping[float, str], x_labels: Mapping[float, str]) -> None:
    """Hairlines at the labelled values."""
    for value, label in y_labels.items():
        _, y = frame.at(frame.x[0], value)
        drawing.line(frame.left, y, frame.left + frame.width, y)
        drawing.text(frame.left - 6, y + 4, label, anchor="end", colour="soft", font_size=11)
    room = -1e9
    for value, label in x_labels.items():
        x, _ = frame.at(value, frame.y[0])
        drawing.line(x, frame.top + frame.height, x, frame.top + frame.height + 4, "soft")
        if x - room > 6.2 * len(label) + 6:
            drawing.text(x, frame.top + frame.height + 17, label, anchor="middle", colour="soft", font_size=11)
            room = x


def draw_line(drawing: Drawing, frame: Frame, line: Line) -> None:
    """A line over its ribbon."""
    if line.ribbon:
        upper = [frame.at(x, high) for x, _, high in line.ribbon]
        lower = [frame.at(x, low) for x, low, _ in reversed(line.ribbon)]
        drawing.add("path", d=_path([*upper, *lower]) + "z", fill=drawing.ink(line.colour), fill_opacity=0.16)
    drawing.path(
        _path([frame.at(x, y) for x, y in line.points]), line.colour, 0.7 if line.thin else 2, line.dash,
        0.45 if line.thin else 1,
    )  # fmt: skip


def draw_names(drawing: Drawing, frame: Frame, lines: Sequence[Line], width: float) -> None:
    """Names at the ends of their lines, moved apart where they would touch."""
    ends = sorted(((frame.at(*line.points[-1])[1], line) for line in lines if line.name and line.points),
                  key=lambda pair: pair[0])  # fmt: skip
    step = 15.0
    places: list[float] = []
    for y, _ in ends:
        places.append(max(y, places[-1] + step) if places else max(y, frame.top + 4))
    over = max(0.0, (places[-1] if places else 0) - (frame.top + frame.height))
    for (y, line), place in zip(ends, places, strict=True):
        x = frame.left + frame.width
        drawing.path(f"M{x:.1f} {y:.1f}L{x + 12:.1f} {place - over:.1f}h6", line.colour, 1.4, line.dash)
        drawing.text(x + 22, place - over + 4, fitted(line.name, width - 24, 12, lines=1)[0], font_size=12)


def spectra_drawing(bands: Sequence[Mapping[str, Any]], classes: Sequence[Mapping[str, Any]], title: str,
                    style: NumberStyle) -> Drawing | None:  # fmt: skip
    """Mean reflectance of classes by wavelength with the band of nine pixels in ten; None without any signature."""
    known = [c for c in classes if c.get("signature")]
    if not known:
        return None
    x = band_positions(bands)
    lines = [
        Line(tuple(zip(x, c["signature"]["mean"], strict=True)), c["name"], c["colour"],
             tuple(zip(x, c["signature"]["low"], c["signature"]["high"], strict=True)) if len(known) <= 3 else (),
             dash=_DASHES[i % len(_DASHES)])
        for i, c in enumerate(known)
    ]  # fmt: skip
    top = max(max(c["signature"]["high"] if len(known) <= 3 else c["signature"]["mean"]) for c in known)
    drawing = Drawing(720, max(290, 15 * len(lines) + 60), title)
    frame = Frame(44, 12, 500, drawing.height - 60, (min(x), max(x)), (0, max(top, 0.05) * 1.05))
    draw_frame(drawing, frame, _ticks(frame.y, style), _band_labels(bands, x))
    for line in lines:
        draw_line(drawing, frame, line)
    draw_names(drawing, frame, lines, 176)
    unit = "nm" if _has_wavelengths(bands) else ""
    drawing.text(frame.left + frame.width, drawing.height - 8, unit, anchor="end", colour="soft", font_size=11)
    return drawing


def class_panels(panels: Sequence[tuple[str, str, Sequence[Line]]], frame_of: Frame, title: str,
                 labels: tuple[Mapping[float, str], Mapping[float, str]]) -> Drawing:  # fmt: skip
    """Small charts side by side, two a row, one a class: (name, colour, lines). `frame_of` gives ranges and size."""
    across, down = frame_of.width + 70, frame_of.height + 62
    drawing = Drawing(2 * across, down * -(-len(panels) // 2), title)
    for i, (name, colour, lines) in enumerate(panels):
        left, top = (i % 2) * across, (i // 2) * down
        frame = Frame(left + 44, top + 28, frame_of.width, frame_of.height, frame_of.x, frame_of.y)
        drawing.rect(left, top + 4, 11, 11, colour, "ink")
        drawing.text(left + 18, top + 14, fitted(name, across - 30, 12, lines=1)[0], font_size=12, font_weight="600")
        draw_frame(drawing, frame, *labels)
        for line in lines:
            draw_line(drawing, frame, line)
    return drawing


def signature_panels(review: Mapping[str, Any], title: str, style: NumberStyle) -> Drawing | None:
    """One chart a class: its polygons as thin lines over the class's mean and band."""
    bands, x = review["bands"], band_positions(review["bands"])
    classes = [c for c in review["classes"] if c.get("signature")]
    if not classes:
        return None
    top = max(max(c["signature"]["high"]) for c in classes) * 1.1
    panels = []
    for c in classes:
        thin = [
            Line(tuple(zip(x, p["mean"], strict=True)), colour="soft", thin=True)
            for p in review["polygons"] if p["code"] == c["code"] and p["mean"] is not None
        ]  # fmt: skip
        s = c["signature"]
        ribbon = tuple(zip(x, s["low"], s["high"], strict=True))
        mean = Line(tuple(zip(x, s["mean"], strict=True)), "", c["colour"], ribbon)
        panels.append((c["name"], c["colour"], [mean, *thin]))
    frame = Frame(0, 0, 280, 130, (min(x), max(x)), (0, top))
    return class_panels(panels, frame, title, (_ticks((0, top), style), _band_labels(bands, x)))


def learning_panels(curve: Mapping[str, Any], colours: Mapping[str, str], title: str, style: NumberStyle) -> Drawing:
    """One chart a class: share found against the number of polygons learnt from."""
    classes = [c for c in curve["classes"] if c["points"]]
    most = max((p["polygons"] for c in classes for p in c["points"]), default=1.0)
    panels = [
        (
            c["name"], colours.get(c["name"], "#808080"),
            [Line(tuple((p["polygons"], p["mean"]) for p in c["points"]), "", "accent",
                  tuple((p["polygons"], p["low"], p["high"]) for p in c["points"]))],
        )
        for c in classes
    ]  # fmt: skip
    step = nice_step(most / 4)
    x_labels = {k * step: style.number(k * step) for k in range(int(most / step) + 1)}
    y_labels = {share / 4: style.percent(share / 4, 0) for share in range(5)}
    return class_panels(panels, Frame(0, 0, 280, 110, (0, most), (0, 1)), title, (y_labels, x_labels))


def reliability_drawing(
    bins: Sequence[Mapping[str, Any]], title: str, axes: tuple[str, str], style: NumberStyle
) -> Drawing:
    """Share right against stated confidence; discs grow with the pixels behind them. axes: what x and y are."""
    drawing = Drawing(360, 330, title)
    frame = Frame(52, 12, 288, 260, (0, 1), (0, 1))
    labels = {share / 4: style.percent(share / 4, 0) for share in range(5)}
    draw_frame(drawing, frame, labels, labels)
    draw_line(drawing, frame, Line(((0, 0), (1, 1)), colour="soft", dash="4 3", thin=True))
    known = [b for b in bins if b["pixels"]]
    draw_line(drawing, frame, Line(tuple((b["said"], b["right"]) for b in known)))
    for b in known:
        drawing.dot(*frame.at(b["said"], b["right"]), r=round(3 + 9 * b["share"] ** 0.5, 1))
    drawing.text(frame.left + frame.width, 308, axes[0], anchor="end", colour="soft", font_size=11)
    drawing.text(frame.left + 6, frame.top + 14, axes[1], colour="soft", font_size=11)
    return drawing


def bars_drawing(items: Sequence[tuple[str, float, float | None]], title: str, style: NumberStyle) -> Drawing:
    """Horizontal bars of losses (in proportions, shown in percentage points) with their spread."""
    drawing = Drawing(720, 22 * len(items) + 14, title)
    most = max((value + (spread or 0) for _, value, spread in items), default=0.0) or 1.0
    for i, (name, value, spread) in enumerate(items):
        y = 14 + 22 * i
        drawing.text(172, y + 5, fitted(name, 170, 12, lines=1)[0], anchor="end", font_size=12)
        width = 420 * max(value, 0.0) / most
        drawing.rect(180, y - 6, max(width, 0.6), 13, "accent")
        if spread:
            low, high = (180 + 420 * max(v, 0.0) / most for v in (value - spread, value + spread))
            drawing.line(low, y + 0.5, high, y + 0.5, "ink", 1.4)
        end = 180 + 420 * max(value + (spread or 0), 0.0) / most
        drawing.text(end + 8, y + 5, style.number(100 * value, 1), font_size=12)
    return drawing


def band_positions(bands: Sequence[Mapping[str, Any]]) -> list[float]:
    """Wavelengths, or 1, 2, 3, ... where one of them is not known."""
    if _has_wavelengths(bands):
        return [float(b["wavelength_nm"]) for b in bands]
    return [float(i + 1) for i in range(len(bands))]


def _has_wavelengths(bands: Sequence[Mapping[str, Any]]) -> bool:
    return all(b["wavelength_nm"] is not None for b in bands) and len({b["wavelength_nm"] for b in bands}) > 1


def _band_labels(bands: Sequence[Mapping[str, Any]], x: Sequence[float]) -> dict[float, str]:
    names = [f"{p:.0f}" for p in x] if _has_wavelengths(bands) else [str(b["role"]) for b in bands]
    return dict(zip(x, names, strict=True))


def _ticks(y: tuple[float, float], style: NumberStyle) -> dict[float, str]:
    step = nice_step((y[1] - y[0]) / 4)
    places = max(0, len(f"{step:.6f}".rstrip("0").partition(".")[2]))
    return {k * step: style.number(k * step, places) for k in range(int(y[1] / step) + 1)}


def _path(points: Sequence[tuple[float, float]]) -> str:
    return "M" + "L".join(f"{x:.1f} {y:.1f}" for x, y in points)
