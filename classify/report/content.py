"""What the report says, section by section, from facts alone. Wording follows the evidence."""

from __future__ import annotations

from collections.abc import Callable, Iterator

from classify.errors import SettingsError
from classify.report.accuracy_text import accuracy_section, agreement_section, areas_section, matrix_section
from classify.report.answer_text import answer_section, report_kind
from classify.report.confusion_text import confusion_section
from classify.report.document import Document, Section
from classify.report.facts import ReportFacts
from classify.report.map_text import map_section
from classify.report.messages import Messages, load_messages
from classify.report.record_text import cautions_section, glossary_section, method_section, record_section
from classify.report.training_text import model_section, training_section

_Writer = Callable[[ReportFacts, Messages], Section | None]

# In the order of reading: the answer, what it is about, what it rests on, how it was made.
SECTIONS: dict[str, _Writer] = {
    "answer": answer_section,
    "map": map_section,
    "areas": areas_section,
    "accuracy": accuracy_section,
    "matrix": matrix_section,
    "confusion": confusion_section,
    "agreement": agreement_section,
    "training": training_section,
    "model": model_section,
    "method": method_section,
    "cautions": cautions_section,
    "glossary": glossary_section,
    "record": record_section,
}
# These are in every report, whatever the project file asks for: no figure goes out without them.
ALWAYS = ("answer", "cautions")


def write_document(facts: ReportFacts) -> Document:
    """The whole report in the language that `facts` names. Raises SettingsError for an unknown language."""
    words = load_messages(facts.language)
    return Document(
        kind=words.text(f"kind.{report_kind(facts)}"),
        title=facts.heading.title,
        facts=tuple(_heading(facts, words)),
        sections=tuple(_sections(facts, words)),
        footer=words.text(
            "head.footer", title=facts.heading.title, date=facts.heading.date, version=facts.heading.version
        ),
        language=words.language,
    )


def _heading(facts: ReportFacts, words: Messages) -> Iterator[tuple[str, str]]:
    heading = facts.heading
    for key, value in (("client", heading.client), ("author", heading.author), ("date", heading.date)):
        if value:
            yield words.text(f"head.{key}"), value
    yield words.text("head.version"), f"landassay {heading.version}"


def _sections(facts: ReportFacts, words: Messages) -> Iterator[Section]:
    unknown = [key for key in facts.sections or () if key not in SECTIONS]
    if unknown:
        raise SettingsError(f"there is no section {unknown[0]!r}", where="report.sections",
                            fix=f"sections are {', '.join(SECTIONS)}")  # fmt: skip
    for key, write in SECTIONS.items():
        if facts.sections is None or key in facts.sections or key in ALWAYS:
            section = write(facts, words)
            if section is not None:
                yield section
