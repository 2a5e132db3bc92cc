"""Would more polygons help? Screening accuracy by the number of polygons learnt from, per class, with its spread."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from classify.models.folds import group_folds
from classify.models.kinds import scorer, without_workers
from classify.models.validate import Maker, ScreenOptions
from classify.progress import SILENT, Progress
from classify.threads import stoppable_pool
from classify.training.dataset import TrainingSet
from classify.training.draws import even_draw

SHARES = (0.25, 0.4, 0.6, 0.8, 1.0)
# A class still gains if its accuracy rose by this much, and by more than its spread, over the last step.
_GAIN = 0.01


@dataclass(frozen=True, eq=False)
class LearningCurve:
    """class_codes: uint8 (k,). polygons: mean number learnt from, float64 (s, k), by share and class. right: share of
    held-out pixels labelled right, float64 (s, r, k), by share, repeat and class; NaN where not held out."""

    class_codes: NDArray[np.uint8]
    polygons: NDArray[np.float64]
    right: NDArray[np.float64]

    def to_json(self, names: dict[int, str]) -> dict[str, Any]:
        """Plain data for the review: mean with the 10th to 90th percentile over repeats."""
        classes, advice = [], []
        for k, code in enumerate(self.class_codes):
            points = [
                {"polygons": float(self.polygons[s, k]), **band}
                for s in range(len(SHARES))
                if (band := _band(self.right[s, :, k]))
            ]
            name = names.get(int(code), str(code))
            classes.append({"code": int(code), "name": name, "points": points})
            if len(points) == len(SHARES) and self._still_rising(k):
                advice.append(f"{name}: still rising with the number of polygons; draw more.")
        seen = np.isfinite(self.right)
        balanced = np.where(seen, self.right, 0).sum(axis=2) / np.where(seen.any(axis=2), seen.sum(axis=2), np.nan)
        overall = [
            {"share": share, "polygons": float(self.polygons[s].sum()), **band}
            for s, share in enumerate(SHARES)
            if (band := _band(balanced[s]))
        ]
        sentence = (
            f"More polygons would help {len(advice)} of {len(classes)} classes."
            if advice
            else "No class is still gaining from more polygons; other features or clearer polygons would help more."
        )
        return {"classes": classes, "overall": overall, "sentence": sentence, "advice": advice}

    def _still_rising(self, k: int) -> bool:
        before, last = self.right[-2, :, k], self.right[-1, :, k]
        gain = (last - before)[np.isfinite(last - before)]
        error = float(gain.std(ddof=1) / np.sqrt(len(gain))) if len(gain) > 1 else 0.0
        return bool(len(gain) and gain.mean() > max(_GAIN, error))


def learning_curve(
    training: TrainingSet,
    make: Maker,
    options: ScreenOptions,
    *,
    groups: NDArray[np.int32] | None = None,
    progress: Progress = SILENT,
) -> LearningCurve:
    """Learn from growing shares of each class's polygons and label those held out, always the same ones.

    Held out are whole polygons, or the groups of them that `groups` (n,) names.

    One fold is held out per repeat, dealt anew; the shares are nested, so that a curve compares like with like. Every
    class keeps at least one polygon. Seeded; the same whatever the number of jobs.
    """
    tasks = [(repeat, s) for repeat in range(options.repeats) for s in range(len(SHARES))]
    whole = training.polygon if groups is None else groups
    classes = training.class_codes
    polygons = np.zeros((len(SHARES), options.repeats, len(classes)))
    right = np.full((len(SHARES), options.repeats, len(classes)), np.nan)
    with progress.task("Learning curve over polygons", len(tasks)) as task, stoppable_pool(options.jobs) as pool:

        def run(job: tuple[int, int]) -> None:
            repeat, s = job
            folds = group_folds(training.codes, whole, options.folds, options.seed + repeat)
            held = folds.held_out(repeat % folds.count)
            kept, polygons[s, repeat] = _nested(training, ~held, SHARES[s], options.seed + repeat)
            right[s, repeat] = _right(training, make, options, kept, held)
            task.advance()

        list(pool.map(run, tasks))
    return LearningCurve(classes, polygons.mean(axis=1), right)


def _right(
    training: TrainingSet, make: Maker, options: ScreenOptions, kept: NDArray[np.bool_], held: NDArray[np.bool_]
) -> NDArray[np.float64]:
    """Share labelled right of each class's held-out pixels, float64 (k,), by a model of those kept."""
    classes = training.class_codes
    right = np.full(len(classes), np.nan)
    if not held.any():
        return right
    chosen = np.flatnonzero(kept)
    chosen = chosen[even_draw(training.polygon[chosen], options.most_pixels, options.seed)]
    estimator = without_workers(make(options.seed).fit(training.features[chosen], training.codes[chosen]))
    labels = estimator.classes_[np.argmax(scorer(estimator)(training.features[held]), axis=1)]
    for k, code in enumerate(classes):
        mine = training.codes[held] == code
        if mine.any():
            right[k] = np.mean(labels[mine] == code)
    return right


def _nested(
    training: TrainingSet, side: NDArray[np.bool_], share: float, seed: int
) -> tuple[NDArray[np.bool_], NDArray[np.float64]]:
    """Pixels of the first `share` of each class's polygons in a seeded order, and how many polygons that is."""
    keep = np.zeros(len(side), dtype=bool)
    counts = []
    for code in training.class_codes:
        numbers = np.unique(training.polygon[side & (training.codes == code)])
        order = np.random.default_rng([seed, int(code)]).permutation(numbers)
        most = max(1, round(share * len(order)))
        keep |= side & np.isin(training.polygon, order[:most])
        counts.append(float(min(most, len(order))))
    return keep, np.array(counts)


def _band(values: NDArray[np.float64]) -> dict[str, float] | None:
    held = values[np.isfinite(values)]
    if not len(held):
        return None
    low, high = np.percentile(held, [10, 90])
    return {"mean": float(held.mean()), "low": float(low), "high": float(high)}
