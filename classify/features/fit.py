"""Fit what a recipe holds that must be learnt from a scene: principal components and minimum noise fractions.

The sample is of the scene, not of the training polygons: no label is seen, so that screening on held-out polygons keeps
its meaning.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from classify.errors import DataError
from classify.features.build import build_recipe
from classify.features.facts import scene_facts
from classify.features.recipe import Recipe
from classify.features.spectra import fit_projection
from classify.features.steps import ComponentStep
from classify.progress import SILENT, Progress
from classify.raster.scene import Scene
from classify.settings import Project
from classify.settings.features import ComponentSettings

WINDOW_PX = 64
SAMPLE_PX = 100_000


def scene_recipe(project: Project, scene: Scene, progress: Progress = SILENT) -> Recipe:
    """The recipe of a project on its scene, components fitted. Raises SettingsError and DataError."""
    recipe = build_recipe(project.features, scene.roles, scene_facts(scene))
    return fit_recipe(recipe, scene, project.project.seed, progress)


def fit_recipe(recipe: Recipe, scene: Scene, seed: int, progress: Progress = SILENT) -> Recipe:
    """The recipe with its components fitted to a sample of windows of `scene`, drawn by `seed`; itself if it has none.

    Raises DataError if the scene has too few clear pixels.
    """
    steps = list(recipe.steps)
    for place, step in enumerate(steps):
        if isinstance(step, ComponentStep) and step.projection is None:
            before = Recipe(step.needs, tuple(steps[:place]), recipe.smoothing)
            samples, differences = _sample(before, scene, seed, progress)
            if min(len(samples), len(differences)) < 10 * len(step.needs):
                raise DataError(
                    f"the scene has too few clear pixels ({len(samples)}) for components of {len(step.needs)} layers",
                    where="features.components", fix="leave components out, or look at the mask",
                )  # fmt: skip
            settings = ComponentSettings(method=step.method, count=len(step.outputs))
            fitted = fit_projection(samples, differences, settings, standardise=step.standardise)
            steps[place] = replace(step, projection=fitted)
    return replace(recipe, steps=tuple(steps))


def _sample(
    recipe: Recipe, scene: Scene, seed: int, progress: Progress
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Layers of clear pixels, float64 (n, layers), and their differences from the right-hand neighbour (m, layers)."""
    windows = list(scene.grid.blocks(WINDOW_PX))
    order = np.random.default_rng(seed).permutation(len(windows))
    pixels: list[NDArray[np.float32]] = []
    steps: list[NDArray[np.float32]] = []
    found, total = 0, min(SAMPLE_PX, scene.grid.height * scene.grid.width)
    with scene.open() as reader, progress.task("Sampling the scene for components", total) as task:
        for place in order:
            layers = recipe.compute(reader.read(windows[place], recipe.needs, halo_px=recipe.halo_px))
            clear: NDArray[np.bool_] = np.asarray(np.isfinite(layers).all(axis=0))
            both = clear[:, 1:] & clear[:, :-1]
            pixels.append(layers[:, clear].T)
            steps.append((layers[:, :, 1:] - layers[:, :, :-1])[:, both].T)
            task.advance(max(0, min(int(clear.sum()), total - found)))
            found += int(clear.sum())
            if found >= total:
                break
    return np.concatenate(pixels).astype(np.float64), np.concatenate(steps).astype(np.float64)
