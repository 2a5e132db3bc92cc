"""The card of a model: what it needs and what it was made from, as plain data for model.json."""

from __future__ import annotations

import platform
from typing import Any

import numpy as np
import sklearn
import skops

from classify import __version__
from classify.features.recipe import Recipe
from classify.settings import Project
from classify.settings.model import ModelKind
from classify.training.dataset import TrainingSet

SCHEMA = 1
# Quantiles of each feature, to notice a scene that is not like the training one.
_LEVELS = (0.01, 0.25, 0.5, 0.75, 0.99)


def describe(training: TrainingSet, project: Project, recipe: Recipe, kind: ModelKind, seed: int) -> dict[str, Any]:
    """The part of a card that is known without fitting."""
    present = set(training.class_codes.tolist())
    classes = sorted((c for c in project.classes if c.code in present), key=lambda c: c.code)
    quantiles = np.quantile(training.features.astype(np.float64), _LEVELS, axis=0).T.tolist()
    return {
        "schema": SCHEMA,
        "kind": kind,
        "needs": list(recipe.needs),
        "features": list(recipe.names),
        "recipe": recipe.to_json(),
        "classes": [{"code": c.code, "name": c.name, "colour": c.colour} for c in classes],
        "seed": seed,
        "versions": {
            "landassay": __version__,
            "python": platform.python_version(),
            "scikit-learn": sklearn.__version__,
            "numpy": np.__version__,
            "skops": skops.__version__,
        },
        "training": {
            "data_sha256": training.digest(),
            "pixels": len(training.codes),
            "polygons": len(np.unique(training.polygon)),
            "quantiles": {"levels": list(_LEVELS), "values": dict(zip(recipe.names, quantiles, strict=True))},
        },
    }
