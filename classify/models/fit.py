"""Fit the model of a project: check the training set, screen on held-out polygons, calibrate, fit, write the card."""

from __future__ import annotations

import platform
from typing import Any

import numpy as np
import sklearn
import skops

from classify import __version__
from classify.errors import Problem, TrainingError, raise_if_errors
from classify.features.recipe import Recipe
from classify.models.calibrate import calibrate
from classify.models.kinds import make_estimator, without_workers
from classify.models.trained import TrainedModel
from classify.models.validate import ScreenOptions, screen
from classify.progress import SILENT, Progress
from classify.settings import Project
from classify.training.dataset import TrainingSet
from classify.training.draws import even_draw

SCHEMA = 1
# A class needs a few pixels for a tree or a margin to stand on; below this nothing is learnt but chance.
MIN_PIXELS = 5
# Quantiles of each feature kept in the card, to notice a scene that is not like the training one.
_LEVELS = (0.01, 0.25, 0.5, 0.75, 0.99)


def fit_model(  # noqa: PLR0917 - a fixed contract
    training: TrainingSet,
    project: Project,
    recipe: Recipe,
    seed: int | None = None,
    jobs: int = 1,
    progress: Progress = SILENT,
) -> TrainedModel:
    """Screen, calibrate and fit; `seed` None means the project's. The same seed gives the same model whatever `jobs`.

    Raises TrainingError listing every class that cannot be learnt.
    """
    seed = project.project.seed if seed is None else seed
    problems = check_classes(training, project)
    raise_if_errors(problems, TrainingError)
    kind, params = project.model.kind, _params(project)
    options = ScreenOptions(seed=seed, jobs=jobs)
    width = len(recipe.names)
    screening = screen(
        training, lambda s: make_estimator(kind, params, features=width, seed=s), options, progress=progress
    )
    calibration = calibrate(screening, training.codes, training.polygon, kind)
    chosen = _thinned(training, project, seed)
    progress.note(f"Fitting the {kind} on {len(chosen.codes)} pixels")
    estimator = without_workers(
        make_estimator(kind, params, features=width, seed=seed, jobs=jobs).fit(chosen.features, chosen.codes)
    )
    card = _card(training, project, recipe, seed) | {
        "settings": {"params": params, "pixels_fitted": len(chosen.codes)},
        "screening": screening.to_json(),
        "calibration": calibration.to_json(),
        "warnings": [problem.what for problem in problems],
    }
    return TrainedModel(estimator, card, recipe)


def check_classes(training: TrainingSet, project: Project) -> list[Problem]:
    """Findings on whether every class can be learnt and screened; errors for those that cannot be learnt."""
    names = {c.code: c.name for c in project.classes}
    codes, pixels = np.unique(training.codes, return_counts=True)
    found = []
    if len(codes) < 2:
        only = ", ".join(names.get(int(code), str(code)) for code in codes) or "no class"
        found.append(
            Problem(
                f"the training pixels hold one class only ({only}): there is nothing to tell apart",
                "training polygons",
                "add polygons of another class",
            )
        )
    for code, count in zip(codes, pixels, strict=True):
        name = names.get(int(code), str(code))
        polygons = len(np.unique(training.polygon[training.codes == code]))
        if count < MIN_PIXELS:
            found.append(
                Problem(
                    f"class {name!r} has {count} usable pixels; at least {MIN_PIXELS} are needed",
                    "training polygons",
                    "draw more or larger polygons of it",
                )
            )
        elif polygons < 2:
            found.append(
                Problem(
                    f"class {name!r} has one usable polygon: it can be mapped but not screened",
                    "training polygons",
                    "draw a second polygon of it, some way off",
                    "warning",
                )
            )
    missing = [c.name for c in project.classes if c.code not in set(codes.tolist())]
    if missing:
        listed = ", ".join(repr(name) for name in missing)
        found.append(
            Problem(
                f"no usable training pixel for {listed}: never mapped",
                "training polygons",
                "draw polygons of it, or drop the class",
                "warning",
            )
        )
    return found


def _params(project: Project) -> dict[str, Any]:
    return {"n_estimators": project.model.trees} if project.model.kind == "random forest" else {}


def _thinned(training: TrainingSet, project: Project, seed: int) -> TrainingSet:
    """A kernel machine's time grows with the square of its pixels: it is fitted on at most `svm_pixels` of them."""
    if project.model.kind != "support vector machine":
        return training
    return training.subset(even_draw(training.polygon, project.model.svm_pixels, seed))


def _card(training: TrainingSet, project: Project, recipe: Recipe, seed: int) -> dict[str, Any]:
    present = set(training.class_codes.tolist())
    classes = sorted((c for c in project.classes if c.code in present), key=lambda c: c.code)
    quantiles = np.quantile(training.features.astype(np.float64), _LEVELS, axis=0).T.tolist()
    return {
        "schema": SCHEMA,
        "kind": project.model.kind,
        "needs": list(recipe.needs),
        "features": list(recipe.names),
        "recipe": recipe.to_json(),
        "classes": [{"code": c.code, "name": c.name, "colour": c.colour} for c in classes],
        "seed": seed,
        "versions": {
            "landassay": __version__, "python": platform.python_version(), "scikit-learn": sklearn.__version__,
            "numpy": np.__version__, "skops": skops.__version__,
        },
        "training": {
            "data_sha256": training.digest(),
            "pixels": len(training.codes),
            "polygons": len(np.unique(training.polygon)),
            "quantiles": {"levels": list(_LEVELS), "values": dict(zip(recipe.names, quantiles, strict=True))},
        },
    }  # fmt: skip
