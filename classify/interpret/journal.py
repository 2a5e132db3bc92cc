"""Labels on disk before anyone is told so: an append-only journal in SQLite (WAL, full synchronisation).

Nothing is ever changed or removed: a new label, an undo and a settled dispute are each a further entry. What holds for
a point is the last entry that was not undone. An entry names the last one its author had seen, and is refused if
another came in between, so that two open pages cannot overwrite each other.
"""

from __future__ import annotations

import sqlite3
import threading
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Literal, get_args

from classify.errors import DataError, SampleError
from classify.text import unseen

Confidence = Literal["high", "medium", "low"]
CONFIDENCES: tuple[Confidence, ...] = get_args(Confidence)
Role = Literal["interpreter", "settling"]

_LAYOUT = """
CREATE TABLE IF NOT EXISTS entry (
  number INTEGER PRIMARY KEY AUTOINCREMENT,
  point INTEGER NOT NULL,
  role TEXT NOT NULL,
  interpreter TEXT NOT NULL,
  undoes INTEGER REFERENCES entry (number),
  label TEXT,
  alternate TEXT,
  confidence TEXT NOT NULL DEFAULT 'high',
  note TEXT NOT NULL DEFAULT '',
  written_at TEXT NOT NULL
);
CREATE INDEX IF NOT EXISTS entry_by_point ON entry (role, interpreter, point);
"""

_INSERT = """
INSERT INTO entry (point, role, interpreter, label, alternate, confidence, note, written_at)
VALUES (?, ?, ?, ?, ?, ?, ?, ?)
"""


class StaleEntryError(SampleError):
    """The point was labelled in between, in another page or by another program."""


@dataclass(frozen=True, slots=True)
class Label:
    """What an interpreter says of a point. label: class name, or None for "cannot tell"; alternate: a second class that
    fits as well, or None."""

    label: str | None
    alternate: str | None = None
    confidence: Confidence = "high"
    note: str = ""


@dataclass(frozen=True, slots=True)
class Standing:
    """What holds for one point. label: None where nothing holds (never labelled, or undone). revision: number of the
    last entry about the point, 0 for none."""

    label: Label | None
    revision: int


NOTHING = Standing(None, 0)


class Journal:
    """The journal of one sample, for one role and name. Thread-safe; several processes may write at once."""

    def __init__(self, path: Path, interpreter: str, role: Role = "interpreter") -> None:
        self.path, self.interpreter, self.role = path, interpreter, role
        self._lock = threading.Lock()
        path.parent.mkdir(parents=True, exist_ok=True)
        self._db = _open(path)

    def close(self) -> None:
        """Close the file."""
        with self._lock:
            self._db.close()

    def write(self, point: int, label: Label, seen: int) -> int:
        """Store a label; returns its number once it is on disk. seen: revision of the point that its author saw.

        Raises StaleEntryError when there is a later one.
        """
        with self._entry(point, seen) as db:
            cursor = db.execute(_INSERT, self._row(point, label))
            return int(cursor.lastrowid or 0)

    def write_all(self, labels: Iterable[tuple[int, Label]]) -> int:
        """Store many labels at once, or none of them; returns how many. For labels that were made elsewhere."""
        with self._transaction() as db:
            rows = [self._row(point, label) for point, label in labels]
            db.executemany(_INSERT, rows)
            return len(rows)

    def _row(self, point: int, label: Label) -> tuple[object, ...]:
        return (point, self.role, self.interpreter, label.label, label.alternate, label.confidence, label.note, _now())

    def undo(self) -> int | None:
        """Take back the last label that still holds, whatever its point; returns the point, or None for none."""
        with self._transaction() as db:
            row = db.execute(
                "SELECT number, point FROM entry WHERE role = ? AND interpreter = ? AND undoes IS NULL "
                "AND number NOT IN (SELECT undoes FROM entry WHERE undoes IS NOT NULL) ORDER BY number DESC LIMIT 1",
                (self.role, self.interpreter),
            ).fetchone()
            if row is None:
                return None
            db.execute(
                "INSERT INTO entry (point, role, interpreter, undoes, written_at) VALUES (?, ?, ?, ?, ?)",
                (row[1], self.role, self.interpreter, row[0], _now()),
            )
            return int(row[1])

    def standing(self) -> dict[int, Standing]:
        """What holds for every point that this journal's author has said anything of."""
        with self._at_work() as db:
            return _standings(db, self.role, self.interpreter)

    def standing_at(self, point: int, interpreter: str | None = None) -> Standing:
        """What holds for one point: by this journal's author, or by an interpreter."""
        with self._at_work() as db:
            role, name = (self.role, self.interpreter) if interpreter is None else ("interpreter", interpreter)
            return _standings(db, role, name, point).get(point, NOTHING)

    def interpreters(self) -> list[str]:
        """Names of all who have labelled points, in the order of their names."""
        with self._at_work() as db:
            rows = db.execute("SELECT DISTINCT interpreter FROM entry WHERE role = 'interpreter' ORDER BY 1").fetchall()
            if strange := [row[0] for row in rows if not isinstance(row[0], str) or unseen(row[0])]:
                raise sqlite3.DataError(f"{str(strange[0])[:80]!r} is no name of an interpreter")
            return [row[0] for row in rows]

    def standing_of(self, interpreter: str) -> dict[int, Standing]:
        """What holds by another interpreter."""
        with self._at_work() as db:
            return _standings(db, "interpreter", interpreter)

    def settled(self) -> dict[int, Standing]:
        """What holds of disputes that were settled, by whomever did so last."""
        with self._at_work() as db:
            return _standings(db, "settling", None)

    @contextmanager
    def _entry(self, point: int, seen: int) -> Iterator[sqlite3.Connection]:
        with self._transaction() as db:
            last = db.execute(
                "SELECT MAX(number) FROM entry WHERE role = ? AND interpreter = ? AND point = ?",
                (self.role, self.interpreter, point),
            ).fetchone()[0]
            if (last or 0) != seen:
                raise StaleEntryError(f"point {point} was labelled in between", fix="look at it again")
            yield db

    @contextmanager
    def _transaction(self) -> Iterator[sqlite3.Connection]:
        """The write lock is taken before anything is read; the commit returns when the data are on disk."""
        with self._at_work() as db:
            db.execute("BEGIN IMMEDIATE")
            try:
                yield db
                db.execute("COMMIT")
            except BaseException:
                if db.in_transaction:
                    db.execute("ROLLBACK")
                raise

    @contextmanager
    def _at_work(self) -> Iterator[sqlite3.Connection]:
        """The file, for one thread at a time. Raises DataError for one held by another program, or damaged."""
        with self._lock:
            try:
                yield self._db
            except sqlite3.Error as error:
                raise _failure(error, self.path) from error


