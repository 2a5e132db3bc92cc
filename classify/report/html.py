"""The report as one HTML file: no network, no fonts from elsewhere, no script needed to read it."""

from __future__ import annotations

from functools import cache

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from classify.report.document import Column, Document, Table, Value
from classify.report.facts import ReportFacts
from classify.report.identity import css_tokens
from classify.report.messages import Messages, load_messages

_RIGHT_TO_LEFT = ("ar", "fa", "he", "ur")


def render_html(document: Document, facts: ReportFacts) -> str:
    """The whole page. Everything but our own drawings is escaped."""
    words = load_messages(document.language)
    return _environment().get_template("report.html").render(
        document=document, facts=facts, words=words, tokens=Markup(css_tokens()), printed=_printer(words),
        direction="rtl" if document.language in _RIGHT_TO_LEFT else "ltr", tint=tint, colour=facts.colour,
        known={c.name for c in facts.classes},
    )  # fmt: skip


def printed(column: Column, value: Value, words: Messages) -> str:
    """A cell as readers see it."""
    if value is None:
        return words.numbers.number(None)
    if isinstance(value, str) or column.kind in ("text", "class", "code"):
        return str(value)
    if column.kind == "percent":
        # The sign stands in the heading.
        return words.numbers.number(100 * value, column.decimals)
    return words.numbers.number(value, column.decimals)


def heading(column: Column, words: Messages) -> str:
    """Heading of a column with its unit."""
    unit = words.numbers.percent_sign.strip() if column.kind == "percent" else column.unit
    return f"{column.heading}, {unit}" if unit else column.heading


def tint(table: Table, row: int, column: int) -> str:
    """How strongly a matrix cell is tinted, 0..1 of its row's total, as text for a style; "" for no tint."""
    whole = table.rows[row][-1]
    value = table.rows[row][column]
    last = row == len(table.rows) - 1 or column == len(table.columns) - 1
    if last or isinstance(whole, str) or isinstance(value, str) or not whole or not value:
        return ""
    return f"{value / whole:.3f}"


def _printer(words: Messages):  # type: ignore[no-untyped-def]
    return lambda column, value: printed(column, value, words)


@cache
def _environment() -> Environment:
    environment = Environment(
        loader=PackageLoader("classify.report", "templates"), autoescape=True, undefined=StrictUndefined,
        trim_blocks=True, lstrip_blocks=True,
    )  # fmt: skip
    environment.filters["kind"] = lambda block: type(block).__name__
    environment.globals["heading"] = heading
    return environment
