"""Fit the model of a project: check, choose settings, screen on held-out polygons, calibrate, measure reach, fit."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from classify.errors import TrainingError, raise_if_errors
from classify.features.recipe import Recipe
from classify.models.calibrate import calibrate
from classify.models.card import describe
from classify.models.checks import check_classes
from classify.models.folds import kept_whole
from classify.models.importance import Importance, feature_groups, measure_importance
from classify.models.kinds import make_estimator, without_workers
from classify.models.reach import fit_reach
from classify.models.screening import Screening
from classify.models.trained import TrainedModel
from classify.models.tuning import TUNING_PIXELS, Choice, choose, draw_settings, load_space
from classify.models.validate import Maker, ScreenOptions, screen
from classify.progress import SILENT, Progress
from classify.settings import Project
from classify.settings.model import ModelKind
from classify.training.dataset import TrainingSet
from classify.training.draws import even_draw

# Trees beyond these change a screening accuracy by less than its spread.
_SCREENING_TREES, _IMPORTANCE_TREES, _IMPORTANCE_PIXELS = 100, 60, 6_000


@dataclass(frozen=True, eq=False)
class _Plan:
    """What is fixed before anything is fitted."""

    training: TrainingSet
    project: Project
    groups: NDArray[np.int32]
    options: ScreenOptions
    progress: Progress

    def maker(self, kind: ModelKind, params: dict[str, Any], trees: int | None = None) -> Maker:
        """How to make an estimator of the chosen kind, with fewer trees where `trees` says so."""
        settings = dict(params)
        if kind == "random forest":
            settings["n_estimators"] = min(trees or self.project.model.trees, self.project.model.trees)
        width = len(self.training.feature_names)
        return lambda seed: make_estimator(kind, settings, features=width, seed=seed)


def fit_model(  # noqa: PLR0917 - a fixed contract
    training: TrainingSet,
    project: Project,
    recipe: Recipe,
    seed: int | None = None,
    jobs: int = 1,
    progress: Progress = SILENT,
) -> TrainedModel:
    """Choose, screen, calibrate and fit; `seed` None means the project's. The same model whatever `jobs`.

    Raises TrainingError listing every class that cannot be learnt.
    """
    seed = project.project.seed if seed is None else seed
    problems = check_classes(training, project)
    raise_if_errors(problems, TrainingError)
    plan = _plan(training, project, seed, jobs, progress)
    choice = _choose(plan)
    kind, params = (choice.chosen.kind, choice.chosen.params) if choice else (project.model.kind, {})
    screening = _screen(plan, plan.maker(kind, params, _SCREENING_TREES), choice)
    calibration = calibrate(screening, training.codes, training.polygon, kind)
    importance = _importance(plan, plan.maker(kind, params, _IMPORTANCE_TREES), recipe)
    reach = fit_reach(training, seed=seed, groups=plan.groups)
    fitted_on = _thinned(training, kind, project, seed)
    progress.note(f"Fitting the {kind} on {len(fitted_on.codes)} pixels")
    estimator = plan.maker(kind, params)(seed)
    if kind == "random forest":
        estimator.set_params(n_jobs=jobs)
    estimator = without_workers(estimator.fit(fitted_on.features, fitted_on.codes))
    card = describe(training, project, recipe, kind, seed) | {
        "settings": {"params": params, "trees": project.model.trees, "pixels_fitted": len(fitted_on.codes)},
        "screening": screening.to_json(),
        "calibration": calibration.to_json(),
        "tuning": choice.to_json() if choice else None,
        "importance": importance.to_json() if importance else None,
        "reach": reach.to_json() if reach else None,
        "warnings": [problem.what for problem in (*training.problems, *problems)],
    }
    return TrainedModel(estimator, card, recipe, reach)


def _plan(training: TrainingSet, project: Project, seed: int, jobs: int, progress: Progress) -> _Plan:
    settings = project.model
    groups, words = kept_whole(training, settings.block_m)
    options = ScreenOptions(folds=settings.folds, repeats=settings.repeats, seed=seed, jobs=jobs, kept_whole=words)
    return _Plan(training, project, groups, options, progress)


def _choose(plan: _Plan) -> Choice | None:
    settings = plan.project.model
    kinds = tuple(dict.fromkeys((settings.kind, *settings.compare)))
    if not settings.tune and len(kinds) == 1:
        return None
    space = load_space()
    draws = settings.tuning_draws if settings.tune else 1
    wanted = [(kind, params) for kind in kinds for params in draw_settings(kind, draws, plan.options.seed, space)]
    options = replace(plan.options, most_pixels=TUNING_PIXELS)
    return choose(plan.training, wanted, options, groups=plan.groups, progress=plan.progress)


def _screen(plan: _Plan, make: Maker, choice: Choice | None) -> Screening:
    # Dealt by another seed than the folds on which settings were chosen; the polygons are still the same ones.
    options = replace(plan.options, seed=plan.options.seed + 1)
    found = screen(plan.training, make, options, groups=plan.groups, progress=plan.progress)
    if choice is None:
        return found
    note = "Settings were chosen on the same polygons, dealt otherwise: this screening accuracy is a little too good."
    return replace(found, notes=(*found.notes, note))


def _importance(plan: _Plan, make: Maker, recipe: Recipe) -> Importance | None:
    if not plan.project.model.importance:
        return None
    options = replace(plan.options, most_pixels=_IMPORTANCE_PIXELS)
    groups = feature_groups(recipe, plan.training)
    return measure_importance(plan.training, make, groups, options, kept_whole=plan.groups, progress=plan.progress)


def _thinned(training: TrainingSet, kind: ModelKind, project: Project, seed: int) -> TrainingSet:
    """A kernel machine's time grows with the square of its pixels: it is fitted on at most `svm_pixels` of them."""
    if kind != "support vector machine":
        return training
    return training.subset(even_draw(training.polygon, project.model.svm_pixels, seed))
