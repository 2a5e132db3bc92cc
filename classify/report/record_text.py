"""Method, cautions, terms and the run record."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from classify.report.answer_text import report_kind, sample_claim, unit_word
from classify.report.document import Block, Code, Column, Listing, Pairs, Paragraph, Section, Subheading, Table
from classify.report.facts import AccuracyFacts, ReportFacts
from classify.report.messages import Messages, Rich, plain


def method_section(facts: ReportFacts, words: Messages) -> Section:
    """Sampling design, response design and estimator, or what the screening rests on."""
    title = words.text("method.title")
    if facts.accuracy is None:
        blocks = (Paragraph(words.rich("method.mapping")), Paragraph(words.rich("method.claim_training")))
        return Section("method", title, blocks)
    return Section("method", title, tuple(_method(facts, facts.accuracy, words)), "sample")


def _method(facts: ReportFacts, accuracy: AccuracyFacts, words: Messages) -> Iterator[Block]:
    style, unit = words.numbers, unit_word(accuracy.unit, words)
    if report_kind(facts) == "sample":
        yield Paragraph(sample_claim(accuracy, words))
    else:
        yield Paragraph(words.rich(f"method.claim_{'purposive' if report_kind(facts) == 'purposive' else 'training'}"))
    yield Subheading(words.text("method.design"))
    key = accuracy.design_kind.replace(" ", "_") + ("_post_stratified" if accuracy.post_stratified else "")
    area = style.rounded(accuracy.total_area, 4) + (f"\u00a0{unit}" if unit else "")
    yield Paragraph(
        words.rich(f"method.design_{key}", points=style.number(accuracy.points), strata=len(accuracy.strata), area=area)
    )
    if accuracy.clusters is not None:
        yield Paragraph(words.rich("method.clusters", clusters=style.number(accuracy.clusters)))
    yield Table(
        "strata", words.text("method.strata"),
        (
            Column(words.text("column.stratum"), "class"),
            Column(words.text("column.area"), "number", 0 if accuracy.total_area >= 1000 else 1, unit),
            Column(words.text("column.points"), "integer"),
        ),
        tuple((s.stratum, s.area, s.n) for s in accuracy.strata),
    )  # fmt: skip
    yield Subheading(words.text("method.response"))
    yield Paragraph(plain(facts.response_design) if facts.response_design else words.rich("method.response_text"))
    yield Subheading(words.text("method.estimator_title"))
    yield Paragraph(words.rich("method.estimator"))
    everything = [accuracy.overall, accuracy.kappa]
    for estimates in (accuracy.users, accuracy.producers, accuracy.f1, accuracy.area):
        everything += estimates.values()
    kinds = sorted({e.interval for e in everything if e.interval})
    if kinds:
        yield Paragraph(words.rich("method.intervals", kinds="; ".join(kinds)))


def cautions_section(facts: ReportFacts, words: Messages) -> Section:
    """Limits that hold for every map, those of this evidence, and every warning of the work."""
    items = list(words.listing("cautions.items"))
    kind = {"sample": "sample", "purposive": "purposive", "screening": "training"}[report_kind(facts)]
    items.append(words.rich(f"cautions.{kind}"))
    if facts.map is not None and facts.map.layer("confidence") is not None:
        items.append(words.rich("cautions.confidence"))
    blocks: list[Block] = [Listing(tuple(items), "caution")]
    warnings = list(_warnings(facts, words))
    if warnings:
        blocks += [Subheading(words.text("cautions.warnings")), Listing(tuple(warnings), "warning", foreign=True)]
    return Section("cautions", words.text("cautions.title"), tuple(blocks))


def _warnings(facts: ReportFacts, words: Messages) -> Iterator[Rich]:
    """Every warning once: stages hand on what earlier ones have said."""
    listed = [("", text) for text in (facts.accuracy.warnings if facts.accuracy else ())]
    listed += facts.warnings
    listed += [("train", text) for text in (facts.model.warnings if facts.model else ())]
    said: list[str] = []
    for stage, text in listed:
        if any(text in earlier for earlier in said):
            continue
        said.append(text)
        yield words.rich("cautions.warning_of", stage=words.text(f"stage.{stage}"), text=text) if stage else plain(text)


def glossary_section(facts: ReportFacts, words: Messages) -> Section:
    """Terms in plain words."""
    terms = Pairs(tuple(words.terms("glossary.terms").items()), "glossary")
    return Section("glossary", words.text("glossary.title"), (terms,))


def record_section(facts: ReportFacts, words: Messages) -> Section:
    """Inputs by fingerprint, versions, stage times, settings, command."""
    record = facts.provenance
    if not record.inputs and not record.stages:
        unknown = Paragraph(words.rich("record.none"), "caution")
        return Section("record", words.text("record.title"), (unknown,), "record")
    inputs = tuple((path, size, digest or words.text("record.remote")) for path, size, digest in record.inputs)
    versions = ", ".join(f"{name} {number}" for name, number in record.versions.items())
    blocks: list[Block] = [
        Paragraph(words.rich("record.text")),
        Subheading(words.text("record.command")),
        Code(f"landassay run --project {record.project_file}"),
        Table(
            "inputs", words.text("record.inputs"),
            (Column(words.text("column.file")), Column(words.text("column.bytes"), "integer"),
             Column(words.text("column.hash"), "code")),
            inputs,
        ),
        Table(
            "stages", words.text("record.stages"),
            (Column(words.text("column.stage")), Column(words.text("column.finished")),
             Column(words.text("column.seconds"), "number", 1)),
            tuple((words.text(f"stage.{n}") if n in words.terms("stage") else n, t.replace("+00:00", ""), s)
                  for n, t, s in record.stages),
        ),
        Subheading(words.text("record.versions")),
        Paragraph(plain(f"{versions} · {record.system}"), "note"),
        Subheading(words.text("record.settings")),
        Code("\n".join(_settings(record.settings))),
    ]  # fmt: skip
    return Section("record", words.text("record.title"), tuple(blocks), "record")


def _settings(content: Mapping[str, Any], path: str = "") -> Iterator[str]:
    """One line a setting: key path = value."""
    for key, value in content.items():
        name = f"{path}.{key}" if path else key
        if isinstance(value, Mapping):
            yield from _settings(value, name)
        elif isinstance(value, list) and value and isinstance(value[0], Mapping):
            for i, entry in enumerate(value, start=1):
                yield from _settings(entry, f"{name}[{i}]")
        else:
            yield f"{name} = {value!r}"
