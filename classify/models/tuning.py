"""Choose kind and settings by a seeded random search that keeps polygons whole, and by the one-standard-error rule."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray
from pydantic import BaseModel, ConfigDict, TypeAdapter, ValidationError, model_validator

from classify.errors import Problem, SettingsError
from classify.models.folds import group_folds
from classify.models.kinds import SIMPLEST_FIRST, make_estimator
from classify.models.validate import ScreenOptions, balanced_by_fold, scores_of_held
from classify.progress import SILENT, Progress
from classify.settings import configs_folder
from classify.settings.model import ModelKind
from classify.settings.presets import read_toml
from classify.threads import stoppable_pool
from classify.training.dataset import TrainingSet

# Enough to rank settings; the chosen ones are then screened and fitted in full.
TUNING_TREES, TUNING_PIXELS = 100, 8_000


class _Range(BaseModel):
    """Where one setting is drawn from, and which end makes the model simpler."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    choose: list[float | int | str] | None = None
    lowest: float | None = None
    highest: float | None = None
    scale: Literal["even", "log"] = "even"
    simpler: Literal["low", "high"] = "low"

    @model_validator(mode="before")
    @classmethod
    def _from_and_to(cls, value: Any) -> Any:  # noqa: ANN401 - whatever the file holds
        names = {"from": "lowest", "to": "highest"}
        return {names.get(key, key): item for key, item in value.items()} if isinstance(value, dict) else value

    @model_validator(mode="after")
    def _one_way(self) -> _Range:
        ranged = self.lowest is not None and self.highest is not None and self.lowest < self.highest
        if bool(self.choose) == ranged or (self.scale == "log" and ranged and (self.lowest or 0) <= 0):
            raise ValueError("give either 'choose' or 'from' below 'to' (above zero for a log scale)")
        return self

    def draw(self, random: np.random.Generator) -> Any:  # noqa: ANN401 - number or text
        if self.choose:
            return self.choose[int(random.integers(len(self.choose)))]
        assert self.lowest is not None and self.highest is not None, self
        if self.scale == "log":
            return float(np.exp(random.uniform(np.log(self.lowest), np.log(self.highest))))
        return float(random.uniform(self.lowest, self.highest))


@dataclass(frozen=True, eq=False)
class Candidate:
    """One kind with its settings and how it did. by_fold: balanced accuracy of each fold, float64 (folds,)."""

    kind: ModelKind
    params: dict[str, Any]
    by_fold: NDArray[np.float64]

    @property
    def mean(self) -> float:
        """Mean over folds of the mean share right per class; NaN without a fold."""
        held = self.by_fold[np.isfinite(self.by_fold)]
        return float(held.mean()) if len(held) else float("nan")

    @property
    def error(self) -> float:
        """Standard error of that mean over folds."""
        held = self.by_fold[np.isfinite(self.by_fold)]
        return float(held.std(ddof=1) / np.sqrt(len(held))) if len(held) > 1 else 0.0


@dataclass(frozen=True, eq=False)
class Choice:
    """The candidate chosen, the best one, and all of them in the order tried."""

    chosen: Candidate
    best: Candidate
    tried: tuple[Candidate, ...]

    def to_json(self) -> dict[str, Any]:
        """Plain data for model.json."""
        return {
            "rule": "the simplest within one standard error of the best (Breiman et al. 1984)",
            "measure": "balanced screening accuracy, polygons kept whole",
            "chosen": _row(self.chosen),
            "best": _row(self.best),
            "tried": [_row(candidate) for candidate in self.tried],
        }


def load_space(path: Path | None = None) -> dict[str, dict[str, _Range]]:
    """The search space by kind: configs/tuning.toml unless `path` names another file. Raises SettingsError."""
    file = path or configs_folder() / "tuning.toml"
    try:
        return TypeAdapter(dict[ModelKind, dict[str, _Range]]).validate_python(read_toml(file))  # type: ignore[return-value]
    except ValidationError as error:
        found = [Problem(d["msg"], f"{file.name}: {'.'.join(map(str, d['loc']))}") for d in error.errors()]
        raise SettingsError(found) from error


