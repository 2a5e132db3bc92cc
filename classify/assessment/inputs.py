"""Tables from a user (points, strata, a matrix of counts) checked and turned into a `ReferenceSample`.

All findings are collected before judging; each names the table, its row and its column.
"""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from classify.assessment.options import AssessmentOptions, TableName
from classify.assessment.sample import NO_LABEL, ReferenceSample, Stratum
from classify.errors import DataError, Problem, SampleError, raise_if_errors

# One message names at most so many rows with the same fault.
_ROWS_NAMED = 5
_WHOLE_AREA = "whole area"


def read_table(path: Path) -> pd.DataFrame:
    """Read a CSV file as text, blanks as "". Raises DataError when it is missing, empty or not a table."""
    try:
        table = pd.read_csv(path, dtype=str, keep_default_na=False, encoding="utf-8-sig", skipinitialspace=True)
    except FileNotFoundError as error:
        raise DataError("there is no such file", where=str(path)) from error
    except pd.errors.EmptyDataError as error:
        raise DataError("the file is empty", where=str(path), fix="the first row names the columns") from error
    except (pd.errors.ParserError, UnicodeDecodeError) as error:
        raise DataError(f"this is not a UTF-8 table of comma-separated values: {error}", where=str(path)) from error
    except OSError as error:
        raise DataError(f"the file cannot be read: {error.strerror}", where=str(path)) from error
    table.columns = table.columns.str.strip()
    if table.empty:
        raise DataError("the table has no rows", where=str(path))
    return table


def sample_from_points(
    points: pd.DataFrame, strata: pd.DataFrame | None, options: AssessmentOptions
) -> ReferenceSample:
    """Check labelled points against their strata.

    points: columns stratum, map, reference; optional cluster. map may be left out where strata give mapped_as.
    strata: columns stratum and area or pixels; optional mapped_as, pixels, clusters. None for a simple random sample of an
    area of unknown size (proportions only). Raises SampleError listing every problem.
    """
    name = options.points
    table = _known_strata(strata, options)
    _require_columns(points, ["reference", *(["stratum"] if len(table) > 1 else [])], name)
    if strata is None and "stratum" in points.columns:
        raise SampleError(
            "points name strata, but there is no table of strata", where=name.column("stratum"),
            fix="give the strata with their areas; without them the sample cannot be weighted",
        )  # fmt: skip
    columns = {c: _text(points[c]) for c in ("stratum", "map", "reference", "cluster") if c in points.columns}
    stratum, problems = _strata_of(columns.get("stratum"), table, len(points), options)
    mapped, found = _map_labels(columns.get("map"), stratum, table, options)
    problems += found
    for column in ("cluster",):
        if column in columns:
            problems += _blank(columns[column], column, name)
    raise_if_errors(problems, SampleError)
    reference = columns["reference"]
    classes = _classes(options, table, mapped, reference)
    codes = {column: _code(values, classes) for column, values in (("map", mapped), ("reference", reference))}
    for column, values in (("map", mapped), ("reference", reference)):
        problems += _unknown(values, codes[column], classes, column, name)
    raise_if_errors(problems, SampleError)
    cluster = pd.factorize(columns["cluster"])[0].astype(np.int64) if "cluster" in columns else None
    return _sample(
        options, classes, _strata_in_classes(table, stratum, codes["map"], classes), stratum, codes["map"],
        codes["reference"], np.ones(len(points), dtype=np.int64), cluster,
    )  # fmt: skip


