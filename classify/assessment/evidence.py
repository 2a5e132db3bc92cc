"""Levels of evidence, in one place: what a number may claim follows from how its sample came about."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

EvidenceName = Literal["probability sample", "purposive sample", "held-out training polygons"]


@dataclass(frozen=True, slots=True)
class Evidence:
    """One level of evidence and the words that every output uses for it.

    accuracy_term: what an accuracy from it is called. has_intervals: whether intervals for the whole mapped area are
    allowed. claim: what may be said. caution: what must be said beside it, or "".
    """

    name: EvidenceName
    accuracy_term: str
    has_intervals: bool
    claim: str
    caution: str


EVIDENCE: dict[EvidenceName, Evidence] = {
    "probability sample": Evidence(
        "probability sample",
        "map accuracy",
        True,
        "Every part of the mapped area had a known chance of being sampled, so accuracy and areas are estimated for "
        "the whole mapped area, with confidence intervals.",
        "The intervals cover chance in drawing the sample. They do not cover mistakes of the interpreters, places that "
        "the points miss by position, or change between the dates of the scene and of the reference labels.",
    ),
    "purposive sample": Evidence(
        "purposive sample",
        "agreement on the sampled places",
        False,
        "The places were chosen, not drawn by chance, so the numbers describe those places only.",
        "No confidence interval for the mapped area can be given, because places that were chosen may be easier or "
        "harder to map than the rest. Draw a probability sample before area or accuracy figures are relied on.",
    ),
    "held-out training polygons": Evidence(
        "held-out training polygons",
        "screening accuracy",
        False,
        "The model was checked on training polygons kept out of its fitting. That screens models against each other.",
        "It is not an accuracy of the map: training polygons are placed where a class is plain to see, and they do not "
        "stand for the mapped area.",
    ),
}  # fmt: skip
