"""Read the tables of a delivered page and workbook back, with the standard library alone."""

from __future__ import annotations

import zipfile
from collections.abc import Iterator
from html.parser import HTMLParser
from pathlib import Path
from xml.etree import ElementTree

from classify.errors import DataError
from classify.report import cells
from classify.report.document import Table
from classify.report.messages import Messages
from classify.report.tables import HEADING_ROW

Cell = str | float | None
_MAIN = "{http://schemas.openxmlformats.org/spreadsheetml/2006/main}"
_LINK = "{http://schemas.openxmlformats.org/officeDocument/2006/relationships}id"


def printed_rows(table: Table, words: Messages) -> list[list[Cell]]:
    """The rows of a table as a page prints them."""
    return [
        [_tidy(cells.printed(column, value, words)) for column, value in zip(table.columns, row, strict=True)]
        for row in table.rows
    ]


def raw_rows(table: Table) -> list[list[Cell]]:
    """The rows of a table as a workbook holds them."""
    return [[float(v) if isinstance(v, int | float) else (v or None) for v in row] for row in table.rows]


def cells_of_html(path: Path) -> dict[str, list[list[Cell]]]:
    """Body rows of every table of a page, by the table's name. Raises DataError."""
    reader = _Tables()
    try:
        reader.feed(path.read_text(encoding="utf-8"))
    except (OSError, UnicodeDecodeError) as error:
        raise DataError(f"the page cannot be read: {error}", where=str(path)) from error
    return reader.tables


class _Tables(HTMLParser):
    """Collects the text of body cells; whatever a cell contains is taken as text."""

    def __init__(self) -> None:
        super().__init__()
        self.tables: dict[str, list[list[Cell]]] = {}
        self._rows: list[list[Cell]] | None = None
        self._text: list[str] | None = None
        self._body = False

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        """Open a table, a row or a cell."""
        if tag == "table":
            name = (dict(attrs).get("id") or "").removeprefix("table-")
            self._rows = self.tables.setdefault(name, [])
        elif tag == "tbody":
            self._body = True
        elif tag == "tr" and self._body and self._rows is not None:
            self._rows.append([])
        elif tag in ("td", "th") and self._body:
            self._text = []

    def handle_endtag(self, tag: str) -> None:
        """Close a cell or the body of a table."""
        if tag in ("td", "th") and self._text is not None and self._rows:
            self._rows[-1].append(_tidy("".join(self._text)))
            self._text = None
        elif tag == "tbody":
            self._body = False

    def handle_data(self, data: str) -> None:
        """Text of a cell."""
        if self._text is not None:
            self._text.append(data)


def _tidy(text: str) -> str:
    # Line breaks of the page's source are no part of a cell; no-break spaces are.
    return text.strip(" \n\r\t")


def cells_of_xlsx(path: Path) -> dict[str, list[list[Cell]]]:
    """Rows below the headings of every sheet of a workbook, by sheet name. Raises DataError."""
    try:
        with zipfile.ZipFile(path) as archive:
            shared = list(_shared(archive))
            targets = {
                link.attrib["Id"]: link.attrib["Target"] for link in _parse(archive, "xl/_rels/workbook.xml.rels")
            }
            sheets = _parse(archive, "xl/workbook.xml").iter(f"{_MAIN}sheet")
            return {
                sheet.attrib["name"]: list(_rows(_parse(archive, _part(targets[sheet.attrib[_LINK]])), shared))
                for sheet in sheets
            }
    except (OSError, KeyError, IndexError, ValueError, zipfile.BadZipFile, ElementTree.ParseError) as error:
        raise DataError(f"the workbook cannot be read: {error}", where=str(path)) from error


def _parse(archive: zipfile.ZipFile, name: str) -> ElementTree.Element:
    return ElementTree.fromstring(archive.read(name))


def _shared(archive: zipfile.ZipFile) -> Iterator[str]:
    """Texts that cells name by number; a workbook that holds its texts in the cells has none."""
    if "xl/sharedStrings.xml" in archive.namelist():
        for item in _parse(archive, "xl/sharedStrings.xml").iter(f"{_MAIN}si"):
            yield _text_of(item)


def _part(target: str) -> str:
    """A sheet's place in the archive; other programs write it from the root."""
    return target[1:] if target.startswith("/") else f"xl/{target}"


def _rows(sheet: ElementTree.Element, shared: list[str]) -> Iterator[list[Cell]]:
    width = None
    for row in sheet.iter(f"{_MAIN}row"):
        number = int(row.attrib["r"])
        values = {_column(cell.attrib["r"]): _value(cell, shared) for cell in row.iter(f"{_MAIN}c")}
        if number == HEADING_ROW + 1:
            width = len(values)
        elif number > HEADING_ROW + 1 and width is not None:
            yield [values.get(i) for i in range(width)]


def _column(reference: str) -> int:
    number = 0
    for letter in reference:
        if letter.isalpha():
            number = number * 26 + ord(letter) - ord("A") + 1
    return number - 1


def _value(cell: ElementTree.Element, shared: list[str]) -> Cell:
    if cell.find(f"{_MAIN}f") is not None:
        raise ValueError(f"cell {cell.attrib['r']} holds a formula")
    if cell.attrib.get("t") == "inlineStr":
        return _text_of(cell) or None
    stored = cell.find(f"{_MAIN}v")
    if stored is None or stored.text is None:
        return None
    return shared[int(stored.text)] if cell.attrib.get("t") == "s" else float(stored.text)


def _text_of(item: ElementTree.Element) -> str:
    return "".join(part.text or "" for part in item.iter(f"{_MAIN}t"))
