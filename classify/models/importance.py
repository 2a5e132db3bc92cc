"""What drives a model: how much worse held-out polygons are labelled when a feature, or a group of them, is scrambled.

Permutation importance (Breiman 2001; Fisher, Rudin & Dominici 2019 for any model), always on polygons that the model
has not seen. Features of one scene repeat each other, so a feature may look idle because another stands in for it:
groups are scrambled together, and dropped together, to show that.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from classify.features.recipe import Recipe
from classify.models.folds import group_folds
from classify.models.validate import Maker, ScreenOptions, balanced_by_fold, fit_side, scores_in_order
from classify.progress import SILENT, Progress
from classify.threads import stoppable_pool
from classify.training.dataset import TrainingSet

_ROUNDS = 3
# Limits of the kinds of bands in nm, common practice.
_KINDS_NM = ((700, "visible bands"), (780, "red-edge bands"), (1300, "near-infrared bands"), (3000, "short-wave bands"))

_STEP_KINDS = {
    "FormulaStep": "indices and formulas",
    "ComponentStep": "components",
    "TextureStep": "texture",
    "TerrainStep": "terrain",
    "AbsorptionStep": "absorption features",
    "RedEdgeStep": "red-edge features",
}


@dataclass(frozen=True, eq=False)
class Importance:
    """Loss of balanced screening accuracy, by feature and by group. mean, spread: over folds and scramblings.

    features, groups: name -> (mean, standard deviation). dropped: group -> balanced accuracy of a model without it,
    None where nothing would be left. members: group -> names of its features. base: balanced accuracy with all.
    kept_whole: what was held out, in the words of ScreenOptions.
    """

    base: float
    features: Mapping[str, tuple[float, float]]
    groups: Mapping[str, tuple[float, float]]
    dropped: Mapping[str, float | None]
    members: Mapping[str, tuple[str, ...]]
    kept_whole: str = "polygons"

    def to_json(self) -> dict[str, Any]:
        """Plain data for model.json, the most important first."""

        def rows(of: Mapping[str, tuple[float, float]]) -> list[dict[str, Any]]:
            ordered = sorted(of.items(), key=lambda item: (-item[1][0], item[0]))
            return [{"name": name, "loss": mean, "spread": spread} for name, (mean, spread) in ordered]

        return {
            "measure": "loss of balanced screening accuracy on held-out polygons",
            "kept_whole": self.kept_whole,
            "balanced_screening_accuracy": self.base,
            "features": rows(self.features),
            "groups": [
                {**row, "features": list(self.members[row["name"]]), "without_it": self.dropped.get(row["name"])}
                for row in rows(self.groups)
            ],
        }


def feature_groups(recipe: Recipe, training: TrainingSet) -> dict[str, tuple[str, ...]]:
    """Groups that answer a question about features: bands of a kind, what is computed, and dates if there are several.

    A feature may belong to a group of its kind and to one of its date.
    """
    computed = {name: _STEP_KINDS.get(type(step).__name__, "other") for step in recipe.steps for name in step.outputs}
    wavelengths = dict(zip(training.roles, training.wavelengths_nm, strict=True))
    groups: dict[str, list[str]] = {}
    for name in recipe.names:
        kind = computed[name] if name in computed else _band_kind(wavelengths.get(name.partition("@")[0]))
        groups.setdefault(kind, []).append(name)
    dates = {name.partition("@")[2] or "main date" for name in recipe.names}
    if len(dates) > 1:
        for name in recipe.names:
            groups.setdefault(f"date {name.partition('@')[2] or 'main'}", []).append(name)
    return {group: tuple(members) for group, members in groups.items()}


def measure_importance(
    training: TrainingSet,
    make: Maker,
    groups: Mapping[str, tuple[str, ...]],
    options: ScreenOptions,
    *,
    kept_whole: NDArray[np.int32] | None = None,
    progress: Progress = SILENT,
) -> Importance | None:
    """Scramble and drop `groups` of features on what is held out: polygons, or the blocks of `kept_whole` (n,).

    None if nothing can be held out. Seeded, the same whatever the jobs.
    """
    kept_whole = training.polygon if kept_whole is None else kept_whole
    folds = group_folds(training.codes, kept_whole, options.folds, options.seed)
    names = training.feature_names
    columns = [[place] for place in range(len(names))] + [[names.index(name) for name in m] for m in groups.values()]
    held = [folds.held_out(number) for number in range(folds.count)]
    held = [mask for mask in held if mask.any() and not mask.all()]
    if not held:
        return None
    trial = _Trial(training, make, options)
    droppable = [group for group, members in groups.items() if len(members) < len(names)]
    total = len(held) * (1 + len(droppable))
    with progress.task("What drives the model", total) as task, stoppable_pool(options.jobs) as pool:

        def scramble(number: int) -> tuple[float, NDArray[np.float64]]:
            result = trial.losses(held[number], columns, number)
            task.advance()
            return result

        def drop(job: tuple[str, int]) -> float:
            result = trial.without(held[job[1]], groups[job[0]])
            task.advance()
            return result

        scrambled = list(pool.map(scramble, range(len(held))))
        left_out = list(pool.map(drop, [(group, number) for group in droppable for number in range(len(held))]))
    losses = np.concatenate([loss for _, loss in scrambled], axis=0)
    pairs = list(zip(losses.mean(axis=0).tolist(), losses.std(axis=0, ddof=1).tolist(), strict=True))
    means = np.reshape(left_out, (len(droppable), len(held))).mean(axis=1)
    return Importance(
        base=float(np.mean([base for base, _ in scrambled])),
        features=dict(zip(names, pairs[: len(names)], strict=True)),
        groups=dict(zip(groups, pairs[len(names) :], strict=True)),
        dropped=dict(zip(droppable, means.tolist(), strict=True)),
        members=dict(groups),
        kept_whole=options.kept_whole,
    )


@dataclass(frozen=True, eq=False)
class _Trial:
    """One way of fitting, tried on held-out polygons."""

    training: TrainingSet
    make: Maker
    options: ScreenOptions

    def losses(
        self, held: NDArray[np.bool_], columns: list[list[int]], number: int
    ) -> tuple[float, NDArray[np.float64]]:
        """Balanced accuracy of held-out pixels, and what scrambling each set of columns takes, float64 (rounds, c)."""
        estimator = fit_side(self.training, ~held, self.make, self.options)
        features = self.training.features[held]
        base = self._accuracy(estimator, features, held)
        losses = np.empty((_ROUNDS, len(columns)))
        for turn in range(_ROUNDS):
            order = np.random.default_rng([self.options.seed, number, turn]).permutation(len(features))
            for place, chosen in enumerate(columns):
                scrambled = features.copy()
                scrambled[:, chosen] = features[order][:, chosen]
                losses[turn, place] = base - self._accuracy(estimator, scrambled, held)
        return base, losses

    def without(self, held: NDArray[np.bool_], members: tuple[str, ...]) -> float:
        """Balanced accuracy of held-out pixels by a model that never had these features."""
        kept = [place for place, name in enumerate(self.training.feature_names) if name not in members]
        fewer = self.training.with_features(kept)
        estimator = fit_side(fewer, ~held, self.make, self.options)
        return self._accuracy(estimator, fewer.features[held], held)

    def _accuracy(self, estimator: Any, features: NDArray[np.float32], held: NDArray[np.bool_]) -> float:  # noqa: ANN401
        scores = scores_in_order(estimator, features, self.training.class_codes)
        return balanced_by_fold(self.training, held, scores)


def _band_kind(wavelength_nm: float | None) -> str:
    if wavelength_nm is None or np.isnan(wavelength_nm):
        return "other layers"
    return next((kind for limit, kind in _KINDS_NM if wavelength_nm < limit), "thermal bands")
