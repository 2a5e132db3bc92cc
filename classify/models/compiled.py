"""Fast exact inference for the estimators that have it."""

from __future__ import annotations

from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from classify.models.forest import CompiledForest
from classify.models.kernel_svm import CompiledSvm


class Compiled(Protocol):
    """A fitted estimator in a faster form. Thread-safe; runs without the GIL in the caller's thread."""

    def scores(self, features: NDArray[np.float32]) -> NDArray[np.float64]:
        """Scores (n, k) from features (n, f), as the estimator gives them; the label is the first of the highest."""

    def predict_index(self, features: NDArray[np.float32]) -> NDArray[np.intp]:
        """Index of the class of each pixel, (n,), as the estimator's `predict` gives it; quicker than `scores`."""


def compile_estimator(estimator: Any) -> Compiled | None:  # noqa: ANN401 - any scikit-learn estimator
    """The faster form of a fitted estimator, or None: then scikit-learn is asked, as it would be here."""
    return CompiledForest.from_sklearn(estimator) or CompiledSvm.from_sklearn(estimator)
