"""A labelled reference sample as one value: classes, strata, and the labels of every point as whole numbers."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from classify.assessment.evidence import EvidenceName
from classify.errors import Problem

DesignKind = Literal["simple random", "systematic", "stratified", "post-stratified"]
NO_LABEL = -1


@dataclass(frozen=True, slots=True)
class Stratum:
    """One stratum: its area in the sample's unit, where known the pixels it holds and the primary units (clusters) it
    holds, and the map class that it is, if strata are classes of the assessed map."""

    name: str
    area: float
    pixels: int | None = None
    clusters: int | None = None
    mapped_as: str | None = None


@dataclass(frozen=True, slots=True, eq=False)
class ReferenceSample:
    """A labelled reference sample, checked. Arrays have one entry per point (or per cell of a matrix of counts).

    classes: names, in the order of all tables. strata: in order. kind: how the points were drawn.
    stratum, map, reference: int64 (n,), places in `strata` and `classes`; reference is NO_LABEL where the interpreter
    could not tell. alternate: int64 (n,) second label or NO_LABEL, or None. cluster: int64 (n,) primary unit, or None
    when points are drawn one by one. region: int64 (n,) place in `regions`, or None. count: int64 (n,) points that the
    entry stands for. mapped_area: per class, in `area_unit`; None where it is not known. problems: warnings.
    """

    classes: tuple[str, ...]
    strata: tuple[Stratum, ...]
    kind: DesignKind
    stratum: NDArray[np.int64]
    map: NDArray[np.int64]
    reference: NDArray[np.int64]
    count: NDArray[np.int64]
    alternate: NDArray[np.int64] | None = None
    cluster: NDArray[np.int64] | None = None
    region: NDArray[np.int64] | None = None
    regions: tuple[str, ...] = ()
    mapped_area: tuple[float | None, ...] = ()
    area_unit: str = ""
    evidence: EvidenceName = "probability sample"
    problems: tuple[Problem, ...] = ()

    @property
    def labelled(self) -> NDArray[np.bool_]:
        """bool (n,): entries with a reference label."""
        return self.reference != NO_LABEL

    def with_problems(self, problems: tuple[Problem, ...]) -> ReferenceSample:
        """The same sample with more warnings."""
        return replace(self, problems=(*self.problems, *problems))
