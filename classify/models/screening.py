"""Screening accuracy as a value: how held-out training polygons were labelled. Never the accuracy of a map."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

EVIDENCE = "held-out training polygons"
MEANING = (
    "Screening accuracy: the share of pixels of held-out training polygons that the model labels as the polygons say. "
    "Polygons are drawn where classes are plain to see, so it is not the accuracy of the map."
)


@dataclass(frozen=True, eq=False)
class Screening:
    """Result of repeated grouped cross-validation.

    class_codes: uint8 (k,). counts: int64 (k, k), held-out pixels, rows as labelled by polygons, columns as by the
    model, from the first repeat. repeats: overall and balanced accuracy (mean share right per class) of each repeat,
    float64 (r, 2). rounds: uint8 (r, n), held-out label per repeat and training pixel, 0 where never held out.
    scores: float64 (n, k), of the first repeat, NaN there. unscreened: codes that could not be held out, for want of a
    second group. leaky: overall accuracy that a random split of pixels would claim, or None.
    """

    class_codes: NDArray[np.uint8]
    counts: NDArray[np.int64]
    repeats: NDArray[np.float64]
    rounds: NDArray[np.uint8]
    scores: NDArray[np.float64]
    folds: int
    groups: str = "polygons"
    unscreened: tuple[int, ...] = ()
    leaky: float | None = None
    notes: tuple[str, ...] = field(default=())

    @property
    def overall(self) -> float | None:
        """Mean over repeats of the share of held-out pixels labelled as their polygons say; None without any."""
        return float(self.repeats[:, 0].mean()) if len(self.repeats) else None

    @property
    def balanced(self) -> float | None:
        """Mean over repeats and classes of the share right per class; None if nothing was held out."""
        return float(self.repeats[:, 1].mean()) if len(self.repeats) else None

    def to_json(self) -> dict[str, Any]:
        """Plain data for model.json and reports; null where nothing could be held out."""
        right = np.diag(self.counts)
        spread = self.repeats.std(axis=0, ddof=1) if len(self.repeats) > 1 else (None, None)
        return {
            "evidence": EVIDENCE,
            "meaning": MEANING,
            "screening_accuracy": self.overall,
            "screening_accuracy_spread": _number(spread[0]),
            "balanced_screening_accuracy": self.balanced,
            "balanced_screening_accuracy_spread": _number(spread[1]),
            "folds": self.folds,
            "repeats": len(self.repeats),
            "kept_whole": self.groups,
            "held_out_pixels": int(self.counts.sum()),
            "class_codes": [int(code) for code in self.class_codes],
            "counts": self.counts.tolist(),
            "share_found": _shares(right, self.counts.sum(axis=1)),
            "share_right": _shares(right, self.counts.sum(axis=0)),
            "unscreened_codes": list(self.unscreened),
            "leaky_split_accuracy": self.leaky,
            "notes": list(self.notes),
        }


def _number(value: Any) -> float | None:  # noqa: ANN401 - a NumPy number or None
    return None if value is None else float(value)


def _shares(part: NDArray[np.int64], whole: NDArray[np.int64]) -> list[float | None]:
    return [float(p / w) if w else None for p, w in zip(part, whole, strict=True)]
