"""The report: one set of facts, several forms."""

from __future__ import annotations

from pathlib import Path

from classify.files import write_bytes, write_text
from classify.report.content import write_document
from classify.report.facts import ReportFacts
from classify.report.gather import gather_facts
from classify.report.html import render_html
from classify.report.pdf import render_pdf

__all__ = ["ReportFacts", "gather_facts", "write_report"]


def write_report(facts: ReportFacts, folder: Path) -> list[Path]:
    """Write every form of the report into `folder`, each whole or not at all. Returns the paths. Raises OutputError."""
    document = write_document(facts)
    page = folder / "report.html"
    write_text(page, render_html(document, facts))
    pdf = render_pdf(document, facts)
    write_bytes(folder / "report.pdf", pdf.data)
    return [page, folder / "report.pdf"]
