"""Labelled points, or a matrix of counts, checked against their strata and turned into a `ReferenceSample`.

All findings are collected before judging; each names the table, its row and its column.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from classify.assessment.columns import Labels, blanks, faults, require_columns
from classify.assessment.options import AssessmentOptions, TableName
from classify.assessment.sample import NO_LABEL, DesignKind, ReferenceSample, Stratum
from classify.assessment.strata import mapped_areas, read_strata, recognise_classes
from classify.errors import Problem, SampleError, raise_if_errors
from classify.tables import ROWS_NAMED

SYSTEMATIC = Problem(
    "standard errors of a systematic sample are those of a random one of the same size, which are as a rule somewhat "
    "too large",
    severity="warning",
)
# Columns that points may have; others are left alone.
_COLUMNS = ("id", "stratum", "map", "reference", "alternate", "other_map", "cluster", "region")
_LABEL_COLUMNS = ("map", "other_map", "reference", "alternate")


def sample_from_points(
    points: pd.DataFrame, strata: pd.DataFrame | None, options: AssessmentOptions, *, may_lie_off_map: bool = False
) -> ReferenceSample:
    """Check labelled points against their strata.

    points: columns stratum, map, reference (blank: could not be labelled); optional alternate (a second label),
    cluster, region, id, other_map. map may be left out where strata give mapped_as; stratum where there is a single
    one. may_lie_off_map: whether a blank map class means a point off the map, and not a fault.
    Raises SampleError listing every problem.
    """
    table = read_strata(strata, options)
    require_columns(points, ["reference", *(["stratum"] if len(table) > 1 else [])], options.points)
    if strata is None and "stratum" in points.columns:
        raise SampleError(
            "points name strata, but there is no table of strata", where=options.points.column("stratum"),
            fix="give the strata with their areas; without them the sample cannot be weighted",
        )  # fmt: skip
    columns = {c: Labels.of(points[c]) for c in _COLUMNS if c in points.columns}
    if "id" in columns:
        columns, repeated = _without_repeats(columns, options.points)
    else:
        repeated = ()
    stratum, problems = _strata_of(columns.get("stratum"), table, len(columns["reference"].codes), options)
    columns, found = _prepared(columns, stratum, table, options, may_lie_off_map=may_lie_off_map)
    raise_if_errors([*problems, *found, *_points_without_area(stratum, table, options)], SampleError)
    classes = _classes(options, table, columns)
    raise_if_errors(_unknown(columns, classes, options), SampleError)
    codes = {c: columns[c].places_in(classes) for c in _LABEL_COLUMNS if c in columns}
    table = recognise_classes(table, stratum, codes["map"], classes, options.merge)
    region = columns.get("region")
    sample = replace(
        _sample(table, classes, options),
        stratum=stratum, map=codes["map"], reference=codes["reference"], alternate=codes.get("alternate"),
        other_map=codes.get("other_map"), count=np.ones(len(stratum), dtype=np.int64),
        cluster=columns["cluster"].codes if "cluster" in columns else None,
        region=None if region is None else region.places_in(sorted(region.names)),
        regions=() if region is None else tuple(sorted(region.names)),
    )  # fmt: skip
    return sample.with_problems(repeated)


def sample_from_matrix(
    matrix: pd.DataFrame, strata: pd.DataFrame | None, options: AssessmentOptions
) -> ReferenceSample:
    """Check a square matrix of counts: the first column names the map class of each row, the other columns are named
    after the reference classes. Strata are the map classes, or a single one for a simple random sample.
    Raises SampleError listing every problem."""
    name = options.points
    rows, columns = Labels.of(matrix.iloc[:, 0]), [str(c).strip() for c in matrix.columns[1:]]
    counts, problems = _whole_numbers(matrix.iloc[:, 1:], columns, name)
    raise_if_errors([*_matrix_shape(rows, columns, name), *problems], SampleError)
    names = [rows.text(i) for i in range(len(matrix))]
    counts = counts[:, [columns.index(n) for n in names]]
    if not counts.any():
        raise SampleError("the matrix holds no counts", where=name.name)
    table = read_strata(strata, options)
    merged = [options.merge.get(n, n) for n in names]
    classes = options.classes or tuple(dict.fromkeys(merged))
    stratum_of_row = np.zeros(len(names), dtype=np.int64)
    if len(table) > 1:
        stratum_of_row, problems = _strata_of_rows(names, merged, table, options)
        raise_if_errors(problems, SampleError)
    problems = _points_without_area(stratum_of_row[counts.any(axis=1)], table, options)
    raise_if_errors([*_unknown({"map": Labels.of(pd.Series(merged))}, classes, options), *problems], SampleError)
    row, col = np.nonzero(counts)
    place = np.array([classes.index(m) for m in merged], dtype=np.int64)
    if len(table) > 1:
        table = recognise_classes(table, stratum_of_row, place, classes, options.merge)
    return replace(
        _sample(table, classes, options),
        stratum=stratum_of_row[row], map=place[row], reference=place[col], count=counts[row, col],
    )  # fmt: skip


# --- strata ---------------------------------------------------------------------------------------------------------


def _sample(table: tuple[Stratum, ...], classes: tuple[str, ...], options: AssessmentOptions) -> ReferenceSample:
    """The sample but for its points."""
    given = "simple random" if options.kind == "post-stratified" else options.kind
    kind: DesignKind = given or ("stratified" if len(table) > 1 else "simple random")
    problems = (SYSTEMATIC,) if kind == "systematic" else ()
    none = np.zeros(0, dtype=np.int64)
    return ReferenceSample(
        classes=classes, strata=table, kind=kind, stratum=none, map=none, reference=none, count=none,
        mapped_area=mapped_areas(table, classes, options), area_unit=options.area_unit, evidence=options.evidence,
        reservations=tuple(options.reservations), problems=problems,
    )  # fmt: skip


def _strata_of(
    named: Labels | None, table: tuple[Stratum, ...], n: int, options: AssessmentOptions
) -> tuple[NDArray[np.int64], list[Problem]]:
    if named is None:
        return np.zeros(n, dtype=np.int64), []
    names = [s.name for s in table]
    places = named.places_in(names)

    def what(value: str) -> str:
        return f"stratum {value!r} is not in {options.strata.name}" if value else "the stratum is missing"

    fix = f"strata there: {', '.join(map(repr, names))}"
    return places, faults(places == NO_LABEL, named, "stratum", options.points, what, fix)


def _points_without_area(
    stratum: NDArray[np.int64], table: tuple[Stratum, ...], options: AssessmentOptions
) -> list[Problem]:
    return [
        Problem(f"stratum {table[place].name!r} has points, but its area is 0", options.strata.column("stratum"),
                "give its area; points of it would count for nothing")
        for place in np.unique(stratum[stratum != NO_LABEL]) if table[place].area == 0
    ]  # fmt: skip


def _strata_of_rows(
    names: list[str], merged: list[str], table: tuple[Stratum, ...], options: AssessmentOptions
) -> tuple[NDArray[np.int64], list[Problem]]:
    called = [s.mapped_as or s.name for s in table]
    place = {name: i for i, name in enumerate(called)}
    of_row = [place.get(n, place.get(m, NO_LABEL)) for n, m in zip(names, merged, strict=True)]
    where = options.strata.column("stratum")
    problems = [
        Problem(f"map class {n!r} of {options.points.name} is no stratum", where)
        for n, i in zip(names, of_row, strict=True) if i == NO_LABEL
    ]  # fmt: skip
    problems += [
        Problem(f"stratum {s.name!r} is no row of {options.points.name}", where,
                "with a matrix, strata must be its map classes; give points where they are not")
        for i, s in enumerate(table) if i not in of_row
    ]  # fmt: skip
    return np.array(of_row, dtype=np.int64), problems


# --- points ---------------------------------------------------------------------------------------------------------


def _prepared(
    columns: Mapping[str, Labels],
    stratum: NDArray[np.int64],
    table: tuple[Stratum, ...],
    options: AssessmentOptions,
    *,
    may_lie_off_map: bool,
) -> tuple[dict[str, Labels], list[Problem]]:
    """Labels merged, map classes filled in from the strata, and the faults of both."""
    prepared, name = dict(columns), options.points
    for column in ("reference", "alternate"):
        if column in prepared:
            prepared[column] = prepared[column].without(options.unlabelled)
    for column in _LABEL_COLUMNS:
        if column in prepared:
            prepared[column] = prepared[column].renamed(options.merge)
    own_names = tuple(dict.fromkeys(s.mapped_as for s in table if s.mapped_as is not None))
    own_of = np.array([NO_LABEL if s.mapped_as is None else own_names.index(s.mapped_as) for s in table])
    own = Labels(own_names, own_of[np.maximum(stratum, 0)])
    problems: list[Problem] = []
    if "map" not in prepared:
        if own.blank.any():
            raise SampleError("the table has no column 'map'", where=name.name,
                              fix="give the map class of each point, or 'mapped_as' for each stratum")  # fmt: skip
        prepared["map"] = own
    given = prepared["map"]
    contrary = ~own.blank & ~given.blank & (given.places_in(own_names) != own.codes) & (stratum != NO_LABEL)
    problems += faults(
        contrary, given, "map", name,
        lambda value: f"map class {value!r}, but the point's stratum is mapped as another class",
        "leave 'mapped_as' out if the strata come from another map",
    )  # fmt: skip
    for column in ("map", "other_map"):
        if column in prepared and not may_lie_off_map:
            problems += blanks(prepared[column], column, name, "leave out points that lie off the map")
    for column in ("cluster", "region"):
        if column in prepared:
            problems += blanks(prepared[column], column, name)
    return prepared, problems


def _classes(options: AssessmentOptions, table: tuple[Stratum, ...], columns: Mapping[str, Labels]) -> tuple[str, ...]:
    """Given classes; else strata that are classes in their order, then the others that occur, by name."""
    if options.classes is not None:
        return tuple(dict.fromkeys(options.merge.get(c, c) for c in options.classes))
    occurring = {name for c in _LABEL_COLUMNS if c in columns for name in columns[c].names}
    occurring |= {options.merge.get(name, name) for name in options.mapped_area}
    occurring |= {s.mapped_as for s in table if s.mapped_as is not None}
    called = [s.mapped_as or options.merge.get(s.name, s.name) for s in table]
    first = list(dict.fromkeys(name for name in called if name in occurring))
    return tuple(first + sorted(occurring - set(first)))


def _unknown(columns: Mapping[str, Labels], classes: tuple[str, ...], options: AssessmentOptions) -> list[Problem]:
    problems = []
    for column in _LABEL_COLUMNS:
        if column in columns:
            labels = columns[column]
            strange = ~labels.blank & (labels.places_in(classes) == NO_LABEL)
            fix = f"classes are {', '.join(map(repr, classes))}"
            problems += faults(strange, labels, column, options.points, lambda value: f"{value!r} is no class", fix)
    return problems


def _without_repeats(columns: Mapping[str, Labels], name: TableName) -> tuple[dict[str, Labels], tuple[Problem, ...]]:
    """Points that are listed more than once with the same entries count once; with other entries they are faults."""
    ids = columns["id"]
    raise_if_errors(blanks(ids, "id", name), SampleError)
    codes = pd.DataFrame({column: labels.codes for column, labels in columns.items()})
    again = codes.duplicated("id").to_numpy()
    contrary = again & ~codes.duplicated().to_numpy()
    raise_if_errors(
        faults(contrary, ids, "id", name, lambda value: f"point {value!r} is listed before with other entries",
               "keep the row that is right"), SampleError,
    )  # fmt: skip
    if not again.any():
        return dict(columns), ()
    said = Problem(
        f"{int(again.sum())} points are listed more than once and count once, first {ids.text(int(again.argmax()))!r}",
        name.column("id"), severity="warning",
    )  # fmt: skip
    return {column: labels.rows(~again) for column, labels in columns.items()}, (said,)


# --- matrix ---------------------------------------------------------------------------------------------------------


def _matrix_shape(rows: Labels, columns: list[str], name: TableName) -> list[Problem]:
    names = [rows.text(i) for i in range(len(rows.codes))]
    for what, labels in (("row", names), ("column", columns)):
        twice = sorted({label for label in labels if labels.count(label) > 1})
        if twice:
            return [Problem(f"class {twice[0]!r} names more than one {what}", name.name)]
    fix = "the matrix must be square: rows and columns name the same classes; fill up with rows or columns of 0"
    lacking = [
        Problem(f"row {r!r} has no column of that name", name.row(i, columns[0] if columns else ""), fix)
        for i, r in enumerate(names) if r not in columns
    ]  # fmt: skip
    return lacking + [
        Problem(f"column {c!r} has no row of that name", name.column(c), fix) for c in columns if c not in names
    ]


def _whole_numbers(body: pd.DataFrame, columns: list[str], name: TableName) -> tuple[NDArray[np.int64], list[Problem]]:
    parsed = [pd.to_numeric(body.iloc[:, j], errors="coerce").to_numpy(dtype=np.float64) for j in range(len(columns))]
    values = np.stack(parsed, axis=1) if parsed else np.zeros((len(body), 0))
    faulty = ~(np.isfinite(values) & (values >= 0) & (values == np.floor(values)))
    problems = [
        Problem(f"{str(body.iat[i, j])!r} is not a whole number of points", name.row(int(i), columns[j]),
                "give counts of points, not shares; 0 where there are none")
        for i, j in np.argwhere(faulty)[:ROWS_NAMED]
    ]  # fmt: skip
    return np.where(faulty, 0, values).astype(np.int64), problems