def _open(path: Path) -> sqlite3.Connection:
    db = None
    try:
        db = sqlite3.connect(path, isolation_level=None, check_same_thread=False, timeout=10)
        # A file from elsewhere may bring triggers and views: they get no say beyond plain SQL.
        db.execute("PRAGMA trusted_schema = OFF")
        db.execute("PRAGMA journal_mode = WAL")
        db.execute("PRAGMA synchronous = FULL")
        db.executescript(_LAYOUT)
    except sqlite3.Error as error:
        if db is not None:
            db.close()
        raise _failure(error, path) from error
    return db


def _failure(error: sqlite3.Error, path: Path) -> DataError:
    fix = "check that the folder can be written to, that no other program holds the file, and that it is whole"
    return DataError(f"the labels cannot be read or written: {error}", where=str(path), fix=fix)


def _standings(
    db: sqlite3.Connection, role: Role, interpreter: str | None, point: int | None = None
) -> dict[int, Standing]:
    """What holds by one interpreter, or by all together for None; of all points, or of one."""
    given = {"role": role, "interpreter": interpreter, "point": point}
    wanted = {column: value for column, value in given.items() if value is not None}
    rows = db.execute(
        "SELECT number, point, undoes, label, alternate, confidence, note FROM entry WHERE "
        + " AND ".join(f"{column} = ?" for column in wanted) + " ORDER BY number",
        tuple(wanted.values()),
    )  # fmt: skip
    held: dict[int, dict[int, Label]] = {}  # by point, labels that were not undone by number, the last one last
    last: dict[int, int] = {}
    for row in rows:
        if not _is_entry(*row):
            raise sqlite3.DataError(f"entry {row[0]} is none that was written here")
        number, about, undoes, *said = row
        last[about] = number
        if undoes is not None:
            held.setdefault(about, {}).pop(undoes, None)
        else:
            held.setdefault(about, {})[number] = Label(*said)
    return {about: Standing(next(reversed(held[about].values()), None), number) for about, number in last.items()}


def _is_entry(number: object, point: object, undoes: object, *said: object) -> bool:
    label, alternate, confidence, note = said
    numbers = isinstance(point, int) and isinstance(undoes, int | None)
    texts = all(isinstance(text, str) and not unseen(text) for text in (label, alternate, note) if text is not None)
    return isinstance(number, int) and numbers and texts and note is not None and confidence in CONFIDENCES


def _now() -> str:
    return datetime.now(UTC).isoformat(timespec="seconds")
