"""The kinds of model behind one small interface: make an unfitted estimator, score pixels with a fitted one.

Scores are float64 (n, k) in the order of the estimator's classes; the label is always the class of the highest score,
the first of equals. `compiled` has a faster form of the same scores for whole scenes.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any, get_args

import numpy as np
from numpy.typing import NDArray
from sklearn.ensemble import RandomForestClassifier
from sklearn.pipeline import Pipeline
from sklearn.preprocessing import StandardScaler
from sklearn.svm import SVC, LinearSVC

from classify.settings.model import ModelKind

Scores = NDArray[np.float64]
Scorer = Callable[[NDArray[np.float32]], Scores]

# From the simplest, for the one-standard-error rule: a plane per class, many small trees, a kernel on every pixel.
SIMPLEST_FIRST: tuple[ModelKind, ...] = ("linear support vector machine", "random forest", "support vector machine")
assert set(SIMPLEST_FIRST) == set(get_args(ModelKind))

_DEFAULTS: dict[ModelKind, dict[str, Any]] = {
    "random forest": {"n_estimators": 300, "max_features": "sqrt", "min_samples_leaf": 1},
    # Four times the customary 1 / features: features of one scene repeat each other, so distances come out long.
    # Chosen by cross-validation inside the training split of a public data set of Landsat pixels.
    "support vector machine": {"C": 10.0, "gamma_times_features": 4.0},
    "linear support vector machine": {"C": 1.0},
}


def make_estimator(kind: ModelKind, params: Mapping[str, Any], *, features: int, seed: int, jobs: int = 1) -> Any:  # noqa: ANN401
    """An unfitted scikit-learn estimator for a number of features, class weights balanced.

    `params` overrides the defaults of the kind; a kernel's width is given as `gamma_times_features`.
    """
    settings = {**_DEFAULTS[kind], **params}
    if kind == "random forest":
        return RandomForestClassifier(**settings, class_weight="balanced", random_state=seed, n_jobs=jobs)
    if kind == "support vector machine":
        # Ties of one-against-one votes are broken by the decision values, so that labels follow from scores.
        settings["gamma"] = settings.pop("gamma_times_features") / features
        machine: Any = SVC(**settings, class_weight="balanced", break_ties=True, cache_size=500)
    else:
        machine = LinearSVC(**settings, class_weight="balanced", dual=False, random_state=seed, max_iter=10_000)
    return Pipeline([("scale", StandardScaler()), ("machine", machine)])


def kind_of(estimator: Any) -> ModelKind:  # noqa: ANN401 - any scikit-learn estimator
    """Which kind a fitted or unfitted estimator is."""
    if isinstance(estimator, RandomForestClassifier):
        return "random forest"
    return "support vector machine" if isinstance(estimator[-1], SVC) else "linear support vector machine"


def without_workers(estimator: Any) -> Any:  # noqa: ANN401
    """The same estimator set to one worker: its sums are made in one order, and its file depends on no machine."""
    if isinstance(estimator, RandomForestClassifier):
        estimator.set_params(n_jobs=None)
    return estimator


def scorer(estimator: Any) -> Scorer:  # noqa: ANN401
    """The function that scores features (n, f) with a fitted estimator."""
    if isinstance(estimator, RandomForestClassifier):
        return lambda features: np.asarray(estimator.predict_proba(features), dtype=np.float64)
    return lambda features: _both_sides(np.asarray(estimator.decision_function(features), dtype=np.float64))


def to_probabilities(scores: Scores, kind: ModelKind, temperature: float) -> Scores:
    """Probabilities (n, k) from scores: a softmax at a temperature (Guo et al. 2017, ICML) fitted on held-out polygons.

    Forest scores are shares of trees: their logarithm is taken, with half a vote in three hundred added so that an
    absent vote is not read as certainty. The order of the classes, and so the label, never changes.
    """
    logits = np.log(scores + 1 / 600) if kind == "random forest" else scores
    logits = (logits - logits.max(axis=1, keepdims=True)) / temperature
    weights = np.exp(logits)
    result: Scores = weights / weights.sum(axis=1, keepdims=True)
    return result


def _both_sides(decision: Scores) -> Scores:
    # With two classes scikit-learn gives one number, positive for the second class.
    return np.stack([-decision, decision], axis=1) if decision.ndim == 1 else decision
