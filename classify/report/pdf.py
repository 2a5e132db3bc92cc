"""The report as PDF: the same document, set by Typst from its wheel. Tagged, with outline and metadata.

PDF/UA-1 is asked for. When a name has a glyph that no font of this machine holds, that standard cannot be met: the file
is then written as plain tagged PDF that says so on page one.
"""

from __future__ import annotations

import json
import re
import tempfile
from datetime import UTC, datetime
from functools import cache
from importlib.resources import files
from pathlib import Path
from typing import Any

import typst

from classify.errors import OutputError
from classify.report import cells
from classify.report.document import (
    Block,
    Code,
    Document,
    Explorer,
    Figure,
    Legend,
    Listing,
    Pairs,
    Paragraph,
    Section,
    Subheading,
    Table,
)
from classify.report.facts import ReportFacts
from classify.report.identity import COLOURS
from classify.report.messages import Messages, Rich, load_messages

# No drawing may be taller than a page: the height that is left for it, in mm, and the width of the text.
_TALLEST_MM, _WIDTH_MM = 215, 170
_TALLEST_MAP_MM = 122


def render_pdf(document: Document, facts: ReportFacts) -> bytes:
    """Set the document; returns the file's bytes. Raises OutputError when the typesetter fails."""
    words = load_messages(document.language)
    with tempfile.TemporaryDirectory(prefix="landassay-") as scratch:
        folder = Path(scratch)
        content = _document(document, facts, words, folder)
        (folder / "document.json").write_text(json.dumps(content, allow_nan=False), encoding="utf-8")
        main = folder / "main.typ"
        main.write_text(files("classify.report").joinpath("templates/report.typ").read_text("utf-8"), encoding="utf-8")
        try:
            return _compile(main, facts, ["ua-1"])
        except typst.TypstError as error:
            if "could not be displayed" not in str(error.message):
                raise OutputError(f"the PDF cannot be set: {error.message}", fix="report this as a defect") from error
            content["notice"] = words.text("head.glyphs")
            (folder / "document.json").write_text(json.dumps(content, allow_nan=False), encoding="utf-8")
            return _compile(main, facts, [])


def _compile(main: Path, facts: ReportFacts, standards: list[Any]) -> bytes:
    date = facts.heading.date or "1970-01-01"
    # The date of the results, not of the run: the same results give the same bytes.
    when = datetime.fromisoformat(date).replace(tzinfo=UTC)
    compiler = typst.Compiler(root=main.parent, font_paths=_fonts())
    made = compiler.compile(main, format="pdf", pdf_standards=standards, timestamp=when)
    assert isinstance(made, bytes), type(made)
    return made


@cache
def _fonts() -> typst.Fonts:
    """All fonts of this machine; finding them takes longer than setting a page."""
    return typst.Fonts()


def _document(document: Document, facts: ReportFacts, words: Messages, folder: Path) -> dict[str, Any]:
    """The document as plain data for the template; drawings and the logo are written into `folder`."""
    logo = None
    if facts.heading.logo is not None:
        logo = "logo.png" if facts.heading.logo.startswith(b"\x89PNG") else "logo.jpg"
        (folder / logo).write_bytes(facts.heading.logo)
    return {
        "kind": document.kind, "title": document.title, "author": facts.heading.author, "language": document.language,
        "notice": "", "logo": logo, "facts": [list(pair) for pair in document.facts], "footer": document.footer,
        "colours": COLOURS, "evidence": words.text("head.evidence"),
        "sections": [_section(section, facts, words, folder) for section in document.sections],
    }  # fmt: skip


def _section(section: Section, facts: ReportFacts, words: Messages, folder: Path) -> dict[str, Any]:
    evidence = section.evidence
    return {
        "key": section.key, "title": section.title, "intro": section.intro, "evidence": evidence,
        "evidence_text": words.text(f"evidence.{evidence}") if evidence else "",
        "explain": words.text(f"evidence.key_{evidence}") if evidence else "",
        "blocks": [
            _block(block, facts, words, folder) for block in section.blocks if not isinstance(block, Explorer)
        ],
    }  # fmt: skip


def _block(  # noqa: PLR0911 - one a kind of block
    block: Block, facts: ReportFacts, words: Messages, folder: Path
) -> dict[str, Any]:
    kind = {"block": type(block).__name__}
    match block:
        case Paragraph():
            return {**kind, "text": _rich(block.text), "role": block.role, "lang": "en" if block.foreign else None}
        case Subheading():
            return {**kind, "text": block.text}
        case Table():
            return {**kind, **_table(block, facts, words)}
        case Figure():
            (folder / f"{block.name}.svg").write_text(block.svg, encoding="utf-8")
            return {**kind, "file": f"{block.name}.svg", "caption": block.caption, "alt": block.alt, **_size(block)}
        case Legend():
            return {**kind, "entries": [list(e) for e in block.entries], "no_data": block.no_data}
        case Pairs():
            return {**kind, "rows": [list(row) for row in block.rows]}
        case Listing():
            return {**kind, "items": [_rich(i) for i in block.items], "role": block.role}
        case Code():
            return {**kind, "text": block.text}
    raise AssertionError(block)


def _size(figure: Figure) -> dict[str, Any]:
    """Width of a drawing as a share of the text, and the height that it is kept within, in mm."""
    width, height = (float(v) for v in re.search(r'viewBox="0 0 ([\d.]+) ([\d.]+)"', figure.svg).groups())  # type: ignore[union-attr]
    share = min(1.0, width / 720)
    tallest = _TALLEST_MAP_MM if figure.name == "map" else _TALLEST_MM
    return {"share": share, "height": min(tallest, _WIDTH_MM * share * height / width)}


def _table(table: Table, facts: ReportFacts, words: Messages) -> dict[str, Any]:
    matrix = table.layout == "matrix"
    known = {c.name: c.colour for c in facts.classes}
    rows = []
    for r, row in enumerate(table.rows):
        listed = []
        for c, (column, value) in enumerate(zip(table.columns, row, strict=True)):
            listed.append({
                "text": cells.printed(column, value, words),
                "tint": cells.tint(table, r, c) if matrix else 0.0,
                "same": matrix and cells.is_diagonal(table, r, c),
            })  # fmt: skip
        rows.append({"colour": known.get(table.row_class(r)), "cells": listed})
    heads = [c.heading if matrix else cells.heading(c, words) for c in table.columns]
    longest = [max((len(str(row[c])) for row in table.rows), default=0) for c in range(len(table.columns))]
    starts = [c.kind in ("text", "class", "code") for c in table.columns]
    return {
        "title": table.title, "heads": heads, "starts": starts, "longest": longest,
        "code": [c.kind == "code" for c in table.columns], "rows": rows, "note": table.note, "matrix": matrix,
    }  # fmt: skip


def _rich(text: Rich) -> list[list[Any]]:
    return [[span.text, span.strong] for span in text]
