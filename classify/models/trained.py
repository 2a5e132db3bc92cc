"""A fitted model with its card: what it needs, what it was made from, how it did on held-out polygons."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from classify.features.recipe import Recipe
from classify.models.compiled import Compiled, compile_estimator
from classify.models.kinds import Scorer, kind_of, scorer, to_probabilities
from classify.models.reach import Reach

# Rows scored at a time: bounds the memory of float64 scores whatever the caller hands over.
_ROWS = 65_536


@dataclass(frozen=True, eq=False)
class TrainedModel:
    """estimator: fitted scikit-learn estimator. card: content of model.json. recipe: features, in order. reach: what
    the training data cover, or None where that could not be measured."""

    estimator: Any
    card: Mapping[str, Any]
    recipe: Recipe
    reach: Reach | None = None

    @property
    def class_codes(self) -> NDArray[np.uint8]:
        """Codes the model can give, ascending, uint8 (k,)."""
        return np.asarray(self.estimator.classes_, dtype=np.uint8)

    @property
    def class_names(self) -> tuple[str, ...]:
        """Names in the order of `class_codes`."""
        names = {entry["code"]: entry["name"] for entry in self.card["classes"]}
        return tuple(names[int(code)] for code in self.class_codes)

    @cached_property
    def _compiled(self) -> Compiled | None:
        return compile_estimator(self.estimator)

    @cached_property
    def _scorer(self) -> Scorer:
        return self._compiled.scores if self._compiled else scorer(self.estimator)

    def predict(self, features: NDArray[np.float32]) -> NDArray[np.uint8]:
        """Class code of each pixel, uint8 (n,), from features (n, f); 0 where a feature is not finite.

        The same labels as `predict_both`, sooner.
        """
        if self._compiled is None:
            return self.predict_both(features)[0]
        codes = np.zeros(len(features), dtype=np.uint8)
        for start in range(0, len(features), _ROWS):
            part = features[start : start + _ROWS]
            valid = np.flatnonzero(np.isfinite(part).all(axis=1))
            if len(valid):
                codes[start + valid] = self.class_codes[self._compiled.predict_index(part[valid])]
        return codes

    def probabilities(self, features: NDArray[np.float32]) -> NDArray[np.float32]:
        """Probabilities, float32 (n, k) in the order of `class_codes`; 0 where a feature is not finite.

        Calibrated on held-out polygons when the card says so; the highest is always that of the predicted class.
        """
        return self.predict_both(features)[1]

    def predict_both(self, features: NDArray[np.float32]) -> tuple[NDArray[np.uint8], NDArray[np.float32]]:
        """Labels and probabilities from one pass over features (n, f)."""
        count = len(features)
        codes = np.zeros(count, dtype=np.uint8)
        probabilities = np.zeros((count, len(self.class_codes)), dtype=np.float32)
        kind, temperature = kind_of(self.estimator), float(self.card["calibration"]["temperature"])
        for start in range(0, count, _ROWS):
            part = features[start : start + _ROWS]
            valid = np.flatnonzero(np.isfinite(part).all(axis=1))
            if not len(valid):
                continue
            scores = self._scorer(np.ascontiguousarray(part[valid], dtype=np.float32))
            codes[start + valid] = self.class_codes[np.argmax(scores, axis=1)]
            probabilities[start + valid] = to_probabilities(scores, kind, temperature)
        return codes, probabilities
