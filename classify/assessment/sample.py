"""A labelled reference sample as one value: classes, strata, and the labels of every point as whole numbers."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal, get_args

import numpy as np
from numpy.typing import NDArray

from classify.assessment.evidence import RESERVATIONS, EvidenceName, Reservation
from classify.errors import Problem

DesignKind = Literal["simple random", "systematic", "stratified"]
DESIGN_KINDS: tuple[DesignKind, ...] = get_args(DesignKind)
NO_LABEL = -1


@dataclass(frozen=True, slots=True)
class Stratum:
    """One stratum: its area in the sample's unit; where known the pixels and the primary units (clusters) that it
    holds; and the map class that it is, if strata are classes of the assessed map."""

    name: str
    area: float
    pixels: int | None = None
    clusters: int | None = None
    mapped_as: str | None = None


@dataclass(frozen=True, slots=True, eq=False)
class ReferenceSample:
    """A labelled reference sample, checked. Arrays have one entry per point (or per cell of a matrix of counts).

    classes: names, in the order of all tables. strata: in order. kind: how the points were drawn.
    stratum: int64 (n,), places in `strata`. map: int64 (n,), places in `classes`, or NO_LABEL where the point lies off
    the map. reference: int64 (n,), NO_LABEL where the interpreter could not tell. count: int64 (n,), points that the
    entry stands for. Optional, int64 (n,) or None: alternate, the interpreter's second label, NO_LABEL where there is
    none; other_map, the class of a second map; cluster, the primary unit (None where points are drawn one by one);
    region, a place in `regions`. mapped_area: per class, in `area_unit`, within the strata; None where it is not known.
    reservations: what takes something from the claim of the sample. problems: warnings.
    """

    classes: tuple[str, ...]
    strata: tuple[Stratum, ...]
    kind: DesignKind
    stratum: NDArray[np.int64]
    map: NDArray[np.int64]
    reference: NDArray[np.int64]
    count: NDArray[np.int64]
    alternate: NDArray[np.int64] | None = None
    other_map: NDArray[np.int64] | None = None
    cluster: NDArray[np.int64] | None = None
    region: NDArray[np.int64] | None = None
    regions: tuple[str, ...] = ()
    mapped_area: tuple[float | None, ...] = ()
    area_unit: str = ""
    evidence: EvidenceName = "probability sample"
    reservations: tuple[Reservation, ...] = ()
    problems: tuple[Problem, ...] = ()

    @property
    def post_stratified(self) -> bool:
        """Whether strata came after the draw: those of a design of one draw can only have."""
        return self.kind != "stratified" and len(self.strata) > 1

    @property
    def off_map(self) -> NDArray[np.bool_]:
        """bool (n,): entries that lie outside the map, or where it has no data; on both maps of a comparison."""
        off: NDArray[np.bool_] = self.map == NO_LABEL
        return off if self.other_map is None else np.asarray(off | (self.other_map == NO_LABEL))

    @property
    def usable(self) -> NDArray[np.bool_]:
        """bool (n,): entries that estimates rest on: labelled, or known to be off the map."""
        return np.asarray((self.reference != NO_LABEL) | self.off_map)

    def unweighted(self) -> ReferenceSample:
        """The same points with no stratum weights, as befits places that were chosen and not drawn."""
        everywhere = Stratum("sampled places", sum(s.area for s in self.strata))
        return replace(self, strata=(everywhere,), stratum=np.zeros_like(self.stratum))

    def with_reservation(self, reservation: Reservation) -> ReferenceSample:
        """The same sample with one more reservation, each named once and in the order of all."""
        there = {*self.reservations, reservation}
        return replace(self, reservations=tuple(r for r in RESERVATIONS if r in there))

    def with_problems(self, problems: tuple[Problem, ...]) -> ReferenceSample:
        """The same sample with more warnings."""
        return replace(self, problems=(*self.problems, *problems))
