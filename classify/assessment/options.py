"""What a caller may choose about an assessment, and how messages name the tables it is made from."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal, get_args

from classify.assessment.evidence import EvidenceName, Reservation
from classify.assessment.sample import DesignKind
from classify.settings.model import IntervalName

# A simple random sample with strata is called by its usual name too.
SpokenKind = Literal[DesignKind, "post-stratified"]
INTERVALS: tuple[IntervalName, ...] = get_args(IntervalName)


@dataclass(frozen=True, slots=True)
class TableName:
    """How messages call a table: its file or "points", and the row number of its first record."""

    name: str
    first_row: int = 1

    def column(self, column: str) -> str:
        """Where a column lies."""
        return f"{self.name}, column {column!r}"

    def row(self, place: int, column: str) -> str:
        """Where the value of the record at `place` (from 0) lies."""
        return f"{self.name}, row {place + self.first_row}, column {column!r}"


@dataclass(frozen=True, slots=True)
class AssessmentOptions:
    """How to assess.

    confidence_level: in (0.5, 1). interval: "automatic" is Wilson for proportions, else normal or Student.
    replicates, seed: of the bootstrap. finite_population: correct for the part of the population that was sampled,
    where the strata give counts of its units. kind: how points were drawn; None for stratified, or simple random with
    one stratum; "post-stratified" is simple random with strata. evidence: what the sample may claim, reservations: what
    takes something from that. classes: names in order; None for those that occur. merge: class
    -> class that it counts as. unlabelled: reference labels that mean "could not tell", beside blanks. area_unit:
    carried through. pixel_area: area of a pixel, where strata give pixels only. mapped_area: mapped area by class
    (before merging) where strata do not say it; None where it is not known. points, strata: what
    messages call the tables.
    """

    confidence_level: float = 0.95
    interval: IntervalName = "automatic"
    replicates: int = 2000
    seed: int = 0
    finite_population: bool = True
    kind: SpokenKind | None = None
    evidence: EvidenceName = "probability sample"
    reservations: tuple[Reservation, ...] = ()
    classes: tuple[str, ...] | None = None
    merge: Mapping[str, str] = field(default_factory=dict)
    unlabelled: tuple[str, ...] = ()
    area_unit: str = ""
    pixel_area: float | None = None
    mapped_area: Mapping[str, float | None] = field(default_factory=dict)
    points: TableName = TableName("points")
    strata: TableName = TableName("strata")
