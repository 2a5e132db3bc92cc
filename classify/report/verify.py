"""Check a delivered report: fingerprints, every number derived again from the delivered tables, every cell as printed.

What it needs lies in the folder itself, so that whoever receives the report can run it.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

from classify.assessment import AssessmentOptions
from classify.assessment.estimation import estimate_sample
from classify.assessment.inputs import sample_from_points
from classify.assessment.options import TableName
from classify.errors import DataError, LandassayError
from classify.files import read_json, sha256
from classify.report import deliver
from classify.report.content import write_document
from classify.report.document import Document
from classify.report.facts import ReportFacts
from classify.report.gather import accuracy_facts
from classify.report.messages import load_messages
from classify.report.readback import cells_of_html, cells_of_xlsx, printed_rows, raw_rows
from classify.tables import read_table

# Derived numbers may differ in the last bits between machines; printed ones may not differ at all.
_RELATIVE, _ABSOLUTE = 1e-9, 1e-12
# Gives what is stored and what follows from the tables.
_Work = Callable[[], tuple[Any, Any]]


@dataclass(frozen=True, slots=True)
class Finding:
    """One difference. where: file and place in it; what: what is wrong, with both values."""

    where: str
    what: str


@dataclass(frozen=True, slots=True)
class Verification:
    """files: fingerprints compared; derived: numbers derived again; printed: cells compared; findings: differences.
    notes: what could not be checked, and why."""

    files: int
    derived: int
    printed: int
    findings: tuple[Finding, ...]
    notes: tuple[str, ...] = ()

    @property
    def sound(self) -> bool:
        """Whether nothing differs."""
        return not self.findings


def verify(folder: Path) -> Verification:
    """Check the report in `folder`. Raises DataError when it is not a delivered report or cannot be read."""
    manifest = read_json(folder / deliver.MANIFEST)
    listed = manifest.get("files")
    if not isinstance(listed, dict):
        raise DataError("this is not the manifest of a report", where=str(folder / deliver.MANIFEST))
    findings = list(_fingerprints(folder, listed))
    if not (folder / deliver.FACTS).is_file():
        return Verification(len(listed), 0, 0, tuple(findings))
    try:
        facts = deliver.read_facts(folder)
        document = write_document(facts)
    except (KeyError, TypeError, ValueError) as error:
        raise DataError(f"the facts cannot be read: {error!r}", where=str(folder / deliver.FACTS)) from error
    derived, found, notes = _derive(folder, facts)
    printed, differing = _printed(folder, document)
    return Verification(len(listed), derived, printed, (*findings, *found, *differing), notes)


def _fingerprints(folder: Path, listed: Mapping[str, str]) -> Iterator[Finding]:
    for name, digest in listed.items():
        path = folder / name
        if not path.resolve().is_relative_to(folder.resolve()):
            yield Finding(name, "the manifest names a file outside the folder")
        elif not path.is_file():
            yield Finding(name, "the file is missing")
        elif sha256(path) != digest:
            yield Finding(name, "the file is not the one that was delivered: its SHA-256 differs from the manifest")


# --- numbers derived again ------------------------------------------------------------------------------------------


def _derive(folder: Path, facts: ReportFacts) -> tuple[int, list[Finding], tuple[str, ...]]:
    count = 0
    findings: list[Finding] = []
    works, notes = _works(folder, facts)
    for name, work in works:
        try:
            stored, again = work()
        except LandassayError as error:
            findings.extend(Finding(name, f"cannot be derived again: {problem.what}") for problem in error.problems)
            continue
        except (OSError, KeyError, TypeError, ValueError) as error:  # what a file mangled in any way may lead to
            findings.append(Finding(name, f"cannot be derived again, as what it rests on is damaged: {error!r}"))
            continue
        for place, a, b in _leaves(stored, again):
            count += 1
            if not _same(a, b):
                findings.append(Finding(f"{name}: {place}", f"reported {a!r}, derived again {b!r}"))
    return count, findings, notes


def _works(folder: Path, facts: ReportFacts) -> tuple[list[tuple[str, _Work]], tuple[str, ...]]:
    """What gives the stored beside what follows from the tables, by name; and what cannot be checked."""
    works: list[tuple[str, _Work]] = []
    notes: tuple[str, ...] = ()
    if (folder / deliver.METHOD).is_file():
        works.append((deliver.ASSESSMENT, lambda: _assessment(folder)))
        if facts.accuracy is not None:
            works.append((f"{deliver.FACTS}: accuracy", lambda: _accuracy(folder, facts)))
    elif facts.accuracy is not None:
        notes = ("the points are not part of this folder, so accuracies and areas could not be derived again",)
    if (folder / deliver.AREAS).is_file():
        held = [[c.code, c.name, c.pixels, c.mapped] for c in facts.classes]
        works.append((f"{deliver.FACTS}: classes", lambda: (held, _areas(folder))))
    screening = facts.model.screening if facts.model else None
    if screening and screening.get("screening_accuracy") is not None:
        works.append((f"{deliver.FACTS}: screening", lambda: _screening(screening)))
    return works, notes


def _assessment(folder: Path) -> tuple[Any, Any]:
    stored = read_json(folder / deliver.ASSESSMENT)
    return stored, {**_assessed_again(folder), "warnings": stored["warnings"]}


def _accuracy(folder: Path, facts: ReportFacts) -> tuple[Any, Any]:
    assert facts.accuracy is not None, facts
    path = folder / deliver.ASSESSMENT
    return asdict(facts.accuracy), asdict(accuracy_facts(read_json(path), path))


def _assessed_again(folder: Path) -> dict[str, Any]:
    method = read_json(folder / deliver.METHOD)
    points, strata = folder / deliver.POINTS, folder / deliver.STRATA
    options = AssessmentOptions(
        **{**method, "classes": tuple(method["classes"])}, points=TableName(str(points), 2),
        strata=TableName(str(strata), 2),
    )  # fmt: skip
    sample = sample_from_points(read_table(points), read_table(strata), options, may_lie_off_map=True)
    return estimate_sample(sample, options).to_json()


def _areas(folder: Path) -> list[list[Any]]:
    rows = read_table(folder / deliver.AREAS).to_dict("records")
    return [[int(r["code"]), r["name"], int(r["pixels"]), float(r["area"])] for r in rows]


def _screening(screening: Mapping[str, Any]) -> tuple[dict[str, Any], dict[str, Any]]:
    """Shares by class from the counts of the first repeat."""
    counts = screening["counts"]
    rows, columns = [sum(r) for r in counts], [sum(c) for c in zip(*counts, strict=True)]
    again = {
        "held_out_pixels": sum(rows),
        "share_found": [counts[i][i] / n if n else None for i, n in enumerate(rows)],
        "share_right": [counts[i][i] / n if n else None for i, n in enumerate(columns)],
    }
    return {key: screening[key] for key in again}, again


def _leaves(a: Any, b: Any, place: str = "") -> Iterator[tuple[str, Any, Any]]:  # noqa: ANN401 - plain data
    """All values at the ends of two nested structures, side by side; None where one has no such place."""
    if isinstance(a, Mapping) and isinstance(b, Mapping):
        for key in dict.fromkeys([*a, *b]):
            yield from _leaves(a.get(key), b.get(key), f"{place}.{key}" if place else str(key))
    elif isinstance(a, list | tuple) and isinstance(b, list | tuple) and len(a) == len(b):
        for i, (x, y) in enumerate(zip(a, b, strict=True)):
            yield from _leaves(x, y, f"{place}[{i}]")
    else:
        yield place, a, b


def _same(a: Any, b: Any) -> bool:  # noqa: ANN401 - plain data
    numbers = (int, float)
    if isinstance(a, numbers) and isinstance(b, numbers):
        return math.isclose(a, b, rel_tol=_RELATIVE, abs_tol=_ABSOLUTE)
    return bool(a == b)


# --- cells as printed -----------------------------------------------------------------------------------------------


def _printed(folder: Path, document: Document) -> tuple[int, list[Finding]]:
    """Compare every table cell of the page and the workbook with what the facts say."""
    words = load_messages(document.language)
    count, findings = 0, []
    try:
        page = cells_of_html(folder / "report.html")
        book = cells_of_xlsx(folder / "tables.xlsx")
    except LandassayError as error:
        return 0, [Finding(problem.where, problem.what) for problem in error.problems]
    for table in document.tables:
        forms = (("report.html", page, printed_rows(table, words)), ("tables.xlsx", book, raw_rows(table)))
        for name, found, wanted in forms:
            rows = found.get(table.name)
            if rows is None or [len(r) for r in rows] != [len(r) for r in wanted]:
                findings.append(Finding(f"{name}: {table.name}", "the table is missing or of another size"))
                continue
            for r, (got, want) in enumerate(zip(rows, wanted, strict=True), start=1):
                for c, (x, y) in enumerate(zip(got, want, strict=True)):
                    count += 1
                    if not _same(x, y):
                        place = f"{name}: {table.name}, row {r}, {table.columns[c].heading!r}"
                        findings.append(Finding(place, f"shows {x!r}, the facts say {y!r}"))
    return count, findings
