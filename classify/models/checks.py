"""Can these classes be learnt and screened, and does a model fit a scene that it was not trained on?"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import sklearn
from numpy.typing import NDArray

from classify.errors import ModelError, Problem
from classify.features import recipe_findings, scene_facts
from classify.models.trained import TrainedModel
from classify.raster.grid import Window
from classify.raster.reader import Scene
from classify.settings import Project
from classify.training.dataset import TrainingSet

# A class needs a few pixels for a tree or a margin to stand on; below this nothing is learnt but chance.
MIN_PIXELS = 5
# A feature counts as shifted when this share of a scene lies well beyond what 98 % of the training pixels span, as when
# one scene is in reflectance and the other in stored numbers.
_BEYOND_SHARE = 0.5
_SAMPLE_WINDOWS, _SAMPLE_PX = 5, 48
_PLACE = "training polygons"


def check_classes(training: TrainingSet, project: Project) -> list[Problem]:
    """Findings on whether every class can be learnt and screened; errors for those that cannot be learnt."""
    names = {c.code: c.name for c in project.classes}
    codes, pixels = np.unique(training.codes, return_counts=True)
    found = list(_feature_findings(training))
    if len(codes) < 2:
        only = ", ".join(names.get(int(code), str(code)) for code in codes) or "none"
        what = f"the training pixels hold one class only ({only}): there is nothing to tell apart"
        found.append(Problem(what, _PLACE, "add polygons of another class"))
    for code, count in zip(codes, pixels, strict=True):
        name = names.get(int(code), str(code))
        if count < MIN_PIXELS:
            what = f"class {name!r} has {count} usable pixels; at least {MIN_PIXELS} are needed"
            found.append(Problem(what, _PLACE, "draw more or larger polygons of it"))
        elif len(np.unique(training.polygon[training.codes == code])) < 2:
            what = f"class {name!r} has one usable polygon: it can be mapped but not screened"
            found.append(Problem(what, _PLACE, "draw a second polygon of it, some way off", "warning"))
    missing = [repr(c.name) for c in project.classes if c.code not in set(codes.tolist())]
    if missing:
        what = f"no usable training pixel for {', '.join(missing)}: never mapped"
        found.append(Problem(what, _PLACE, "draw polygons of it, or drop the class", "warning"))
    return found


def _feature_findings(training: TrainingSet) -> list[Problem]:
    names = np.array(training.feature_names)
    if not len(training.codes):
        return []
    broken = ~np.isfinite(training.features).all(axis=0)
    constant = ~broken & (training.features.max(axis=0) == training.features.min(axis=0))
    found = []
    if broken.any():
        what = f"values that are not numbers in: {', '.join(names[broken])}"
        found.append(Problem(what, _PLACE, "extract the training pixels again"))
    if constant.any():
        what = f"the same value in every training pixel: {', '.join(names[constant])}; no help to the model"
        found.append(Problem(what, "features", "remove them, or check the bands they are made of", "warning"))
    return found


def check_scene(model: TrainedModel, scene: Scene) -> tuple[Problem, ...]:
    """Findings on a model used on a scene, most likely not the one it was trained on; all are warnings.

    Reads a few small windows, and reports every feature whose values lie elsewhere than in training. Raises ModelError
    if a layer that the model needs is missing from the scene.
    """
    missing = [role for role in model.recipe.needs if role not in scene.roles]
    if missing:
        raise ModelError(
            f"the model needs {', '.join(missing)}, which this scene does not have",
            where="scene.bands",
            fix=f"name these bands, or train again on what there is: {', '.join(scene.roles)}",
        )
    found = [*_version_findings(model.card.get("versions", {})), *recipe_findings(model.recipe, scene_facts(scene))]
    features = _scene_sample(model, scene)
    for name, shift in distribution_shift(model.card["training"]["quantiles"], features).items():
        if shift is not None and shift["beyond"] > _BEYOND_SHARE:
            what = (
                f"feature {name!r} lies elsewhere than in training: {shift['beyond']:.0%} of the sampled pixels are "
                f"beyond what training pixels span, the middle {shift['middle']:.3g}, not {shift['expected']:.3g}"
            )
            fix = "check scale and offset of the bands; if they are right, add training polygons from this scene"
            found.append(Problem(what, "scene", fix, "warning"))
    return tuple(found)


def distribution_shift(
    quantiles: Mapping[str, Any], features: NDArray[np.float32]
) -> dict[str, dict[str, float] | None]:
    """For each feature of the card's quantiles how other pixels (n, f, in that order) differ; None without a value.

    beyond: share outside the training pixels' 1st to 99th percentile, widened by half their span on either side.
    middle, expected: the medians.
    """
    result: dict[str, dict[str, float] | None] = {}
    for column, (name, levels) in zip(features.T.astype(np.float64), quantiles["values"].items(), strict=True):
        held = column[np.isfinite(column)]
        if not len(held):
            result[name] = None
            continue
        low, expected, high = levels[0], levels[len(levels) // 2], levels[-1]
        reach = (high - low) / 2
        middle = float(np.median(held))
        result[name] = {
            "beyond": float(np.mean((held < low - reach) | (held > high + reach))),
            "middle": middle,
            "expected": float(expected),
        }
    return result


def _scene_sample(model: TrainedModel, scene: Scene) -> NDArray[np.float32]:
    """Features float32 (n, f) of small windows spread evenly over the scene."""
    grid, parts = scene.grid, []
    size = min(_SAMPLE_PX, grid.height, grid.width)
    with scene.open() as reader:
        for row in np.linspace(0, grid.height - size, _SAMPLE_WINDOWS).astype(int):
            for col in np.linspace(0, grid.width - size, _SAMPLE_WINDOWS).astype(int):
                window = Window(int(row), int(col), size, size)
                layers = reader.read(window, roles=model.recipe.needs, halo_px=model.recipe.halo_px)
                parts.append(model.recipe.compute(layers).reshape(len(model.recipe.names), -1).T)
    return np.concatenate(parts)


def _version_findings(versions: Mapping[str, str]) -> list[Problem]:
    then, now = versions.get("scikit-learn", "unknown"), sklearn.__version__
    if then.split(".")[:2] == now.split(".")[:2]:
        return []
    what = f"the model was made with scikit-learn {then}, this is {now}"
    return [Problem(what, "model", "labels may differ in rare cases; train again to be sure", "warning")]