def sample_from_matrix(
    matrix: pd.DataFrame, strata: pd.DataFrame | None, options: AssessmentOptions
) -> ReferenceSample:
    """Check a square matrix of counts: the first column names the map class of each row, the other columns are named
    after the reference classes. Strata are the map classes, or a single one for a simple random sample."""
    name = options.points
    labels = _text(matrix.iloc[:, 0])
    body = matrix.iloc[:, 1:]
    columns = [str(c).strip() for c in body.columns]
    problems = _matrix_shape(list(labels), columns, name)
    counts, found = _whole_numbers(body, columns, name)
    raise_if_errors([*problems, *found], SampleError)
    order = [columns.index(label) for label in labels]
    counts, classes = counts[:, order], tuple(labels)
    table = _known_strata(strata, options)
    if len(table) == 1:
        stratum_of_row = np.zeros(len(classes), dtype=np.int64)
    else:
        called = [s.mapped_as or s.name for s in table]
        problems = [
            Problem(f"map class {c!r} of the matrix is in no stratum", options.strata.column("stratum"))
            for c in classes if c not in called
        ] + [
            Problem(f"stratum {c!r} is no row of the matrix", options.strata.column("stratum"),
                    "strata must be the map classes of the matrix; give points if they are not")
            for c in called if c not in classes
        ]  # fmt: skip
        raise_if_errors(problems, SampleError)
        stratum_of_row = np.array([called.index(c) for c in classes], dtype=np.int64)
    rows, cols = np.nonzero(counts)
    if not len(rows):
        raise SampleError("the matrix holds no counts", where=name.name)
    table = _strata_in_classes(table, stratum_of_row, np.arange(len(classes)), classes)
    return _sample(options, classes, table, stratum_of_row[rows], rows.astype(np.int64), cols.astype(np.int64),
                   counts[rows, cols])  # fmt: skip


def _sample(  # noqa: PLR0917 - one place where all parts meet
    options: AssessmentOptions,
    classes: tuple[str, ...],
    strata: tuple[Stratum, ...],
    stratum: NDArray[np.int64],
    mapped: NDArray[np.int64],
    reference: NDArray[np.int64],
    count: NDArray[np.int64],
    cluster: NDArray[np.int64] | None = None,
) -> ReferenceSample:
    known = {s.mapped_as: s.area for s in strata if s.mapped_as is not None} | dict(options.mapped_area)
    # Where every stratum is a map class, a class without a stratum is not on the map.
    elsewhere = 0.0 if all(s.mapped_as is not None for s in strata) else None
    return ReferenceSample(
        classes=classes, strata=strata, kind=options.kind or ("stratified" if len(strata) > 1 else "simple random"),
        stratum=stratum, map=mapped, reference=reference, count=count, cluster=cluster,
        mapped_area=tuple(known.get(c, elsewhere) for c in classes), area_unit=options.area_unit,
        evidence=options.evidence,
    )  # fmt: skip


# --- strata ---------------------------------------------------------------------------------------------------------


def _known_strata(strata: pd.DataFrame | None, options: AssessmentOptions) -> tuple[Stratum, ...]:
    """Strata in the order of their table. Raises SampleError listing every problem."""
    if strata is None:
        return (Stratum(_WHOLE_AREA, 1.0),)
    name = options.strata
    _require_columns(strata, ["stratum"], name)
    names = list(_text(strata["stratum"]))
    problems = _blank(pd.Series(names), "stratum", name)
    problems += [
        Problem(f"stratum {n!r} is listed twice", name.row(i, "stratum")) for i, n in enumerate(names) if n in names[:i]
    ]
    pixels, found = _numbers(strata, "pixels", name, whole=True)
    problems += found
    clusters, found = _numbers(strata, "clusters", name, whole=True)
    problems += found
    areas, found = _areas(strata, pixels, options)
    problems += found
    raise_if_errors(problems, SampleError)
    mapped = [m or None for m in _text(strata["mapped_as"])] if "mapped_as" in strata.columns else [None] * len(names)
    if not sum(areas) > 0:
        raise SampleError("the areas of the strata add up to 0", where=name.name)
    whole = [[None if np.isnan(v) else int(v) for v in column] for column in (pixels, clusters)]
    return tuple(Stratum(*row) for row in zip(names, areas, *whole, mapped, strict=True))


def _areas(
    strata: pd.DataFrame, pixels: NDArray[np.float64], options: AssessmentOptions
) -> tuple[list[float], list[Problem]]:
    name = options.strata
    if "area" in strata.columns:
        areas, problems = _numbers(strata, "area", name)
    elif "pixels" not in strata.columns:
        raise SampleError("the table has neither a column 'area' nor 'pixels'", where=name.name,
                          fix=f"its columns are {', '.join(map(repr, strata.columns))}")  # fmt: skip
    else:
        areas, problems = pixels * (options.pixel_area or 1.0), []
        if options.pixel_area is None:
            raise SampleError("strata give pixels, but not the area of a pixel", where=name.column("pixels"),
                              fix="say it with --pixel-area, in the unit that results are wanted in")  # fmt: skip
    column = "area" if "area" in strata.columns else "pixels"
    missing = [Problem("the area is missing", name.row(int(i), column)) for i in np.flatnonzero(np.isnan(areas))]
    return areas.tolist(), problems or missing


