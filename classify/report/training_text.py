"""What the training polygons say: screening of the model, the model itself. Kept apart from accuracy."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from classify.report.accuracy_text import matrix_table
from classify.report.charts import bars_drawing, reliability_drawing
from classify.report.document import Block, Column, Figure, Listing, Pairs, Paragraph, Section, Subheading, Table
from classify.report.facts import ModelFacts, ReportFacts
from classify.report.messages import Messages, plain

# Features drawn; a model of hundreds has many that matter to nothing.
_LISTED = 20


def training_section(facts: ReportFacts, words: Messages) -> Section:
    """Screening accuracy and its matrix, or that there is none."""
    title = words.text("training.title")
    if facts.model is None:
        return Section("training", title, (Paragraph(words.rich("training.no_train")),), "training")
    screening = facts.model.screening
    if not screening or screening.get("screening_accuracy") is None:
        return Section("training", title, (Paragraph(words.rich("training.none"), "caution"),), "training")
    return Section("training", title, tuple(_screening(facts, screening, words)), "training")


def _screening(facts: ReportFacts, screening: Mapping[str, Any], words: Messages) -> Iterator[Block]:
    style = words.numbers
    yield Paragraph(words.rich("training.text"))
    yield Paragraph(
        words.rich(
            "training.value", share=style.percent(screening["screening_accuracy"]),
            pixels=style.number(screening["held_out_pixels"]), folds=screening["folds"], repeats=screening["repeats"],
            whole=screening["kept_whole"],
        )
    )  # fmt: skip
    if screening.get("leaky_split_accuracy") is not None:
        yield Paragraph(words.rich("training.leaky", share=style.percent(screening["leaky_split_accuracy"])), "note")
    names = {c.code: c.name for c in facts.classes}
    classes = [names.get(code, str(code)) for code in screening["class_codes"]]
    yield Table(
        "screening_classes", words.text("training.by_class"),
        (
            Column(words.text("column.class"), "class"),
            Column(words.text("column.found"), "percent", 1),
            Column(words.text("column.right"), "percent", 1),
        ),
        tuple(zip(classes, screening["share_found"], screening["share_right"], strict=True)),
        words.text("training.by_class_note"),
    )  # fmt: skip
    counts = screening["counts"]
    rows = [(n, *row, sum(row)) for n, row in zip(classes, counts, strict=True)]
    codes = {c.name: c.code for c in facts.classes}
    totals = [sum(column) for column in zip(*counts, strict=True)]
    rows.append((words.text("column.total"), *totals, sum(totals)))
    title = words.text("training.table")
    yield matrix_table("screening_matrix", title, classes, codes, rows, words, corner="polygon_label")
    if screening.get("unscreened_codes"):
        missing = ", ".join(names.get(code, str(code)) for code in screening["unscreened_codes"])
        yield Paragraph(words.rich("training.unscreened", names=missing), "caution")
    if screening.get("notes"):
        yield Listing(tuple(plain(note) for note in screening["notes"]), "warning", foreign=True)


def model_section(facts: ReportFacts, words: Messages) -> Section | None:
    """Kind of model, features, settings; None when nothing was trained."""
    model = facts.model
    if model is None:
        return None
    style = words.numbers
    pairs = [
        (words.text("model.kind"), model.kind),
        (words.text("model.features"), ", ".join(model.features)),
        (words.text("model.classes"), ", ".join(model.classes)),
    ]
    for key, count in (("polygons", model.polygons), ("pixels", model.pixels)):
        if count is not None:
            pairs.append((words.text(f"model.{key}"), style.number(count)))
    blocks: list[Block] = [Pairs(tuple(pairs))]
    blocks += _importance(model, words)
    blocks += _reliability(model, words)
    return Section("model", words.text("model.title"), tuple(blocks), "training")


def _importance(model: ModelFacts, words: Messages) -> Iterator[Block]:
    """Losses when a group of features, or a single one, is shuffled; the larger ones only."""
    if not model.importance:
        return
    yield Subheading(words.text("model.importance"))
    for key in ("groups", "features"):
        items = [(f["name"], f["loss"], f["spread"]) for f in model.importance.get(key) or ()][:_LISTED]
        if items:
            title = words.text(f"model.importance_{key}")
            drawing = bars_drawing(items, title, words.numbers)
            alt = "; ".join(f"{name}: {words.numbers.number(100 * loss, 1)}" for name, loss, _ in items)
            caption = f"{title}. {words.text('model.importance_caption')}"
            yield Figure(f"importance-{key}", drawing.markup(), caption, alt)


def _reliability(model: ModelFacts, words: Messages) -> Iterator[Block]:
    calibration = model.calibration or {}
    if calibration.get("error") is not None:
        yield Paragraph(words.rich("model.calibration", error=words.numbers.percent(calibration["error"])))
    if calibration.get("reliability"):
        title = words.text("model.reliability_figure")
        axes = words.text("model.said"), words.text("model.right")
        drawing = reliability_drawing(calibration["reliability"], title, axes, words.numbers)
        yield Figure("reliability", drawing.markup(), words.text("model.reliability_caption"), title, small=True)
