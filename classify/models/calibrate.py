"""Probabilities that mean what they say: one temperature, fitted on held-out polygons, and their reliability."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar

from classify.models.kinds import to_probabilities
from classify.models.screening import Screening
from classify.settings.model import ModelKind

_BINS = 10


@dataclass(frozen=True)
class Calibration:
    """temperature: divides the logits; 1 leaves them alone. source: "held-out polygons" or "none".

    reliability: per bin of the highest probability its mean, the share right among held-out pixels (polygons weighted
    alike) and the count of pixels, before (`raw`) and after. error: expected calibration error, before and after.
    """

    temperature: float
    source: str
    reliability: tuple[dict[str, float | int], ...] = ()
    raw: tuple[dict[str, float | int], ...] = ()
    error: float | None = None
    raw_error: float | None = None

    def to_json(self) -> dict[str, Any]:
        """Plain data for model.json."""
        return {
            "temperature": self.temperature, "source": self.source, "error": self.error, "raw_error": self.raw_error,
            "reliability": list(self.reliability), "raw": list(self.raw),
        }  # fmt: skip


def calibrate(
    screening: Screening, codes: NDArray[np.uint8], polygon: NDArray[np.int32], kind: ModelKind
) -> Calibration:
    """Fit the temperature by least log loss over held-out pixels, every polygon weighing the same.

    Temperature scaling: Guo et al. 2017, "On calibration of modern neural networks", ICML. codes, polygon: (n,).
    """
    held = screening.rounds[0] > 0
    if not held.any():
        return Calibration(1.0, "none")
    scores, truth = screening.scores[held], np.searchsorted(screening.class_codes, codes[held])
    _, member, size = np.unique(polygon[held], return_inverse=True, return_counts=True)
    weight = 1 / size[member]
    weight = weight / weight.sum()

    def loss(log_temperature: float) -> float:
        given = to_probabilities(scores, kind, float(np.exp(log_temperature)))[np.arange(len(truth)), truth]
        return float(-(weight * np.log(np.maximum(given, 1e-12))).sum())

    best = minimize_scalar(loss, bounds=(np.log(0.02), np.log(20)), method="bounded", options={"xatol": 1e-3})
    temperature = round(float(np.exp(best.x)), 4)
    raw, raw_error = _reliability(to_probabilities(scores, kind, 1.0), truth, weight)
    after, error = _reliability(to_probabilities(scores, kind, temperature), truth, weight)
    return Calibration(temperature, "held-out polygons", after, raw, error, raw_error)


def _reliability(
    probabilities: NDArray[np.float64], truth: NDArray[np.int64], weight: NDArray[np.float64]
) -> tuple[tuple[dict[str, float | int], ...], float]:
    highest, right = probabilities.max(axis=1), np.argmax(probabilities, axis=1) == truth
    place = np.minimum((highest * _BINS).astype(int), _BINS - 1)
    rows, error = [], 0.0
    for number in np.unique(place):
        mine = place == number
        share = float(weight[mine].sum())
        said = float((weight[mine] * highest[mine]).sum() / share)
        was = float((weight[mine] * right[mine]).sum() / share)
        rows.append({"said": said, "right": was, "share": share, "pixels": int(mine.sum())})
        error += share * abs(said - was)
    return tuple(rows), error
