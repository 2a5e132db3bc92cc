"""What is confused with what by area, and why, as far as the training spectra tell."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from classify.report.charts import spectra_drawing
from classify.report.document import Block, Column, Figure, Paragraph, Section, Table
from classify.report.facts import AccuracyFacts, ReportFacts
from classify.report.messages import Messages

_SHOWN = 6
_DRAWN = 2
_JM_TOP = 2**0.5


def confusion_section(facts: ReportFacts, words: Messages) -> Section | None:
    """The largest confusions; None without a sample."""
    accuracy = facts.accuracy
    if accuracy is None:
        return None
    return Section("confusion", words.text("confusion.title"), tuple(_blocks(facts, accuracy, words)), "sample")


def _blocks(facts: ReportFacts, accuracy: AccuracyFacts, words: Messages) -> Iterator[Block]:
    largest = largest_confusions(accuracy)[:_SHOWN]
    if not largest:
        yield Paragraph(words.rich("confusion.none"))
        return
    yield Paragraph(words.rich("confusion.text"))
    yield Table(
        "confusions", words.text("confusion.table"),
        (
            Column(words.text("column.map_as"), "class"), Column(words.text("column.in_fact")),
            Column(words.text("column.points"), "integer"), Column(words.text("column.share"), "percent", 1),
            Column(words.text("confusion.why")),
        ),
        tuple((a, b, n, share, _why(facts.review, a, b, words)) for a, b, n, share in largest),
    )  # fmt: skip
    drawn: set[frozenset[str]] = set()
    for a, b, _, _ in largest:
        pair = frozenset((a, b))
        if facts.review is None or pair in drawn or len(drawn) == _DRAWN:
            continue
        drawn.add(pair)
        classes = [c for c in facts.review["classes"] if c["name"] in pair]
        title = words.text("confusion.figure", a=a, b=b)
        drawing = spectra_drawing(facts.review["bands"], classes, title, words.numbers)
        if drawing is not None and len(classes) == 2:
            yield Figure(f"spectra-{len(drawn)}", drawing.markup(), words.text("confusion.caption", a=a, b=b), title)


def largest_confusions(accuracy: AccuracyFacts) -> list[tuple[str, str, int, float]]:
    """Map class, reference class, points and share of the area of every confusion, largest area first."""
    found = [
        (a, b, accuracy.counts[i][j], accuracy.shares[i][j])
        for i, a in enumerate(accuracy.classes) for j, b in enumerate(accuracy.classes)
        if i != j and accuracy.counts[i][j]
    ]  # fmt: skip
    return sorted(found, key=lambda row: -row[3])


def _why(review: Mapping[str, Any] | None, a: str, b: str, words: Messages) -> str:
    if review is None:
        return words.text("confusion.why_unknown")
    codes = {c["name"]: c["code"] for c in review["classes"]}
    wanted = {codes.get(a), codes.get(b)}
    pair = next((p for p in review["separability"]["pairs"] if {p["a"], p["b"]} == wanted), None)
    if pair is None or pair["jeffries_matusita"] is None or not pair["best_features"]:
        return words.text("confusion.why_unknown")
    style = words.numbers
    return words.text(
        f"confusion.why_{pair['verdict']}", jm=style.number(pair["jeffries_matusita"], 2),
        top=style.number(_JM_TOP, 2), feature=pair["best_features"][0]["feature"],
    )  # fmt: skip
