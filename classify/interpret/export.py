"""Labels out of the journal: one reference sample with the label that holds and everyone's original beside it."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

import geopandas
import pandas as pd

from classify.assessment.drawn_sample import LABEL_COLUMNS, read_drawn
from classify.errors import OutputError, SampleError
from classify.files import read_json, replacing, sha256, write_json
from classify.interpret.journal import NOTHING, Journal, Label
from classify.interpret.session import JOURNAL_FILE, agreement
from classify.lock import writing
from classify.raster.written import check_layer

Status = Literal["labelled", "cannot tell", "in dispute", "settled", "open"]
EXPORT_FILE = "reference.gpkg"
_RECORD = "reference.json"


@dataclass(frozen=True, slots=True)
class Export:
    """What was written: the file, how many points have each status, and the agreement of each pair of interpreters."""

    path: Path
    counts: dict[str, int]
    agreement: list[dict[str, Any]]

    def to_json(self) -> dict[str, Any]:
        """Plain data."""
        return {"schema": 1, "file": self.path.name, "points": self.counts, "agreement": self.agreement}


def export_labels(outputs: Path, classes: Sequence[str]) -> Export:
    """Write outputs/sample/reference.gpkg from the journal, to be named as the project's reference points.

    observed is blank where nobody could tell, and where interpreters disagree and nobody has settled it. A file that
    another program has changed since it was written here is not overwritten. Raises LandassayError.
    """
    with writing(outputs / "sample"):
        return _export(outputs / "sample", classes)


def _export(folder: Path, classes: Sequence[str]) -> Export:
    sample = read_drawn(folder)
    if not (folder / JOURNAL_FILE).exists():
        raise SampleError("nothing was labelled yet", where=str(folder), fix="run 'landassay interpret' first")
    path = folder / EXPORT_FILE
    _refuse_if_changed(path, folder / _RECORD)
    journal = Journal(folder / JOURNAL_FILE, "", "interpreter")
    try:
        active = sample.active_ids
        frame = sample.points[sample.points["id"].isin(active)].sort_values("id").reset_index(drop=True)
        table = labels_table(journal, [int(i) for i in frame["id"]])
        pairs = agreement(journal, active, classes)
    finally:
        journal.close()
    kept = frame.drop(columns=[c for c in LABEL_COLUMNS if c in frame.columns])
    whole = geopandas.GeoDataFrame(kept.merge(table, on="id"), geometry="geometry", crs=frame.crs)
    with replacing(path, RuntimeError) as temporary:  # which every error of pyogrio is
        whole.to_file(temporary, layer="reference", driver="GPKG")
        check_layer(temporary, "reference", len(whole))
    counts = {str(k): int(v) for k, v in table["status"].value_counts().sort_index().items()}
    export = Export(path, counts, pairs)
    write_json(folder / _RECORD, {**export.to_json(), "sha256": sha256(path)})
    return export


def labels_table(journal: Journal, ids: Sequence[int]) -> pd.DataFrame:
    """One row per point: id, observed, alternate, confidence, note, status, and for each interpreter observed_NAME and
    alternate_NAME (all as interpreters gave them; blank where they did not, or could not tell)."""
    people = journal.interpreters()
    standings = {name: journal.standing_of(name) for name in people}
    settled = journal.settled()
    columns = _columns(people)
    rows = []
    for i in ids:
        given = [standings[name].get(i, NOTHING).label for name in people]
        label, status = _outcome([one for one in given if one is not None], settled.get(i, NOTHING).label)
        row: dict[str, Any] = {
            "id": i, "observed": (label.label if label else None) or "",
            "alternate": (label.alternate if label else None) or "", "confidence": label.confidence if label else "",
            "note": label.note if label else "", "status": status,
        }  # fmt: skip
        for column, one in zip(columns, given, strict=True):
            row[f"observed_{column}"] = (one.label if one else None) or ""
            row[f"alternate_{column}"] = (one.alternate if one else None) or ""
        rows.append(row)
    return pd.DataFrame(rows)


def _outcome(given: Sequence[Label], settled: Label | None) -> tuple[Label | None, Status]:
    """The label that holds: the settled one, else the one all agree on who could tell."""
    if settled is not None:
        return settled, "settled" if settled.label else "cannot tell"
    if not given:
        return None, "open"
    told = [label for label in given if label.label is not None]
    if not told:
        return given[0], "cannot tell"
    if len({label.label for label in told}) > 1:
        return None, "in dispute"
    alternates = {label.alternate for label in told}
    notes = "; ".join(dict.fromkeys(label.note for label in told if label.note))
    # An alternate holds if all name it; of confidences the lowest counts.
    confidence = max((label.confidence for label in told), key=["high", "medium", "low"].index)
    return Label(told[0].label, alternates.pop() if len(alternates) == 1 else None, confidence, notes), "labelled"


def _columns(people: Sequence[str]) -> list[str]:
    """Names fit for columns, told apart by a number where they would be the same."""
    found: list[str] = []
    for name in people:
        plain = re.sub(r"[^A-Za-z0-9]+", "_", name).strip("_").lower() or "interpreter"
        number, unique = 2, plain
        while unique in found:
            unique, number = f"{plain}_{number}", number + 1
        found.append(unique)
    return found


def _refuse_if_changed(path: Path, record: Path) -> None:
    if not path.exists():
        return
    if not record.exists() or read_json(record).get("sha256") != sha256(path):
        raise OutputError("this file was changed since it was written here, and is left as it is", where=str(path),
                          fix="move it away, or import its labels with 'landassay interpret --import'")  # fmt: skip
