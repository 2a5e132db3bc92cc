"""The report: one set of facts, several forms that agree."""

from __future__ import annotations

from pathlib import Path

from classify.files import write_bytes, write_text
from classify.report.content import write_document
from classify.report.deliver import write_data, write_manifest
from classify.report.facts import ReportFacts
from classify.report.gather import gather_facts
from classify.report.html import render_html
from classify.report.pdf import render_pdf
from classify.report.review_text import write_review
from classify.report.tables import render_xlsx
from classify.report.verify import Verification, verify

__all__ = ["ReportFacts", "Verification", "gather_facts", "verify", "write_report", "write_review"]


def write_report(facts: ReportFacts, folder: Path) -> list[Path]:
    """Write every form of the report into `folder`, each file whole or not at all, and the tables behind its numbers.

    Returns the paths, the page first. Raises SettingsError for an unknown language or section, OutputError.
    """
    document = write_document(facts)
    page, pdf, book = (folder / name for name in ("report.html", "report.pdf", "tables.xlsx"))
    # All is set before anything is written, so that a fault leaves the old report in one piece.
    contents = render_html(document, facts), render_pdf(document, facts), render_xlsx(document, facts)
    write_text(page, contents[0])
    write_bytes(pdf, contents[1])
    write_bytes(book, contents[2])
    written = [page, pdf, book, *write_data(facts, folder)]
    return [*written, write_manifest(folder, written)]
