"""The map section: picture, legend, where the model was unsure, and the explorer."""

from __future__ import annotations

from collections.abc import Iterator

from classify.report.document import Block, Explorer, Figure, Legend, Paragraph, Section
from classify.report.facts import MapFact, ReportFacts
from classify.report.figures import map_drawing
from classify.report.messages import Messages


def map_section(facts: ReportFacts, words: Messages) -> Section | None:
    """The map with its legend; None without a map."""
    if facts.map is None:
        return None
    return Section("map", words.text("map.title"), tuple(_blocks(facts, facts.map, words)), "map")


def _blocks(facts: ReportFacts, fact: MapFact, words: Messages) -> Iterator[Block]:
    style = words.numbers
    cover = fact.layer("cover")
    assert cover is not None, "a map always has its cover layer"
    title = words.text("map.figure")
    names = ", ".join(c.name for c in facts.classes)
    pixel = " × ".join(style.rounded(m, 3) for m in sorted({round(m, 3) for m in fact.pixel_m})) + " m"
    if fact.tidied:
        yield Paragraph(words.rich("map.tidied"))
    yield Figure(
        "map", map_drawing(fact, cover, title, style).markup(),
        words.text("map.caption", crs=fact.crs, pixel=pixel),
        words.text("map.alt", count=len(facts.classes), names=names),
    )  # fmt: skip
    yield Legend(words.text("map.legend"), tuple((c.colour, c.name) for c in facts.classes), words.text("map.no_data"))
    yield Explorer()
    confidence = fact.layer("confidence")
    if confidence is not None:
        yield _inset(fact, "confidence", words)
    if fact.layer("reach") is not None:
        yield _inset(fact, "reach", words)


def _inset(fact: MapFact, kind: str, words: Messages) -> Figure:
    layer = fact.layer(kind)
    assert layer is not None, kind
    drawing = map_drawing(fact, layer, words.text(f"map.{kind}_figure"), words.numbers, width=340)
    style = words.numbers
    caption = words.text(
        f"map.{kind}_caption", share=style.percent(fact.low_share), beyond=style.percent(fact.beyond_share),
        percent=style.percent(fact.low_percent / 100, 0),
    )  # fmt: skip
    return Figure(kind, drawing.markup(), caption, words.text(f"map.{kind}_alt"), small=True)
