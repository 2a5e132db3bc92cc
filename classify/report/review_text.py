"""The review of the training polygons as a page of its own, from training/review.json, in the look of the report."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from typing import Any

from classify import __version__
from classify.errors import DataError
from classify.files import write_text
from classify.report.charts import learning_panels, signature_panels, spectra_drawing
from classify.report.document import (
    Block,
    Code,
    Column,
    Document,
    Figure,
    Listing,
    Paragraph,
    Section,
    Subheading,
    Table,
)
from classify.report.facts import ClassFact, Heading, ModelFacts, Provenance, ReportFacts
from classify.report.html import render_html
from classify.report.messages import Messages, load_messages, plain
from classify.report.training_text import training_section

_Writer = Callable[[Mapping[str, Any], Messages], Iterator[Block]]


def write_review(review: Mapping[str, Any], folder: Path, language: str = "en") -> Path:
    """Write review.html into `folder` from the content of review.json. Raises DataError, OutputError, SettingsError."""
    words = load_messages(language)
    try:
        facts = _facts(review, language)
        sections = [
            Section(key, words.text(f"review.{key}"), tuple(write(review, words)), "training", intro=key == "suspects")
            for key, write in _SECTIONS.items()
        ]  # fmt: skip
    except (KeyError, TypeError, ValueError) as error:
        raise DataError(f"the review cannot be read: {error!r}", where=str(folder / "review.json"),
                        fix="run 'landassay check --review' again") from error  # fmt: skip
    document = Document(
        kind=words.text("review.kind"), title=str(review["title"]),
        facts=((words.text("head.version"), f"landassay {__version__}"),),
        sections=(*(s for s in sections if s.blocks), training_section(facts, words)),
        footer=f"{review['title']} · landassay {__version__}", language=words.language,
    )  # fmt: skip
    path = folder / "review.html"
    write_text(path, render_html(document, facts))
    return path


def _facts(review: Mapping[str, Any], language: str) -> ReportFacts:
    """As much of the facts as the page needs: classes with their colours, and the screening."""
    classes = tuple(ClassFact(c["code"], c["name"], c["colour"], c["material"]) for c in review["classes"])
    model = ModelFacts("", (), tuple(c.name for c in classes), None, None, {}, review["screening"], None, None)
    return ReportFacts(
        Heading(str(review["title"]), "", "", "", __version__), language, "m2", 0.95, classes, None, None, model,
        review, (), Provenance(),
    )  # fmt: skip


def _suspects(review: Mapping[str, Any], words: Messages) -> Iterator[Block]:
    found = review["suspects"]
    yield Paragraph(words.rich("review.lead_some" if found else "review.lead_none", count=len(found)), "lead")
    yield Paragraph(plain(review["meaning"]), "note", foreign=True)
    if found:
        yield Table(
            "suspects", words.text("review.suspects_table"),
            (
                Column(words.text("review.polygon")), Column(words.text("column.class"), "text"),
                Column(words.text("review.looks_like")), Column(words.text("review.score"), "number", 2),
                Column(words.text("confusion.why")),
            ),
            tuple((str(s["polygon"]), s["class_name"], s["looks_like"], s["score"], s["sentence"]) for s in found),
        )  # fmt: skip
        yield Paragraph(words.rich("review.exclude"))
        yield Code("exclude = [" + ", ".join(str(s["polygon"]) for s in found) + "]")
    problems = [plain(f"{p['what']} → {p['fix']}" if p["fix"] else p["what"]) for p in review["problems"]]
    if problems:
        yield Subheading(words.text("review.problems"))
        yield Listing(tuple(problems), "warning", foreign=True)


def _balance(review: Mapping[str, Any], words: Messages) -> Iterator[Block]:
    yield Table(
        "balance", words.text("review.balance_table"),
        (
            Column(words.text("column.class"), "class"), Column(words.text("review.material")),
            Column(words.text("column.polygons"), "integer"), Column(words.text("column.pixels"), "integer"),
            Column(words.text("column.area"), "number", 2, words.text("unit.ha")),
            Column(words.text("review.clear"), "percent", 0),
        ),
        tuple(
            (c["name"], c["material"], c["polygons"], c["pixels"], c["area_m2"] / 10_000, c["clear_share"])
            for c in review["classes"]
        ),
    )  # fmt: skip


def _spectra(review: Mapping[str, Any], words: Messages) -> Iterator[Block]:
    title = words.text("review.spectra_figure")
    together = spectra_drawing(review["bands"], review["classes"], title, words.numbers)
    if together is not None:
        yield Figure("spectra", together.markup(), words.text("review.spectra_caption"), title)
    title = words.text("review.panels_figure")
    panels = signature_panels(review, title, words.numbers)
    if panels is not None:
        yield Figure("signatures", panels.markup(), words.text("review.panels_caption"), title)


def _separability(review: Mapping[str, Any], words: Messages) -> Iterator[Block]:
    names = {c["code"]: c["name"] for c in review["classes"]}
    pairs = [p for p in review["separability"]["pairs"] if p["jeffries_matusita"] is not None]
    if not pairs:
        return
    yield Paragraph(words.rich("review.separability_text"))
    yield Table(
        "separability", words.text("review.separability_table"),
        (
            Column(words.text("column.class"), "class"), Column(words.text("review.against")),
            Column(words.text("review.jm"), "number", 2), Column(words.text("review.td"), "number", 2),
            Column(words.text("review.best")), Column(words.text("review.advice")),
        ),
        tuple(
            (names[p["a"]], names[p["b"]], p["jeffries_matusita"], p["transformed_divergence"],
             ", ".join(f["feature"] for f in p["best_features"]), p["advice"])
            for p in pairs
        ),
        str(review["separability"]["scale"]),
    )  # fmt: skip


def _materials(review: Mapping[str, Any], words: Messages) -> Iterator[Block]:
    rows = [
        (str(m["polygon"]), m["class_name"], m["material"], check["value"], check["sentence"])
        for m in review["materials"] for check in m["checks"] if check["met"] is False
    ]  # fmt: skip
    if not review["materials"]:
        return
    yield Paragraph(words.rich("review.materials_text" if rows else "review.materials_none"))
    if rows:
        heads = ("review.polygon", "column.class", "review.material", "column.value", "review.expected")
        kinds = ("text", "text", "text", "number", "text")
        columns = tuple(Column(words.text(h), k, 3 if k == "number" else 0) for h, k in zip(heads, kinds, strict=True))  # type: ignore[arg-type]
        yield Table("materials", words.text("review.materials_table"), columns, tuple(rows))


def _learning(review: Mapping[str, Any], words: Messages) -> Iterator[Block]:
    curve = review["learning_curve"]
    if not curve or not any(c["points"] for c in curve["classes"]):
        return
    yield Paragraph(plain(curve["sentence"]), foreign=True)
    title = words.text("review.learning_figure")
    drawing = learning_panels(curve, {c["name"]: c["colour"] for c in review["classes"]}, title, words.numbers)
    yield Figure("learning", drawing.markup(), words.text("review.learning_caption"), title)
    if curve["advice"]:
        yield Listing(tuple(plain(text) for text in curve["advice"]), foreign=True)


_SECTIONS: dict[str, _Writer] = {
    "suspects": _suspects, "balance": _balance, "spectra": _spectra, "separability": _separability,
    "materials": _materials, "learning": _learning,
}  # fmt: skip