def _strata_in_classes(
    table: tuple[Stratum, ...], stratum: NDArray[np.int64], mapped: NDArray[np.int64], classes: tuple[str, ...]
) -> tuple[Stratum, ...]:
    """Strata that carry the names of map classes, and whose points are all mapped so, are those classes."""
    if any(s.mapped_as is not None for s in table) or not all(s.name in classes for s in table):
        return table
    own = np.array([classes.index(s.name) for s in table])
    if not np.array_equal(own[stratum], mapped):
        return table
    return tuple(Stratum(s.name, s.area, s.pixels, s.clusters, s.name) for s in table)


def _strata_of(
    named: pd.Series | None, table: tuple[Stratum, ...], n: int, options: AssessmentOptions
) -> tuple[NDArray[np.int64], list[Problem]]:
    if named is None:
        return np.zeros(n, dtype=np.int64), []
    names = tuple(s.name for s in table)
    place = _code(named, names)
    faulty = np.flatnonzero(place == NO_LABEL)
    return place, _rows(
        faulty, named, "stratum", options.points,
        lambda value: f"stratum {value!r} is not in {options.strata.name}" if value else "the stratum is missing",
        f"strata there: {', '.join(map(repr, names))}",
    )  # fmt: skip


# --- labels ---------------------------------------------------------------------------------------------------------


def _map_labels(
    given: pd.Series | None, stratum: NDArray[np.int64], table: tuple[Stratum, ...], options: AssessmentOptions
) -> tuple[pd.Series, list[Problem]]:
    name = options.points
    own = pd.Series([s.mapped_as or "" for s in table])
    by_stratum = own.take(np.maximum(stratum, 0)).reset_index(drop=True)
    if given is None:
        if not all(own):
            raise SampleError("the table has no column 'map'", where=name.name,
                              fix="give the map class of each point, or 'mapped_as' for each stratum")  # fmt: skip
        return by_stratum, []
    contrary = np.flatnonzero((by_stratum != "") & (by_stratum != given) & (stratum != NO_LABEL))
    problems = _rows(
        contrary, given, "map", name,
        lambda value: f"map class {value!r}, but the point's stratum is mapped as another class",
        "leave 'mapped_as' out if the strata come from another map",
    )  # fmt: skip
    return given, problems or _blank(given, "map", name)


def _classes(
    options: AssessmentOptions, table: tuple[Stratum, ...], mapped: pd.Series, reference: pd.Series
) -> tuple[str, ...]:
    """Given classes; else strata that are classes in their order, then the others that occur, by name."""
    if options.classes is not None:
        return options.classes
    occurring = set(mapped.unique()) | set(reference.unique()) | set(options.mapped_area)
    occurring |= {s.mapped_as for s in table if s.mapped_as}
    occurring.discard("")
    first = list(dict.fromkeys(s.mapped_as or s.name for s in table if (s.mapped_as or s.name) in occurring))
    return tuple(first + sorted(occurring - set(first)))


def _code(values: pd.Series, names: tuple[str, ...]) -> NDArray[np.int64]:
    """Places of values (n,) in names; NO_LABEL where a value is none of them."""
    codes, found = pd.factorize(values)
    place = {name: i for i, name in enumerate(names)}
    lookup = np.array([place.get(value, NO_LABEL) for value in found] or [NO_LABEL], dtype=np.int64)
    return lookup[codes]


def _unknown(
    values: pd.Series, codes: NDArray[np.int64], classes: tuple[str, ...], column: str, name: TableName
) -> list[Problem]:
    faulty = np.flatnonzero((codes == NO_LABEL) & (values != "").to_numpy())
    return _rows(faulty, values, column, name, lambda value: f"{value!r} is no class",
                 f"classes are {', '.join(map(repr, classes))}")  # fmt: skip


