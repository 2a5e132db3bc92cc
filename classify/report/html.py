"""The report as one HTML file: no network, no fonts from elsewhere, no script needed to read it."""

from __future__ import annotations

from functools import cache

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from classify.report import cells
from classify.report.document import Document
from classify.report.explore import explore
from classify.report.facts import ReportFacts
from classify.report.identity import css_tokens
from classify.report.messages import load_messages

_RIGHT_TO_LEFT = ("ar", "fa", "he", "ur")


def render_html(document: Document, facts: ReportFacts) -> str:
    """The whole page. Everything but our own drawings is escaped."""
    words = load_messages(document.language)
    return _environment().get_template("report.html").render(
        document=document, facts=facts, words=words, tokens=Markup(css_tokens()), cells=cells, colour=facts.colour,
        explore=explore(facts, words),
        direction="rtl" if document.language in _RIGHT_TO_LEFT else "ltr", known={c.name for c in facts.classes},
    )  # fmt: skip


@cache
def _environment() -> Environment:
    environment = Environment(
        loader=PackageLoader("classify.report", "templates"), autoescape=True, undefined=StrictUndefined,
        trim_blocks=True, lstrip_blocks=True,
    )  # fmt: skip
    environment.filters["kind"] = lambda block: type(block).__name__
    return environment
