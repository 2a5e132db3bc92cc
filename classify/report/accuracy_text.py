"""Sections on areas, accuracies, matrix and agreement."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Literal

from classify.report.answer_text import (
    DRAWN_ON_PAGE_ONE,
    area_figure,
    assessed_classes,
    mapped_table,
    report_kind,
    unit_word,
)
from classify.report.document import Block, Column, Figure, Paragraph, Section, Table, Value
from classify.report.facts import AccuracyFacts, ReportFacts
from classify.report.figures import accuracy_drawing, area_decimals, area_drawing
from classify.report.messages import Messages

# More classes than this and the matrix heads its columns with codes instead of names.
NAMED_COLUMNS = 8


def areas_section(facts: ReportFacts, words: Messages) -> Section | None:
    """Areas as mapped against as estimated; as mapped alone without a sample."""
    accuracy, unit = facts.accuracy, unit_word(facts.unit, words)
    if accuracy is None:
        if facts.map is None:
            return None
        title = words.text("areas.figure_mapped")
        drawing = area_drawing(facts.classes, None, unit, title, words.numbers)
        caption = words.text("areas.caption_mapped")
        figure = Figure("areas", drawing.markup(), caption, title)
        return Section("areas", title, (figure,), "map")
    return Section("areas", words.text("areas.title"), tuple(_areas(facts, accuracy, words)), "sample")


def _areas(facts: ReportFacts, accuracy: AccuracyFacts, words: Messages) -> Iterator[Block]:
    if report_kind(facts) == "sample":
        yield Paragraph(words.rich("areas.text"))
        outside = [n for n in accuracy.classes if _is_outside(accuracy, n)]
        unknown = [n for n in accuracy.classes if accuracy.mapped[n] is None]
        if outside or not unknown:
            key = "areas.outside" if outside else "areas.outside_none"
            yield Paragraph(words.rich(key, names=", ".join(outside)))
        if unknown:
            yield Paragraph(words.rich("areas.unmatched", names=", ".join(unknown)), "caution")
    if len(accuracy.classes) > DRAWN_ON_PAGE_ONE:
        yield area_figure(facts, accuracy, words)
    yield _area_table(accuracy, words)
    yield from _region_tables(accuracy, words)
    if facts.map is not None:
        yield mapped_table(facts, words)


def _region_tables(accuracy: AccuracyFacts, words: Messages) -> Iterator[Table]:
    """Accuracy of each region, and its class areas."""
    if not accuracy.regions:
        return
    limits = ("lower", "upper")
    columns = (
        Column(words.text("column.region")),
        Column(words.text("column.points"), "integer"),
        Column(words.text("agreement.overall"), "percent", 1),
        *(Column(words.text(f"column.{key}"), "percent", 1) for key in limits),
    )
    rows = tuple((r.region, r.n, r.overall.estimate, r.overall.lower, r.overall.upper) for r in accuracy.regions)
    yield Table("regions", words.text("areas.regions"), columns, rows)
    unit = unit_word(accuracy.unit, words)
    places = area_decimals([a for r in accuracy.regions for a in r.area.values()])
    columns = (
        Column(words.text("column.region")),
        Column(words.text("column.class")),
        *(Column(words.text(f"column.{key}"), "number", places, unit) for key in ("estimated", *limits)),
    )
    areas = tuple((r.region, n, a.estimate, a.lower, a.upper) for r in accuracy.regions for n, a in r.area.items())
    yield Table("region_areas", words.text("areas.region_areas"), columns, areas)


def _is_outside(accuracy: AccuracyFacts, name: str) -> bool:
    mapped, area = accuracy.mapped[name], accuracy.area[name]
    if mapped is None or area.lower is None or area.upper is None:
        return False
    return not area.lower <= mapped <= area.upper


def _area_table(accuracy: AccuracyFacts, words: Messages) -> Table:
    unit = unit_word(accuracy.unit, words)
    places = area_decimals(list(accuracy.area.values()))
    keys = ("mapped", "estimated", "standard_error", "lower", "upper")
    columns = (
        Column(words.text("column.class"), "class"),
        *(Column(words.text(f"column.{key}"), "number", places, unit) for key in keys),
        Column(words.text("column.interval")),
    )
    rows = tuple(
        (n, accuracy.mapped[n], a.estimate, a.standard_error, a.lower, a.upper, a.interval)
        for n, a in ((n, accuracy.area[n]) for n in accuracy.classes)
    )
    return Table("areas", words.text("areas.table"), columns, rows)


def accuracy_section(facts: ReportFacts, words: Messages) -> Section | None:
    """User's and producer's accuracies; None without a sample."""
    accuracy = facts.accuracy
    if accuracy is None:
        return None
    return Section("accuracy", words.text("accuracy.title"), tuple(_accuracies(facts, accuracy, words)), "sample")


def _accuracies(facts: ReportFacts, accuracy: AccuracyFacts, words: Messages) -> Iterator[Block]:
    style, level = words.numbers, words.numbers.percent(accuracy.level, 0)
    if report_kind(facts) != "sample":
        yield Paragraph(words.rich("accuracy.purposive"), "caution")
    yield Paragraph(words.rich("accuracy.text"))
    for key, estimates in (("users", accuracy.users), ("producers", accuracy.producers)):
        known = {n: e.estimate for n, e in estimates.items() if e.estimate is not None}
        worst = min(known, key=lambda n: known[n], default=None)
        if worst is not None and known[worst] < 1:
            share = style.percent(1 - known[worst], 0)
            yield Paragraph(words.rich(f"accuracy.worst_{key}", name=worst, share=share))
    classes = assessed_classes(facts, accuracy)
    users, producers = ([e[n] for n in accuracy.classes] for e in (accuracy.users, accuracy.producers))
    alt = "; ".join(
        words.text("accuracy.alt_row", name=n, users=style.percent(u.estimate), producers=style.percent(p.estimate))
        for n, u, p in zip(accuracy.classes, users, producers, strict=True)
    )
    drawing = accuracy_drawing(classes, users, producers, words.text("accuracy.figure", level=level), style)
    if accuracy.either is not None:
        share = style.percent(accuracy.either.estimate)
        yield Paragraph(words.rich("accuracy.either", share=share))
    if accuracy.unlabelled:
        low, high = (style.percent(bound) for bound in accuracy.unlabelled_bounds)
        yield Paragraph(words.rich("accuracy.unlabelled", points=accuracy.unlabelled, low=low, high=high), "caution")
    yield Figure("accuracy", drawing.markup(), words.text("accuracy.caption", level=level), alt)
    yield _accuracy_table(accuracy, words)


def _accuracy_table(accuracy: AccuracyFacts, words: Messages) -> Table:
    limits = [Column(words.text(f"column.{key}"), "percent", 1) for key in ("lower", "upper")]
    columns = (
        Column(words.text("column.class"), "class"),
        Column(words.text("column.users"), "percent", 1), *limits,
        Column(words.text("column.producers"), "percent", 1), *limits,
        Column(words.text("column.f1"), "percent", 1),
    )  # fmt: skip
    rows = []
    for n in accuracy.classes:
        u, p = accuracy.users[n], accuracy.producers[n]
        rows.append((n, u.estimate, u.lower, u.upper, p.estimate, p.lower, p.upper, accuracy.f1[n].estimate))
    return Table("accuracy", words.text("accuracy.table"), columns, tuple(rows))


def matrix_section(facts: ReportFacts, words: Messages) -> Section | None:
    """The matrix as counts and as area shares; None without a sample."""
    accuracy = facts.accuracy
    if accuracy is None:
        return None
    codes = {c.name: c.code for c in facts.classes}
    blocks: list[Block] = [Paragraph(words.rich("matrix.text"))]
    totals = [*(sum(column) for column in zip(*accuracy.counts, strict=True))]
    rows = [(n, *row, sum(row)) for n, row in zip(accuracy.classes, accuracy.counts, strict=True)]
    total = words.text("column.total")
    counts = [*rows, (total, *totals, sum(totals))]
    blocks.append(matrix_table("matrix_counts", words.text("matrix.counts"), accuracy.classes, codes, counts, words))
    share_totals = [*(sum(column) for column in zip(*accuracy.shares, strict=True))]
    shares = [(n, *row, sum(row)) for n, row in zip(accuracy.classes, accuracy.shares, strict=True)]
    shares.append((total, *share_totals, sum(share_totals)))
    blocks.append(matrix_table("matrix_shares", words.text("matrix.shares"), accuracy.classes, codes, shares, words,
                               kind="percent"))  # fmt: skip
    return Section("matrix", words.text("matrix.title"), tuple(blocks), "sample")


def matrix_table(  # noqa: PLR0917 - what is shown, and in which words
    name: str, title: str, classes: Sequence[str], codes: dict[str, int], rows: Sequence[tuple[Value, ...]],
    words: Messages, *, kind: Literal["integer", "percent"] = "integer", corner: str = "map_as",
) -> Table:  # fmt: skip
    """A square table of classes with totals (last row and column), columns headed by names or, of many, by codes."""
    named = len(classes) <= NAMED_COLUMNS
    heads = [n if named else str(codes.get(n, i + 1)) for i, n in enumerate(classes)]
    columns = (
        Column(words.text(f"column.{corner}"), "class"),
        *(Column(head, kind, int(kind == "percent")) for head in (*heads, words.text("column.total"))),
    )
    notes = [] if named else [words.text("matrix.numbers_note")]
    if kind == "percent":
        notes.append(words.text("matrix.percent_note"))
    if not named:
        marked = [(f"{head} · {row[0]}", *row[1:]) for head, row in zip(heads, rows[:-1], strict=True)]
        rows = [*marked, rows[-1]]
    return Table(name, title, columns, tuple(rows), " ".join(notes), "matrix", () if named else tuple(classes))


def agreement_section(facts: ReportFacts, words: Messages) -> Section | None:
    """Kappa with its caveat, quantity and allocation disagreement; None without a sample."""
    accuracy = facts.accuracy
    if accuracy is None:
        return None
    columns = (
        Column(words.text("column.measure")),
        *(Column(words.text(f"column.{key}"), "number", 3) for key in ("value", "standard_error", "lower", "upper")),
    )
    rows: list[tuple[Value, ...]] = [
        (words.text(f"agreement.{key}"), e.estimate, e.standard_error, e.lower, e.upper)
        for key, e in (("overall", accuracy.overall), ("kappa", accuracy.kappa))
    ]
    for key, value in (("quantity", accuracy.quantity), ("allocation", accuracy.allocation)):
        rows.append((words.text(f"agreement.{key}"), value, None, None, None))
    blocks = (
        Paragraph(words.rich("agreement.text")),
        Table("agreement", words.text("agreement.table"), columns, tuple(rows), words.text("agreement.remark")),
    )
    return Section("agreement", words.text("agreement.title"), blocks, "sample")
