"""Labels made elsewhere (in a GIS, on paper), matched by id with the drawn sample and checked against it."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import geopandas
import numpy as np
import pandas as pd
from numpy.typing import NDArray

from classify.assessment.columns import plain_text
from classify.assessment.drawn_sample import DrawnSample, read_drawn
from classify.assessment.reference import class_lookup
from classify.errors import Problem, SampleError, raise_if_errors
from classify.interpret.journal import NOTHING, Journal, Label
from classify.interpret.session import JOURNAL_FILE, check_label
from classify.raster.vectors import read_records
from classify.settings import ClassSettings, Project

# A point may lie so many metres off, for the rounding of coordinates on the way.
_NEAR_M = 1.0
_NAMED = 5


@dataclass(frozen=True, slots=True)
class ImportColumns:
    """Names of the columns in the file; those of confidence, alternate and note may be absent."""

    id: str = "id"
    label: str = "observed"
    alternate: str = "alternate"
    confidence: str = "confidence"
    note: str = "note"


@dataclass(frozen=True, slots=True)
class Imported:
    """How many labels came in, how many points the file leaves open, and what else is worth knowing."""

    labels: int
    left_open: int
    warnings: tuple[Problem, ...]


def import_labels(
    project: Project, outputs: Path, path: Path, interpreter: str, *, columns: ImportColumns = ImportColumns(),
    untold: Sequence[str] = (),
) -> Imported:  # fmt: skip
    """Put labels of a vector file or CSV into the journal under an interpreter's name: all of them, or none.

    untold: labels that mean "cannot tell"; a blank one means not labelled. Labels that this interpreter gave before
    stay: the same ones are passed over, others are a fault. Raises LandassayError listing every fault.
    """
    folder = outputs / "sample"
    sample = read_drawn(folder)
    table, place = _read(path)
    problems = [
        Problem(f"there is no column {name!r}", str(path), f"its columns are {', '.join(map(repr, table.columns))}")
        for name in (columns.id, columns.label) if name not in table.columns
    ]  # fmt: skip
    raise_if_errors(problems, SampleError)
    ids = [plain_text(value) for value in table[columns.id]]
    problems = [*_id_faults(ids, sample, path), *_moved(ids, place, sample, path)]
    labels, found = _labels(table, ids, project.classes, columns, set(untold), path)
    raise_if_errors([*problems, *found], SampleError)
    journal = Journal(folder / JOURNAL_FILE, interpreter.strip())
    try:
        before = journal.standing()
        contrary = [i for i, one in labels.items() if before.get(i, NOTHING).label not in (None, one)]
        fix = "import under another name with --interpreter, and settle what differs"
        what = "was labelled otherwise by the same interpreter before"
        raise_if_errors(_faults(contrary, path, what, fix), SampleError)
        fresh = [(i, one) for i, one in labels.items() if before.get(i, NOTHING).label is None]
        count = journal.write_all(fresh)
        done = {i for i, s in journal.standing().items() if s.label is not None}
    finally:
        journal.close()
    left = [i for i in sample.active_ids if i not in done]
    warnings = [p for p in problems if p.severity == "warning"]
    if left:
        warnings.append(Problem(f"{len(left)} points are still without a label, first {left[0]}", str(path),
                                severity="warning"))  # fmt: skip
    return Imported(count, len(left), tuple(warnings))


def _read(path: Path) -> tuple[pd.DataFrame, geopandas.GeoSeries | None]:
    """The table, and where its records lie if it says so."""
    frame = read_records(path, "labels")
    if not isinstance(frame, geopandas.GeoDataFrame):
        return frame, None
    return pd.DataFrame(frame.drop(columns=frame.geometry.name)), frame.geometry.representative_point()


def _id_faults(ids: Sequence[str], sample: DrawnSample, path: Path) -> list[Problem]:
    drawn = set(sample.design["points"])
    replaced = drawn - {str(i) for i in sample.active_ids}
    strange = [i for i in dict.fromkeys(ids) if i not in drawn]
    twice = [i for i, count in Counter(ids).items() if count > 1]
    return [
        *_faults(
            strange, path, "was not drawn", "import labels of drawn points only; more points come with 'draw --add'"
        ),
        *_faults(twice, path, "is listed more than once", "keep one row for each point"),
        *_faults([i for i in ids if i in replaced], path, "was replaced by a reserve", "leave it out"),
    ]


def _moved(ids: Sequence[str], place: geopandas.GeoSeries | None, sample: DrawnSample, path: Path) -> list[Problem]:
    if place is None:
        what = "the file says nothing of where its points lie, so that this cannot be checked"
        return [Problem(what, str(path), severity="warning")]
    drawn = sample.points.set_index(sample.points["id"].astype(str)).geometry
    known = np.array([i in drawn.index and drawn.index.is_unique for i in ids])
    if not known.any():
        return []
    zone = drawn.estimate_utm_crs()
    there = place[known].to_crs(zone)
    wanted = drawn.loc[[i for i, k in zip(ids, known, strict=True) if k]].to_crs(zone)
    off: NDArray[np.float64] = np.hypot(
        there.x.to_numpy() - wanted.x.to_numpy(), there.y.to_numpy() - wanted.y.to_numpy()
    )
    moved = [str(i) for i, metres in zip(wanted.index, off, strict=True) if not metres <= _NEAR_M]
    return _faults(moved, path, "does not lie where it was drawn", "label the place that was drawn, or leave it out")


def _labels(  # noqa: PLR0917 - what labels are read by
    table: pd.DataFrame, ids: Sequence[str], classes: Sequence[ClassSettings], columns: ImportColumns, untold: set[str],
    path: Path,
) -> tuple[dict[int, Label], list[Problem]]:  # fmt: skip
    lookup = class_lookup(classes)
    given = _texts(table, columns.label)
    alternates, confidences, notes = (_texts(table, c) for c in (columns.alternate, columns.confidence, columns.note))
    names = ", ".join(repr(c.name) for c in classes)
    labels, problems = {}, []
    for row, (i, text) in enumerate(zip(ids, given, strict=True)):
        if not text:
            continue
        name, other = lookup.get(text.casefold()), lookup.get(alternates[row].casefold())
        if name is None and text not in untold:
            fix = f"classes are {names}; list labels for 'could not tell' with --untold"
            problems.append(Problem(f"{text!r} of point {i} is no class", str(path), fix))
        elif alternates[row] and other is None:
            problems.append(Problem(f"the alternate {alternates[row]!r} of point {i} is no class", str(path),
                                    f"classes are {names}"))  # fmt: skip
        elif i.isdigit():
            sure: Any = confidences[row].casefold() or "high"
            labels[int(i)] = Label(name, other if other != name else None, sure, notes[row])
            problems += _unfit(i, labels[int(i)], [c.name for c in classes], path)
    if len(problems) > _NAMED:
        more = Problem(f"{len(problems) - _NAMED} more labels are not fit to be taken in", str(path))
        problems = [*problems[:_NAMED], more]
    return labels, problems


def _unfit(point: str, label: Label, names: Sequence[str], path: Path) -> list[Problem]:
    """Why the page would not have taken such a label either."""
    try:
        check_label(label, names)
    except SampleError as error:
        return [Problem(f"point {point}: {p.what}", str(path), p.fix) for p in error.problems]
    return []


def _texts(table: pd.DataFrame, column: str) -> list[str]:
    return [plain_text(v) for v in table[column]] if column in table.columns else [""] * len(table)


def _faults(ids: Sequence[str] | Sequence[int], path: Path, what: str, fix: str) -> list[Problem]:
    found = [Problem(f"point {i} {what}", str(path), fix) for i in ids[:_NAMED]]
    if len(ids) > _NAMED:
        found.append(Problem(f"{len(ids) - _NAMED} more points: each {what}", str(path), fix))
    return found


def columns_from(names: Mapping[str, str | None]) -> ImportColumns:
    """Column names as given, the usual ones where none is."""
    return ImportColumns(**{key: name for key, name in names.items() if name})
