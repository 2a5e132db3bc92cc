"""Page one: the answer to "how sure are you?", no stronger than the evidence."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Literal

from classify.report.document import Block, Column, EvidenceKind, Figure, Paragraph, Section, Table
from classify.report.facts import AccuracyFacts, ClassFact, ReportFacts
from classify.report.figures import area_decimals, area_drawing
from classify.report.messages import Messages, Rich
from classify.report.numbers import is_symmetric, share_decimals

# With more classes than this the drawing of areas would crowd the answer off page one.
DRAWN_ON_PAGE_ONE = 10
_RESERVED = {"distance": "distance kept", "reserves": "reserves used"}


def report_kind(facts: ReportFacts) -> Literal["sample", "purposive", "screening"]:
    """What the report may call itself."""
    if facts.accuracy is None or facts.accuracy.evidence == "held-out training polygons":
        return "screening"
    return "sample" if facts.accuracy.evidence == "probability sample" else "purposive"


def answer_section(facts: ReportFacts, words: Messages) -> Section:
    """The answer, the areas, and what is missing."""
    kind = report_kind(facts)
    writers = {"sample": _from_sample, "purposive": _from_chosen_places, "screening": _from_screening}
    blocks: list[Block] = list(writers[kind](facts, words))
    missing = [words.text(f"stage.{stage}") for stage in facts.missing]
    if missing:
        blocks.append(Paragraph(words.rich("answer.missing", stages=", ".join(missing)), "caution"))
    evidence: EvidenceKind = "training" if kind == "screening" else "sample"
    return Section("answer", words.text("answer.title"), tuple(blocks), evidence, intro=True)


def _from_sample(facts: ReportFacts, words: Messages) -> Iterator[Block]:
    accuracy, style = facts.accuracy, words.numbers
    assert accuracy is not None
    overall = accuracy.overall
    if overall.estimate is None or overall.lower is None or overall.upper is None:
        sentence = words.rich("answer.overall_bare", estimate=style.percent(overall.estimate))
    else:
        places = share_decimals(overall.lower, overall.upper)
        shown = [style.percent(v, places) for v in (overall.estimate, overall.lower, overall.upper)]
        sentence = words.rich("answer.overall", estimate=shown[0], lower=shown[1], upper=shown[2])
    yield Paragraph((*sentence, *words.rich("answer.space"), *_area_sentence(accuracy, words)), "lead")
    yield Paragraph(
        words.rich("answer.level", level=style.percent(accuracy.level, 0), points=style.number(accuracy.points)), "note"
    )
    if accuracy.reservations:
        yield Paragraph(sample_claim(accuracy, words), "caution")
    if len(accuracy.classes) <= DRAWN_ON_PAGE_ONE:
        yield area_figure(facts, accuracy, words)
    yield _glance(accuracy, words)


def sample_claim(accuracy: AccuracyFacts, words: Messages) -> Rich:
    """What a probability sample may claim, less what its reservations take from it."""
    base = "probability"
    if "design assumed" in accuracy.reservations:
        base = "assumed"
    elif "part left out" in accuracy.reservations:
        base = "part"
    keys = [base, *(k for k in ("distance", "reserves") if _RESERVED[k] in accuracy.reservations)]
    sentences = [words.rich(f"method.claim_{key}") for key in keys]
    return tuple(span for one in sentences for span in (*one, *words.rich("answer.space")))[:-1]


def area_figure(facts: ReportFacts, accuracy: AccuracyFacts, words: Messages) -> Figure:
    """Areas as estimated and as mapped, drawn."""
    style, unit, level = words.numbers, unit_word(accuracy.unit, words), words.numbers.percent(accuracy.level, 0)
    classes = assessed_classes(facts, accuracy)
    areas = [accuracy.area[n] for n in accuracy.classes]
    alt = "; ".join(
        words.text("areas.alt_row", name=c.name, area=style.with_margin(a.estimate, a.lower, a.upper, unit),
                   mapped=style.rounded(c.mapped))
        for c, a in zip(classes, areas, strict=True)
    )  # fmt: skip
    title = words.text("areas.figure", level=level)
    drawing = area_drawing(classes, areas, unit, title, style)
    caption = "areas.caption" if has_mapped(accuracy) else "areas.caption_estimated"
    return Figure("areas", drawing.markup(), words.text(caption, level=level), alt)


def has_mapped(accuracy: AccuracyFacts) -> bool:
    """Whether the mapped area of any class is known for what the estimates stand for."""
    return any(area is not None for area in accuracy.mapped.values())


def assessed_classes(facts: ReportFacts, accuracy: AccuracyFacts) -> list[ClassFact]:
    """Classes in the order of the assessment, with the mapped areas that it used."""
    known = {c.name: c for c in facts.classes}
    return [
        ClassFact(known[n].code if n in known else i + 1, n, facts.colour(n), mapped=accuracy.mapped[n])
        for i, n in enumerate(accuracy.classes)
    ]


def _area_sentence(accuracy: AccuracyFacts, words: Messages) -> Rich:
    """The largest class, and the one known least well for its size."""
    unit = unit_word(accuracy.unit, words)
    widths: dict[str, float] = {}
    for name, area in accuracy.area.items():
        if area.estimate and area.lower is not None and area.upper is not None:
            widths[name] = (area.upper - area.lower) / area.estimate
    if not widths:
        return words.rich("answer.area_none")

    def spoken(name: str) -> str:
        area = accuracy.area[name]
        return words.numbers.with_margin(area.estimate, area.lower, area.upper, unit)

    largest = max(widths, key=lambda name: accuracy.area[name].estimate or 0.0)
    least = max(widths, key=lambda name: widths[name])
    if least == largest:
        return words.rich("answer.area_same", name=largest, area=spoken(largest))
    return words.rich("answer.area_one", name=largest, area=spoken(largest), least=least, least_area=spoken(least))


def _from_chosen_places(facts: ReportFacts, words: Messages) -> Iterator[Block]:
    accuracy = facts.accuracy
    assert accuracy is not None
    estimate = words.numbers.percent(accuracy.overall.estimate)
    yield Paragraph(words.rich("answer.overall_bare", estimate=estimate), "lead")
    yield Paragraph(words.rich("answer.purposive"), "caution")
    yield _glance(accuracy, words)


def _from_screening(facts: ReportFacts, words: Messages) -> Iterator[Block]:
    screening = facts.model.screening if facts.model else None
    share = screening.get("screening_accuracy") if screening else None
    second = words.rich("answer.screening_none")
    if share is not None:
        second = words.rich("answer.screening_value", share=words.numbers.percent(share, 0))
    yield Paragraph((*words.rich("answer.screening"), *words.rich("answer.space"), *second), "lead")
    if facts.map is None:
        yield Paragraph(words.rich("answer.no_map"))
        return
    yield Paragraph(words.rich("answer.mapped_only"), "caution")
    yield mapped_table(facts, words)


def _glance(accuracy: AccuracyFacts, words: Messages) -> Table:
    """Areas with margins and both accuracies, one row a class. Intervals are written out unless all are even."""
    unit = unit_word(accuracy.unit, words)
    areas = list(accuracy.area.values())
    even = all(
        is_symmetric(a.estimate, a.lower, a.upper) for a in areas
        if a.estimate is not None and a.lower is not None and a.upper is not None
    )  # fmt: skip
    limits = ("margin",) if even else ("lower", "upper")
    area_columns = ("estimated", *(limits if any(a.lower is not None for a in areas) else ()))
    area_columns = (*area_columns, *(("mapped",) if has_mapped(accuracy) else ()))
    columns = (
        Column(words.text("column.class"), "class"),
        *(Column(words.text(f"column.{c}"), "number", area_decimals(areas), unit) for c in area_columns),
        Column(words.text("column.users"), "percent"),
        Column(words.text("column.producers"), "percent"),
    )
    rows = []
    for name in accuracy.classes:
        area = accuracy.area[name]
        half = None if area.lower is None or area.upper is None else (area.upper - area.lower) / 2
        values = {
            "estimated": area.estimate, "margin": half, "lower": area.lower, "upper": area.upper,
            "mapped": accuracy.mapped[name],
        }  # fmt: skip
        accuracies = accuracy.users[name].estimate, accuracy.producers[name].estimate
        rows.append((name, *(values[c] for c in area_columns), *accuracies))
    return Table("glance", words.text("answer.glance"), columns, tuple(rows))


def mapped_table(facts: ReportFacts, words: Messages) -> Table:
    """Areas counted from the map, without margins."""
    unit = unit_word(facts.unit, words)
    total = sum(c.mapped or 0.0 for c in facts.classes)
    columns = (
        Column(words.text("column.class"), "class"),
        Column(words.text("column.code"), "integer"),
        Column(words.text("column.pixels"), "integer"),
        Column(words.text("column.mapped"), "number", 0 if total >= 1000 else 1, unit),
        Column(words.text("column.share"), "percent", 1),
    )
    rows = tuple(
        (c.name, c.code, c.pixels, c.mapped, c.mapped / total if total and c.mapped is not None else None)
        for c in facts.classes
    )
    return Table("mapped", words.text("answer.glance_screening"), columns, rows)


def unit_word(unit: str, words: Messages) -> str:
    """How the language writes an area unit; a unit of the user's own stays as it is."""
    return words.terms("unit").get(unit, unit)