def draw_settings(kind: ModelKind, draws: int, seed: int, space: dict[str, dict[str, _Range]]) -> list[dict[str, Any]]:
    """The defaults (an empty dict), then draws - 1 seeded random settings."""
    random = np.random.default_rng([seed, SIMPLEST_FIRST.index(kind)])
    ranges = space.get(kind, {})
    drawn = [{name: ranges[name].draw(random) for name in ranges} for _ in range(draws - 1)] if ranges else []
    return [{}, *drawn]


def choose(
    training: TrainingSet,
    wanted: Sequence[tuple[ModelKind, dict[str, Any]]],
    options: ScreenOptions,
    *,
    groups: NDArray[np.int32] | None = None,
    progress: Progress = SILENT,
) -> Choice:
    """Try every candidate on the same folds and choose by the one-standard-error rule.

    All candidates and folds share one pool of `options.jobs` threads; the result does not depend on it.
    """
    groups = training.polygon if groups is None else groups
    folds = group_folds(training.codes, groups, options.folds, options.seed)
    results = np.full((len(wanted), folds.count), np.nan)
    tasks = [(c, f) for c in range(len(wanted)) for f in range(folds.count)]
    with progress.task("Tuning with polygons kept whole", len(tasks)) as task, stoppable_pool(options.jobs) as pool:

        def run(job: tuple[int, int]) -> None:
            results[job] = _one(training, wanted[job[0]], folds.held_out(job[1]), options)
            task.advance()

        list(pool.map(run, tasks))
    return simplest_within_error(
        [Candidate(kind, params, row) for (kind, params), row in zip(wanted, results, strict=True)]
    )


def simplest_within_error(tried: Sequence[Candidate]) -> Choice:
    """The simplest candidate whose mean is within one standard error of the best one's (Breiman et al. 1984, CART)."""
    space = load_space()
    best = max(tried, key=lambda candidate: candidate.mean if np.isfinite(candidate.by_fold).any() else -1.0)
    within = [candidate for candidate in tried if candidate.mean >= best.mean - best.error]
    chosen = min(within or [best], key=lambda candidate: _complexity(candidate, space))
    return Choice(chosen, best, tuple(tried))


def _one(
    training: TrainingSet, wanted: tuple[ModelKind, dict[str, Any]], held: NDArray[np.bool_], options: ScreenOptions
) -> float:
    kind, params = wanted
    if not held.any() or held.all():
        return float("nan")
    quick = {"n_estimators": TUNING_TREES} if kind == "random forest" else {}
    features = training.features.shape[1]
    scores = scores_of_held(
        training, held, lambda seed: make_estimator(kind, {**params, **quick}, features=features, seed=seed), options
    )
    return balanced_by_fold(training, held, scores)


def _complexity(candidate: Candidate, space: dict[str, dict[str, _Range]]) -> tuple[int, float, float]:
    """Kinds first, then how far its settings lie from the simple end, then the better mean."""
    steps = 0.0
    for name, ruler in space.get(candidate.kind, {}).items():
        if name in candidate.params:
            steps += _place(ruler, candidate.params[name])
        else:
            steps += 0.5
    return SIMPLEST_FIRST.index(candidate.kind), round(steps, 3), -candidate.mean


def _place(ruler: _Range, value: Any) -> float:  # noqa: ANN401 - number or text
    """Where a value lies between the simple end (0) and the other (1)."""
    if ruler.choose:
        share = ruler.choose.index(value) / max(len(ruler.choose) - 1, 1)
    else:
        assert ruler.lowest is not None and ruler.highest is not None, ruler
        ends = np.array([ruler.lowest, value, ruler.highest], dtype=np.float64)
        low, here, high = np.log(ends) if ruler.scale == "log" else ends
        share = float((here - low) / (high - low))
    return 1 - share if ruler.simpler == "high" else share


def _row(candidate: Candidate) -> dict[str, Any]:
    mean = candidate.mean if np.isfinite(candidate.by_fold).any() else None
    return {"kind": candidate.kind, "params": candidate.params, "mean": mean, "standard_error": candidate.error}
