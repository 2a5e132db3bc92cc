"""Table cells as readers see them, the same in every form."""

from __future__ import annotations

from classify.report.document import Column, Table, Value
from classify.report.messages import Messages


def printed(column: Column, value: Value, words: Messages) -> str:
    """A cell as text. Of a percentage the sign stands in the heading."""
    if value is None:
        return words.numbers.number(None)
    if isinstance(value, str):
        return value
    return words.numbers.number(100 * value if column.kind == "percent" else value, column.decimals)


def heading(column: Column, words: Messages) -> str:
    """Heading of a column with its unit."""
    unit = words.numbers.percent_sign.strip() if column.kind == "percent" else column.unit
    return f"{column.heading}, {unit}" if unit else column.heading


def tint(table: Table, row: int, column: int) -> float:
    """How strongly a matrix cell is tinted, 0..1, by its share of its row's total; 0 for totals and names.

    The square root lets small shares show: confusions of a few per cent are what a reader looks for.
    """
    whole, value = table.rows[row][-1], table.rows[row][column]
    last = row == len(table.rows) - 1 or column == len(table.columns) - 1
    if last or isinstance(whole, str) or isinstance(value, str) or not whole or not value:
        return 0.0
    return float((value / whole) ** 0.5)


def is_diagonal(table: Table, row: int, column: int) -> bool:
    """Whether a matrix cell is one where map and reference agree."""
    return column == row + 1 and row < len(table.rows) - 1
