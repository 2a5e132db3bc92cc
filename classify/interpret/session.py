"""One interpreter's work on one sample: which points, in which order, what was said, what is in dispute."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import geopandas
import numpy as np
import pandas as pd

from classify.assessment import assess_matrix
from classify.assessment.drawn_sample import DrawnSample, read_drawn
from classify.errors import SampleError
from classify.interpret.journal import CONFIDENCES, NOTHING, Journal, Label, Role, Standing
from classify.raster.grid import Grid
from classify.settings import ClassSettings, Project
from classify.text import unseen

JOURNAL_FILE = "labels.sqlite"
_LONGEST_NOTE = 500


@dataclass(frozen=True, slots=True)
class Place:
    """One point to be labelled: its id, pixel on the scene's grid, and geographic coordinates. Nothing else is known of
    it here, so that nothing else can be shown."""

    id: int
    row: int
    col: int
    longitude: float
    latitude: float


class Session:
    """Points, classes and the journal, for the page. In settling, only points that interpreters disagree on."""

    def __init__(self, sample: DrawnSample, grid: Grid, classes: Sequence[ClassSettings], journal: Journal) -> None:
        self.classes, self.journal = tuple(classes), journal
        self.names = tuple(c.name for c in classes)
        self.places = {place.id: place for place in _places(sample, grid)}
        if journal.role == "settling":
            disputed = disagreements(journal, self.places)
            self.places = {i: place for i, place in self.places.items() if i in disputed}
        self.order = shuffled(list(self.places), journal.interpreter)

    def label(self, point: int, label: Label, seen: int) -> int:
        """Store a label after checking it. Raises SampleError, StaleEntryError."""
        if point not in self.places:
            raise SampleError(f"there is no point {point} to label")
        check_label(label, self.names)
        return self.journal.write(point, label, seen)

    def overview(self) -> dict[str, Any]:
        """Ids in this interpreter's order, each with whether it is done and its revision."""
        standing = self.journal.standing()
        points = []
        for i in self.order:
            s = standing.get(i, NOTHING)
            state = "open" if s.label is None else "done" if s.label.label is not None else "untold"
            points.append(
                {"id": i, "state": state, "label": s.label.label if s.label else None, "revision": s.revision}
            )
        return {"points": points}

    def said(self, point: int) -> dict[str, Any]:
        """What holds for one point, and in settling what the interpreters said."""
        standing = self.journal.standing_at(point)
        found: dict[str, Any] = {"revision": standing.revision, "said": _plain(standing.label)}
        if self.journal.role == "settling":
            found["originals"] = [
                {"interpreter": name, **_plain_of(self.journal.standing_at(point, name))}
                for name in self.journal.interpreters()
            ]
        return found


def open_session(project: Project, outputs: Path, grid: Grid, interpreter: str, role: Role = "interpreter") -> Session:
    """The project's drawn sample, ready to be labelled by one person. Raises DataError, SampleError."""
    folder = outputs / "sample"
    sample = read_drawn(folder)
    if not interpreter.strip() or unseen(interpreter):
        raise SampleError("the interpreter has no name that can be read", fix="give --interpreter a name")
    journal = Journal(folder / JOURNAL_FILE, interpreter.strip(), role)
    return Session(sample, grid, project.classes, journal)


def check_label(label: Label, names: Sequence[str]) -> None:
    """Raise SampleError when a label could not have been chosen."""
    for given in (label.label, label.alternate):
        if given is not None and given not in names:
            raise SampleError(f"{given[:200]!r} is no class", fix=f"classes are {', '.join(map(repr, names))}")
    if label.alternate is not None and label.alternate == label.label:
        raise SampleError("the alternate label is the same as the first", fix="choose another class, or none")
    if label.label is None and label.alternate is not None:
        raise SampleError("an alternate label needs a first one", fix="choose the class that fits best first")
    if label.confidence not in CONFIDENCES:
        raise SampleError(f"confidence {label.confidence!r} is none of {', '.join(CONFIDENCES)}")
    if code := unseen(label.note):
        raise SampleError(f"the note holds a character that cannot be seen ({code})", fix="retype it")
    if len(label.note) > _LONGEST_NOTE:
        raise SampleError(f"the note is longer than {_LONGEST_NOTE} characters", fix="shorten it")


def shuffled(ids: list[int], interpreter: str) -> list[int]:
    """The same points in an order of the interpreter's own, that tells nothing of how they were drawn."""
    digest = int.from_bytes(hashlib.sha256(interpreter.encode("utf-8")).digest()[:8], "big")
    return [int(i) for i in np.random.default_rng(digest).permutation(sorted(ids))]


def disagreements(journal: Journal, ids: Sequence[int] | dict[int, Place]) -> list[int]:
    """Ids of points on which interpreters who could tell do not agree, ascending."""
    standings = [journal.standing_of(name) for name in journal.interpreters()]
    return [i for i in sorted(ids) if len(set(_told(standings, i))) > 1]


def agreement(journal: Journal, ids: Sequence[int], names: Sequence[str]) -> list[dict[str, Any]]:
    """Agreement of each pair of interpreters on points that both could tell: share of points with the same label, and
    kappa with its interval, unweighted (the pair is compared on the points, not on the map)."""
    found = []
    people = journal.interpreters()
    standings = {name: journal.standing_of(name) for name in people}
    for place, first in enumerate(people):
        for second in people[place + 1 :]:
            pairs = [_told([standings[first], standings[second]], i) for i in ids]
            both = [pair for pair in pairs if len(pair) == 2]
            found.append({"first": first, "second": second, **_pair_agreement(both, names)})
    return found


def _pair_agreement(both: Sequence[Sequence[str]], names: Sequence[str]) -> dict[str, Any]:
    if not both:
        return {"points": 0, "same": None, "kappa": None}
    occurring = {label for pair in both for label in pair}
    used = [name for name in names if name in occurring]
    place = {name: i for i, name in enumerate(used)}
    counts = np.zeros((len(used), len(used)), dtype=np.int64)
    np.add.at(counts, tuple(np.array([[place[a], place[b]] for a, b in both]).T), 1)
    matrix = pd.DataFrame(counts, columns=used)
    matrix.insert(0, "first interpreter", used)
    result = assess_matrix(matrix)
    return {"points": len(both), "same": sum(a == b for a, b in both) / len(both), "kappa": result.kappa.to_json()}


def _told(standings: Sequence[dict[int, Standing]], point: int) -> list[str]:
    said = [standing.get(point, NOTHING).label for standing in standings]
    return [label.label for label in said if label is not None and label.label is not None]


def _plain(label: Label | None) -> dict[str, Any] | None:
    if label is None:
        return None
    return {"label": label.label, "alternate": label.alternate, "confidence": label.confidence, "note": label.note}


def _plain_of(standing: Standing) -> dict[str, Any]:
    return _plain(standing.label) or {"label": None, "alternate": None, "confidence": None, "note": ""}


def _places(sample: DrawnSample, grid: Grid) -> list[Place]:
    active = set(sample.active_ids)
    frame: geopandas.GeoDataFrame = sample.points[sample.points["id"].isin(active)]
    there = frame.to_crs(grid.crs.to_wkt())
    rows, cols = grid.rowcol(there.geometry.x.to_numpy(), there.geometry.y.to_numpy())
    degrees = frame.geometry.to_crs(4326)
    return [
        Place(int(i), int(r), int(c), round(float(x), 6), round(float(y), 6))
        for i, r, c, x, y in zip(frame["id"], rows, cols, degrees.x, degrees.y, strict=True)
    ]
