"""Columns of a user's table, checked: labels as whole numbers, figures, findings that name table, row and column."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from classify.assessment.options import TableName
from classify.assessment.sample import NO_LABEL
from classify.errors import Problem, SampleError, raise_if_errors
from classify.tables import ROWS_NAMED, read_table


@dataclass(frozen=True, slots=True, eq=False)
class Labels:
    """A column of labels. names: distinct, stripped. codes: int64 (n,), places in `names`; NO_LABEL where blank."""

    names: tuple[str, ...]
    codes: NDArray[np.int64]

    @classmethod
    def of(cls, values: pd.Series[Any]) -> Labels:
        """Read a column of any type; whole numbers that became floats through gaps lose their ".0"."""
        codes, found = pd.factorize(values)
        texts = [plain_text(value) for value in found]
        names = tuple(dict.fromkeys(text for text in texts if text))
        place = {name: i for i, name in enumerate(names)}
        # The last entry serves the code -1 of missing values.
        lookup = np.array([place.get(text, NO_LABEL) for text in texts] + [NO_LABEL], dtype=np.int64)
        return cls(names, lookup[codes])

    @property
    def blank(self) -> NDArray[np.bool_]:
        """bool (n,): where there is no label."""
        return np.asarray(self.codes == NO_LABEL)

    def text(self, place: int) -> str:
        """The label of one row."""
        code = int(self.codes[place])
        return "" if code == NO_LABEL else self.names[code]

    def renamed(self, names: Mapping[str, str]) -> Labels:
        """The same column with labels replaced; labels that become one are merged."""
        new = [names.get(name, name) for name in self.names]
        merged = tuple(dict.fromkeys(new))
        return Labels(merged, _recoded(self.codes, new, merged))

    def without(self, names: Iterable[str]) -> Labels:
        """The same column with some labels made blank."""
        unwanted = set(names)
        kept = [name for name in self.names if name not in unwanted]
        return Labels(tuple(kept), self.places_in(kept))

    def places_in(self, names: Sequence[str]) -> NDArray[np.int64]:
        """Places of the labels in another list, int64 (n,); NO_LABEL where blank or not in it."""
        return _recoded(self.codes, self.names, names)

    def rows(self, keep: NDArray[np.bool_]) -> Labels:
        """The rows where `keep` is true."""
        return replace(self, codes=self.codes[keep])


def _recoded(codes: NDArray[np.int64], old: Sequence[str], new: Sequence[str]) -> NDArray[np.int64]:
    place = {name: i for i, name in enumerate(new)}
    lookup = np.array([place.get(name, NO_LABEL) for name in old] + [NO_LABEL], dtype=np.int64)
    return np.asarray(lookup[codes])


def plain_text(value: object) -> str:
    """A label as stripped text; "" for what is missing."""
    if value is None or value is pd.NA or (isinstance(value, float) and np.isnan(value)):
        return ""
    return str(int(value)) if isinstance(value, float) and value.is_integer() else str(value).strip()


def require_columns(table: pd.DataFrame, wanted: Iterable[str], name: TableName) -> None:
    """Raise SampleError when a column is lacking, or the table has no rows."""
    lacking = [column for column in wanted if column not in table.columns]
    if lacking:
        raise SampleError(
            f"the table has no column {', '.join(map(repr, lacking))}", where=name.name,
            fix=f"its columns are {', '.join(map(repr, map(str, table.columns)))}",
        )  # fmt: skip
    if table.empty:
        raise SampleError("the table has no rows", where=name.name)


def numbers(
    table: pd.DataFrame, column: str, name: TableName, *, whole: bool = False
) -> tuple[NDArray[np.float64], list[Problem]]:
    """Numbers >= 0 of a column, float64 (n,), NaN where blank or where there is no such column; and its faults."""
    if column not in table.columns:
        return np.full(len(table), np.nan), []
    labels = Labels.of(table[column])
    parsed = pd.to_numeric(pd.Series([*labels.names, ""]), errors="coerce").to_numpy(dtype=np.float64)
    values = parsed[labels.codes]
    faulty = ~labels.blank & ~(np.isfinite(values) & (values >= 0))
    if whole:
        faulty |= np.isfinite(values) & (values != np.floor(values))
    expected = "a whole number that is not negative" if whole else "a number that is not negative"
    return values, faults(faulty, labels, column, name, lambda value: f"{value!r} is not {expected}")


def faults(  # noqa: PLR0917 - a fault is told by all of these
    faulty: NDArray[np.bool_], labels: Labels, column: str, name: TableName, what: Callable[[str], str], fix: str = ""
) -> list[Problem]:
    """One problem per faulty row, and one that counts the rest when there are many. what: message for a label."""
    rows = np.flatnonzero(faulty)
    problems = [Problem(what(labels.text(i)), name.row(int(i), column), fix) for i in rows[:ROWS_NAMED]]
    if len(rows) > ROWS_NAMED:
        problems.append(Problem(f"{len(rows) - ROWS_NAMED} more rows with such a fault", name.column(column), fix))
    # The remedy is the same for all: said once, at the end.
    return [replace(problem, fix="") for problem in problems[:-1]] + problems[-1:]


def blanks(labels: Labels, column: str, name: TableName, fix: str = "") -> list[Problem]:
    """Faults for rows without a label."""
    return faults(labels.blank, labels, column, name, lambda _: f"the {column} is missing", fix)


def read_merge(path: Path) -> dict[str, str]:
    """Read a table of classes to merge: columns class, counts_as. Raises DataError, SampleError."""
    table, name = read_table(path), TableName(str(path), 2)
    require_columns(table, ["class", "counts_as"], name)
    given, target = Labels.of(table["class"]), Labels.of(table["counts_as"])
    problems = [*blanks(given, "class", name), *blanks(target, "counts_as", name)]
    again = pd.Series(given.codes).duplicated().to_numpy() & ~given.blank
    problems += faults(again, given, "class", name, lambda value: f"class {value!r} is listed twice")
    raise_if_errors(problems, SampleError)
    return {given.text(i): target.text(i) for i in range(len(table))}
