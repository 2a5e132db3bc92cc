"""The review of the training data with what models say about it, before any model is kept."""

from __future__ import annotations

from dataclasses import replace

from classify.models.checks import check_classes
from classify.models.folds import kept_whole
from classify.models.kinds import make_estimator
from classify.models.learning import learning_curve
from classify.models.validate import ScreenOptions, screen
from classify.progress import SILENT, Progress
from classify.settings import Project
from classify.training.dataset import TrainingSet
from classify.training.review import Evidence, TrainingReview, review_training

# A small forest on a few pixels of each polygon is enough to see what a polygon looks like: so many trees at most.
_TREES, _PIXELS = 40, 3_000


def inspect_training(
    training: TrainingSet, project: Project, jobs: int = 1, progress: Progress = SILENT
) -> TrainingReview:
    """Review polygons with grouped cross-validation and a learning curve of a small forest, whatever model is chosen.

    The forest has as many trees as the project's, 40 at most. Nothing is refused here: what cannot be screened is said
    in `problems`. Seeded by the project.
    """
    seed, trees = project.project.seed, min(_TREES, project.model.trees)
    problems = check_classes(training, project)
    if any(problem.severity == "error" for problem in problems):
        return review_training(training, project, Evidence.none(len(training.codes)), problems, seed)

    def forest(forest_seed: int) -> object:
        return make_estimator(
            "random forest", {"n_estimators": trees}, features=len(training.feature_names), seed=forest_seed
        )

    groups, words = kept_whole(training, project.model.block_m)
    options = ScreenOptions(seed=seed, jobs=jobs, most_pixels=_PIXELS, kept_whole=words)
    screening = screen(training, forest, options, groups=groups, progress=progress)
    curve = learning_curve(training, forest, replace(options, repeats=4), groups=groups, progress=progress)
    names = {c.code: c.name for c in project.classes}
    evidence = Evidence(screening.rounds, screening.to_json(), curve.to_json(names))
    return review_training(training, project, evidence, problems, seed)
