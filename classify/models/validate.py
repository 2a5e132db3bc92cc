"""Screening: repeated cross-validation that keeps polygons or spatial blocks whole."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sklearn.model_selection import StratifiedKFold

from classify.models.folds import Folds, group_folds
from classify.models.kinds import kind_of, scorer, without_workers
from classify.models.screening import Screening
from classify.progress import SILENT, Progress
from classify.threads import stoppable_pool
from classify.training.dataset import TrainingSet
from classify.training.draws import even_draw

# seed -> unfitted estimator
Maker = Callable[[int], Any]


@dataclass(frozen=True)
class ScreenOptions:
    """folds: at most so many. repeats: rounds, each dealt anew. most_pixels: on the training side of a fit, drawn
    evenly over polygons. leaky: also hold out pixels instead of polygons once, to show what leakage would claim.
    kept_whole: "polygons", or words that say which blocks `groups` are."""

    folds: int = 5
    repeats: int = 3
    most_pixels: int = 30_000
    leaky: bool = True
    seed: int = 0
    jobs: int = 1
    kept_whole: str = "polygons"


def screen(
    training: TrainingSet,
    make: Maker,
    options: ScreenOptions = ScreenOptions(),
    *,
    groups: NDArray[np.int32] | None = None,
    progress: Progress = SILENT,
) -> Screening:
    """Hold out whole groups (polygons unless `groups` (n,) says otherwise) in turn and count how they are labelled.

    Classes with a single group are never held out and are listed as unscreened. The same for the same seed, whatever
    the number of jobs.
    """
    groups = training.polygon if groups is None else groups
    classes = training.class_codes
    rounds = [group_folds(training.codes, groups, options.folds, options.seed + r) for r in range(options.repeats)]
    leaky = _leaky_folds(training.codes, options) if options.leaky else None
    scores = held_out_scores(training, make, [*rounds, *([leaky] if leaky else [])], options, progress)
    found = [_accuracies(training.codes, score, classes) for score in scores]
    labels = np.stack([held_out_labels(score, classes) for score in scores[: options.repeats]])
    return Screening(
        class_codes=classes,
        counts=_counts(training.codes, labels[0], classes),
        repeats=np.array([pair for pair in found[: options.repeats] if pair], dtype=np.float64).reshape(-1, 2),
        rounds=labels,
        scores=scores[0],
        folds=rounds[0].count,
        groups=options.kept_whole,
        unscreened=rounds[0].alone,
        leaky=found[-1][0] if leaky and found[-1] else None,
    )


def held_out_scores(
    training: TrainingSet, make: Maker, rounds: Sequence[Folds], options: ScreenOptions, progress: Progress = SILENT
) -> list[NDArray[np.float64]]:
    """For each round float64 (n, k): scores of each pixel by the model that did not see its group; NaN if none did not.

    Fits run side by side in threads: forests and machines let go of the interpreter lock while they work.
    """
    classes = training.class_codes
    results = [np.full((len(training.codes), len(classes)), np.nan) for _ in rounds]
    tasks = [
        (result, folds, number) for result, folds in zip(results, rounds, strict=True) for number in range(folds.count)
    ]
    with progress.task("Screening on held-out polygons", len(tasks)) as task, stoppable_pool(options.jobs) as pool:

        def run(job: tuple[NDArray[np.float64], Folds, int]) -> None:
            result, folds, number = job
            held = folds.held_out(number)
            if held.any() and not held.all():
                result[held] = scores_of_held(training, held, make, options)
            task.advance()

        list(pool.map(run, tasks))
    return results


def scores_of_held(
    training: TrainingSet, held: NDArray[np.bool_], make: Maker, options: ScreenOptions
) -> NDArray[np.float64]:
    """Scores float64 (m, k) of the m held-out pixels by a model of the others, in the order of the set's classes."""
    return scores_in_order(fit_side(training, ~held, make, options), training.features[held], training.class_codes)


def scores_in_order(
    estimator: Any,  # noqa: ANN401 - any scikit-learn estimator
    features: NDArray[np.float32],
    classes: NDArray[np.uint8],
) -> NDArray[np.float64]:
    """Scores float64 (m, k), all finite, of features (m, f) in the order of `classes` (k,), which may be more than the
    estimator knows: one missing on its training side (its blocks all lie in one fold) is never the highest."""
    score = scorer(estimator)(features)
    least = 0.0 if kind_of(estimator) == "random forest" else float(score.min()) - 5
    part = np.full((len(score), len(classes)), least)
    part[:, np.searchsorted(classes, estimator.classes_)] = score
    return part


def held_out_rows(scores: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Mask (n,) of the pixels that were held out, by their scores (n, k): rows of NaN were not."""
    mask: NDArray[np.bool_] = ~np.isnan(scores[:, 0])
    return mask


def fit_side(training: TrainingSet, side: NDArray[np.bool_], make: Maker, options: ScreenOptions) -> Any:  # noqa: ANN401
    """A model of the pixels in `side` (mask (n,)), thinned evenly over polygons to `options.most_pixels`."""
    chosen = np.flatnonzero(side)
    chosen = chosen[even_draw(training.polygon[chosen], options.most_pixels, options.seed)]
    return without_workers(make(options.seed).fit(training.features[chosen], training.codes[chosen]))


def _leaky_folds(codes: NDArray[np.uint8], options: ScreenOptions) -> Folds | None:
    """A split of pixels that ignores polygons: what leakage would claim. None if a class has too few pixels."""
    _, size = np.unique(codes, return_counts=True)
    if size.min() < options.folds:
        return None
    splitter = StratifiedKFold(options.folds, shuffle=True, random_state=options.seed)
    fold = np.empty(len(codes), dtype=np.int16)
    for number, (_, held) in enumerate(splitter.split(codes, codes)):
        fold[held] = number
    # One part is enough to show it: every other pixel is always learnt from.
    fold[fold > 0] = -1
    return Folds(fold, 1, ())


def held_out_labels(scores: NDArray[np.float64], classes: NDArray[np.uint8]) -> NDArray[np.uint8]:
    """uint8 (n,), the class of the highest score, 0 where never held out."""
    held = held_out_rows(scores)
    labels = np.zeros(len(scores), dtype=np.uint8)
    labels[held] = classes[np.argmax(scores[held], axis=1)]
    return labels


def _counts(codes: NDArray[np.uint8], labels: NDArray[np.uint8], classes: NDArray[np.uint8]) -> NDArray[np.int64]:
    held = labels > 0
    counts = np.zeros((len(classes), len(classes)), dtype=np.int64)
    np.add.at(counts, (np.searchsorted(classes, codes[held]), np.searchsorted(classes, labels[held])), 1)
    return counts


def _accuracies(
    codes: NDArray[np.uint8], scores: NDArray[np.float64], classes: NDArray[np.uint8]
) -> tuple[float, float] | None:
    """Overall share right and mean share right per class, or None if nothing was held out."""
    counts = _counts(codes, held_out_labels(scores, classes), classes)
    held = counts.sum(axis=1)
    if not held.sum():
        return None
    right = np.diag(counts)
    return float(right.sum() / held.sum()), float(np.mean(right[held > 0] / held[held > 0]))


def balanced_by_fold(training: TrainingSet, held: NDArray[np.bool_], scores: NDArray[np.float64]) -> float:
    """Mean share right per class among held-out pixels, from their scores (m, k); NaN without any."""
    found = _accuracies(training.codes[held], scores, training.class_codes)
    return float("nan") if found is None else found[1]
