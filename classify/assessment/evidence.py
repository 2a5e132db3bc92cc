"""Levels of evidence, in one place: what a number may claim follows from how its sample came about."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass
from typing import Literal

EvidenceName = Literal["probability sample", "purposive sample", "held-out training polygons"]
# What takes something from the claim of a probability sample.
Reservation = Literal["design assumed", "part left out", "distance kept", "reserves used"]


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

_ASSUMED_CLAIM = (
    "No design was recorded, so it is assumed, not known, that every part of the mapped area had the same chance of "
    "being sampled; only if that is so do the estimates and their confidence intervals hold."
)
_PART_CLAIM = (
    "Every part of the sampled area had a known chance of being sampled, so accuracy and areas are estimated for that "
    "area, with confidence intervals. Of the parts of the map that were left out they say nothing."
)
# Sentences that follow the claim, in this order.
_RESERVED: dict[Reservation, str] = {
    "distance kept": "As points keep a distance from each other, their chances are known nearly, not exactly.",
    "reserves used": "Places that could not be reached are taken to be like those drawn in their stead.",
}
RESERVATIONS: tuple[Reservation, ...] = ("design assumed", "part left out", "distance kept", "reserves used")


def claim_of(name: EvidenceName, reservations: Collection[Reservation] = ()) -> str:
    """What may be said of a sample: the claim of its evidence, less what the reservations take from it."""
    if name != "probability sample":
        return EVIDENCE[name].claim
    claim = EVIDENCE[name].claim
    if "design assumed" in reservations:
        claim = _ASSUMED_CLAIM
    elif "part left out" in reservations:
        claim = _PART_CLAIM
    return " ".join([claim, *(text for one, text in _RESERVED.items() if one in reservations)])