# --- matrix ---------------------------------------------------------------------------------------------------------


def _matrix_shape(rows: list[str], columns: list[str], name: TableName) -> list[Problem]:
    for what, labels in (("row", rows), ("column", columns)):
        twice = sorted({label for label in labels if labels.count(label) > 1})
        if twice:
            return [Problem(f"class {twice[0]!r} names more than one {what}", name.name)]
    lacking = [Problem(f"row {r!r} has no column of that name", name.name) for r in rows if r not in columns]
    lacking += [Problem(f"column {c!r} has no row of that name", name.name) for c in columns if c not in rows]
    if lacking:
        square = "the matrix must be square: rows and columns name the same classes; fill up with rows or columns of 0"
        return [*lacking[:-1], Problem(lacking[-1].what, lacking[-1].where, square)]
    return []


def _whole_numbers(body: pd.DataFrame, columns: list[str], name: TableName) -> tuple[NDArray[np.int64], list[Problem]]:
    values = body.apply(lambda column: pd.to_numeric(column, errors="coerce")).to_numpy(dtype=np.float64)
    faulty = ~(np.isfinite(values) & (values >= 0) & (values == np.floor(values)))
    problems = [
        Problem(f"{body.iat[i, j]!r} is not a whole number of points", name.row(int(i), columns[j]),
                "give counts of points, not shares")
        for i, j in np.argwhere(faulty)[:_ROWS_NAMED]
    ]  # fmt: skip
    return np.where(faulty, 0, values).astype(np.int64), problems


# --- common ---------------------------------------------------------------------------------------------------------


def _text(values: pd.Series) -> pd.Series:
    """Labels as stripped text; missing as ""; whole numbers that became floats through missing values without ".0"."""
    if pd.api.types.is_float_dtype(values) and (values.dropna() % 1 == 0).all():
        values = values.astype("Int64")
    return values.astype(object).where(values.notna(), "").astype(str).str.strip().reset_index(drop=True)


def _numbers(
    table: pd.DataFrame, column: str, name: TableName, *, whole: bool = False
) -> tuple[NDArray[np.float64], list[Problem]]:
    """Numbers >= 0 of a column, NaN where blank or where there is no such column."""
    if column not in table.columns:
        return np.full(len(table), np.nan), []
    text = _text(table[column])
    values = pd.to_numeric(text.where(text != "", np.nan), errors="coerce").to_numpy(dtype=np.float64)
    faulty = (text != "").to_numpy() & ~(np.isfinite(values) & (values >= 0))
    if whole:
        faulty |= np.isfinite(values) & (values != np.floor(values))
    expected = "a whole number that is not negative" if whole else "a number that is not negative"
    return values, _rows(np.flatnonzero(faulty), text, column, name, lambda value: f"{value!r} is not {expected}", "")


def _require_columns(table: pd.DataFrame, wanted: Iterable[str], name: TableName) -> None:
    lacking = [column for column in wanted if column not in table.columns]
    if lacking:
        raise SampleError(f"the table has no column {', '.join(map(repr, lacking))}", where=name.name,
                          fix=f"its columns are {', '.join(map(repr, table.columns))}")  # fmt: skip
    if table.empty:
        raise SampleError("the table has no rows", where=name.name)


def _blank(values: pd.Series, column: str, name: TableName) -> list[Problem]:
    return _rows(np.flatnonzero(values == ""), values, column, name, lambda value: f"the {column} is missing", "")


def _rows(faulty: NDArray[np.int64], values: pd.Series, column: str, name: TableName, what, fix: str) -> list[Problem]:  # noqa: ANN001
    """One problem per faulty row, and one that counts the rest when there are many."""
    problems = [Problem(what(values.iat[i]), name.row(int(i), column)) for i in faulty[:_ROWS_NAMED]]
    rest = len(faulty) - len(problems)
    if rest > 0:
        problems.append(Problem(f"{rest} more rows with such a fault", name.column(column)))
    if problems:
        problems[-1] = Problem(problems[-1].what, problems[-1].where, fix)
    return problems
