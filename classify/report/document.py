"""What a document is made of: sections with blocks. Written once, set as HTML, PDF and worksheets."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from classify.report.messages import Rich

EvidenceKind = Literal["sample", "training", "map", "record"]
Value = str | int | float | None
Kind = Literal["text", "class", "integer", "number", "percent", "code"]


@dataclass(frozen=True, slots=True)
class Paragraph:
    """A paragraph; role sets how it looks. foreign: text that a stage wrote, in English whatever the language."""

    text: Rich
    role: Literal["body", "lead", "note", "caution", "warning"] = "body"
    foreign: bool = False


@dataclass(frozen=True, slots=True)
class Column:
    """One column. decimals: places that are printed (negative: tens, hundreds); percent values are proportions 0..1."""

    heading: str
    kind: Kind = "text"
    decimals: int = 0
    unit: str = ""


@dataclass(frozen=True, slots=True)
class Table:
    """A table. name: its key in every form (worksheet, anchor). The first column names the row; "class" cells carry the
    colour of their class. layout "matrix": the last row and column are totals, the diagonal is agreement.
    row_classes: class of each row, where its first cell is not just the class's name."""

    name: str
    title: str
    columns: tuple[Column, ...]
    rows: tuple[tuple[Value, ...], ...]
    note: str = ""
    layout: Literal["plain", "matrix"] = "plain"
    row_classes: tuple[str, ...] = ()

    def row_class(self, row: int) -> str:
        """Name of the class whose colour marks a row; of no class where the row is of none."""
        if self.row_classes:
            return self.row_classes[row] if row < len(self.row_classes) else ""
        return str(self.rows[row][0]) if self.columns[0].kind == "class" else ""


@dataclass(frozen=True, slots=True)
class Figure:
    """A drawing as SVG. alt: the same in words."""

    name: str
    svg: str
    caption: str
    alt: str
    small: bool = False


@dataclass(frozen=True, slots=True)
class Legend:
    """Colours and names of classes, and how no data looks."""

    title: str
    entries: tuple[tuple[str, str], ...]
    no_data: str


@dataclass(frozen=True, slots=True)
class Subheading:
    """A heading within a section."""

    text: str


@dataclass(frozen=True, slots=True)
class Pairs:
    """Short facts: a label and a value each."""

    rows: tuple[tuple[str, str], ...]
    role: Literal["facts", "glossary"] = "facts"


@dataclass(frozen=True, slots=True)
class Listing:
    """A list of sentences."""

    items: tuple[Rich, ...]
    role: Literal["plain", "caution", "warning"] = "plain"
    foreign: bool = False


@dataclass(frozen=True, slots=True)
class Code:
    """Text to be read letter by letter."""

    text: str


@dataclass(frozen=True, slots=True)
class Explorer:
    """Where the interactive viewer stands in the HTML; other forms leave it out."""


Block = Paragraph | Subheading | Table | Figure | Legend | Pairs | Listing | Code | Explorer


@dataclass(frozen=True, slots=True)
class Section:
    """One section. evidence: what its numbers rest on, shown beside the title."""

    key: str
    title: str
    blocks: tuple[Block, ...]
    evidence: EvidenceKind | None = None
    intro: bool = False


@dataclass(frozen=True, slots=True)
class Document:
    """A whole document. facts: lines of the title block."""

    kind: str
    title: str
    facts: tuple[tuple[str, str], ...]
    sections: tuple[Section, ...]
    footer: str
    language: str

    @property
    def tables(self) -> tuple[Table, ...]:
        """All tables, in order."""
        return tuple(block for section in self.sections for block in section.blocks if isinstance(block, Table))
