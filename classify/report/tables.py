"""The tables of the report as a workbook: one sheet a table, numbers as numbers, nothing for a spreadsheet to run."""

from __future__ import annotations

import io
from datetime import UTC, datetime

import xlsxwriter
from xlsxwriter.format import Format
from xlsxwriter.worksheet import Worksheet

from classify.report import cells
from classify.report.document import Column, Document, Table, Value
from classify.report.facts import ReportFacts
from classify.report.identity import COLOURS
from classify.report.messages import Messages, load_messages

ABOUT = "about"
# Rows of a sheet: title, note, a blank one, headings, then data.
HEADING_ROW = 3
_WIDEST = 60


def render_xlsx(document: Document, facts: ReportFacts) -> bytes:
    """The workbook's bytes; the same document gives the same bytes."""
    words = load_messages(document.language)
    buffer = io.BytesIO()
    safe = {"strings_to_formulas": False, "strings_to_urls": False, "strings_to_numbers": False, "in_memory": True}
    with xlsxwriter.Workbook(buffer, safe) as book:
        date = datetime.fromisoformat(facts.heading.date or "1980-01-01").replace(tzinfo=UTC)
        book.set_properties({"title": document.title, "author": facts.heading.author, "created": date,
                             "subject": document.kind})  # fmt: skip
        formats = _Formats(book)
        _about(book.add_worksheet(ABOUT), document, words, formats)
        for table in document.tables:
            _sheet(book.add_worksheet(table.name), table, words, formats)
    return buffer.getvalue()


class _Formats:
    """Cell formats of the identity, made once each."""

    def __init__(self, book: xlsxwriter.Workbook) -> None:
        self._book = book
        self._numbers: dict[str, Format] = {}
        self.title = book.add_format({"bold": True, "font_size": 14, "font_color": COLOURS["accent"]})
        self.note = book.add_format({"italic": True, "font_color": COLOURS["soft"]})
        self.text = book.add_format({"valign": "top"})
        self.wrapped = book.add_format({"text_wrap": True, "valign": "top"})
        self.label = book.add_format({"font_color": COLOURS["soft"], "valign": "top"})
        edge = {"bottom": 1, "bold": True, "text_wrap": True, "valign": "bottom"}
        self.start, self.end = book.add_format(edge), book.add_format({**edge, "align": "right"})

    def number(self, column: Column) -> Format:
        """Format that shows what the document prints; the cell keeps all digits."""
        places = "." + "0" * column.decimals if column.decimals > 0 else ""
        pattern = f"0{places}%" if column.kind == "percent" else f"#,##0{places}"
        if pattern not in self._numbers:
            self._numbers[pattern] = self._book.add_format({"num_format": pattern})
        return self._numbers[pattern]


def _about(sheet: Worksheet, document: Document, words: Messages, formats: _Formats) -> None:
    """What the workbook is and what each sheet rests on."""
    sheet.set_column(0, 0, 26)
    sheet.set_column(1, 1, 90)
    sheet.write_string(0, 0, document.title, formats.title)
    sheet.write_string(1, 0, document.kind, formats.note)
    row = 3
    for label, value in document.facts:
        sheet.write_string(row, 0, label, formats.label)
        sheet.write_string(row, 1, value, formats.wrapped)
        row += 1
    row += 1
    for section in document.sections:
        for block in section.blocks:
            if isinstance(block, Table):
                basis = words.text(f"evidence.{section.evidence}") if section.evidence else ""
                sheet.write_string(row, 0, block.name, formats.label)
                sheet.write_string(row, 1, f"{block.title} ({basis})" if basis else block.title, formats.wrapped)
                row += 1


def _sheet(sheet: Worksheet, table: Table, words: Messages, formats: _Formats) -> None:
    sheet.write_string(0, 0, table.title, formats.title)
    sheet.write_string(1, 0, table.note, formats.note)
    for c, column in enumerate(table.columns):
        left = column.kind in ("text", "class", "code")
        sheet.write_string(HEADING_ROW, c, cells.heading(column, words), formats.start if left else formats.end)
        for r, row in enumerate(table.rows, start=HEADING_ROW + 1):
            _cell(sheet, r, c, column, row[c], formats)
        longest = max((len(str(row[c])) for row in table.rows if isinstance(row[c], str)), default=0)
        sheet.set_column(c, c, min(max(longest + 2, 13), _WIDEST))
    sheet.freeze_panes(HEADING_ROW + 1, 1)


def _cell(  # noqa: PLR0917 - a cell and where it goes
    sheet: Worksheet, row: int, place: int, column: Column, value: Value, formats: _Formats
) -> None:
    if value is None:
        sheet.write_blank(row, place, None)
    elif isinstance(value, str):
        # As a string whatever it begins with: a class called "=1+1" is a name.
        sheet.write_string(row, place, value, formats.text)
    else:
        sheet.write_number(row, place, value, formats.number(column))
