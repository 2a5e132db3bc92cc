"""Tables of comma-separated values as users write them, read as text and checked."""

from __future__ import annotations

import csv
import re
from collections import Counter
from pathlib import Path

import pandas as pd

from classify.errors import DataError, Problem, raise_if_errors
from classify.text import unseen

# One message names at most so many rows with the same fault.
ROWS_NAMED = 5
# Far more than a sample or its strata need, and little enough to be held in memory.
MOST_BYTES = 1 << 29
MOST_RECORDS = 1_000_000
MOST_COLUMNS = 1_000
# How formulas begin in spreadsheets, some of which first drop white space. Numbers with a sign are none.
_FORMULA = re.compile(r"\s*[=@\t\r]|\s*[+-](?!\s*[\d.]+([eE][+-]?\d+)?\s*$)")


def read_table(path: Path) -> pd.DataFrame:
    """Read a CSV file as text, blanks as "". Blank columns at the end, as spreadsheets leave them, are dropped.

    Raises DataError when it is missing, empty, absurdly large or not a table: rows of unequal length, columns that
    share a name.
    """
    rows = _rows(path)
    if not rows:
        raise DataError("the file is empty", where=str(path), fix="its first row names the columns")
    header = [column.strip() for column in rows[0]]
    while header and not header[-1]:
        header.pop()
    raise_if_errors(_misshapen(header, rows[1:], path), DataError)
    if len(rows) == 1:
        raise DataError("the table has a first row but no others", where=str(path))
    return pd.DataFrame([row[: len(header)] for row in rows[1:]], columns=header, dtype=object)


def csv_text(table: pd.DataFrame) -> str:
    """A table as comma-separated values. A spreadsheet would run text that begins like a formula: it gets an apostrophe
    in front, which spreadsheets take for the sign of text."""
    shown = table.rename(columns=_as_text).copy()
    for place, dtype in enumerate(shown.dtypes):
        if not pd.api.types.is_numeric_dtype(dtype):
            shown.isetitem(place, [_as_text(value) for value in shown.iloc[:, place]])
    return str(shown.to_csv(index=False, lineterminator="\n"))


def _as_text(value: object) -> object:
    return f"'{value}" if isinstance(value, str) and _FORMULA.match(value) else value


def _from_text(field: str) -> str:
    return field[1:] if field.startswith("'") and _FORMULA.match(field, 1) else field


def refuse_large(where: str, *, size_bytes: int = 0, records: int = 0, columns: int = 0) -> None:
    """Raise DataError when a table or vector file is larger than any that this program has a use for.

    Each number is a lower bound of what the file holds."""
    for found, most, unit in (
        (-(-size_bytes // 1_000_000), MOST_BYTES // 1_000_000, "MB"), (records, MOST_RECORDS, "records"),
        (columns, MOST_COLUMNS, "columns"),
    ):  # fmt: skip
        if found > most:
            raise DataError(f"the file holds {found:,} {unit} or more, and at most {most:,} are read", where=where,
                            fix="keep what is needed of it in a file of its own")  # fmt: skip


def _rows(path: Path) -> list[list[str]]:
    try:
        if path.exists() and not path.is_file():
            raise DataError("this is not a file", where=str(path))
        refuse_large(str(path), size_bytes=path.stat().st_size)
        rows: list[list[str]] = []
        with path.open(encoding="utf-8-sig", newline="") as stream:
            for fields in csv.reader(stream, strict=True):
                row = [_from_text(field) for field in fields]
                if code := next(filter(None, (unseen(field.replace("\r\n", "\n")) for field in row)), None):
                    what = f"row {len(rows) + 1} holds a character that cannot be seen ({code})"
                    raise DataError(what, where=str(path), fix="retype it, or save the table as UTF-8 text again")
                refuse_large(str(path), records=len(rows), columns=len(row))
                # A line of spaces is a blank line too, where a row has more than one field.
                if len(row) > 1 or (row and (row[0].strip() or not rows or len(rows[0]) == 1)):
                    rows.append(row)
    except FileNotFoundError as error:
        raise DataError("there is no such file", where=str(path)) from error
    except (csv.Error, UnicodeDecodeError) as error:
        raise DataError(f"this is not a UTF-8 table of comma-separated values: {error}", where=str(path)) from error
    except OSError as error:
        raise DataError(f"the file cannot be read: {error.strerror}", where=str(path)) from error
    return rows


def _misshapen(header: list[str], rows: list[list[str]], path: Path) -> list[Problem]:
    """Columns that share a name or have none; rows with fewer fields than columns, or more that are not blank."""
    again = sorted(name for name, n in Counter(header).items() if n > 1 or not name)
    problems = [
        Problem(f"more than one column is called {name!r}" if name else "a column has no name", str(path),
                "each column needs a name of its own")
        for name in again
    ]  # fmt: skip
    n = len(header)
    faulty = [i for i, row in enumerate(rows) if len(row) < n or any(field.strip() for field in row[n:])]
    problems += [
        Problem(f"the number of fields is {len(rows[i])}, but there are {n} columns", f"{path}, row {i + 2}",
                "separate fields by commas, blank ones too, and put text with commas in double quotes")
        for i in faulty[:ROWS_NAMED]
    ]  # fmt: skip
    if len(faulty) > ROWS_NAMED:
        problems.append(Problem(f"{len(faulty) - ROWS_NAMED} more rows with such a fault", str(path)))
    return problems
