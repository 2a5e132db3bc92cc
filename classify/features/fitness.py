"""Does a recipe mean the same on another scene? What it took from the scene it was built for, beside this one."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from classify.errors import Problem
from classify.features.absorption import AbsorptionStep, RedEdgeStep
from classify.features.facts import SceneFacts
from classify.features.recipe import Recipe
from classify.features.terrain import TerrainStep

# A slope changes by about this share with the pixel size, a dip's shoulder by these nm without being another.
_PIXEL_SHARE = 0.02
_NM = 5.0


def recipe_findings(recipe: Recipe, facts: SceneFacts) -> tuple[Problem, ...]:
    """Warnings on features that would come out otherwise in a scene with these facts; the unknown is not doubted."""
    return tuple(dict.fromkeys((*_pixel_findings(recipe, facts), *_wavelength_findings(recipe, facts))))


def _pixel_findings(recipe: Recipe, facts: SceneFacts) -> Iterator[Problem]:
    for step in recipe.steps:
        if not isinstance(step, TerrainStep) or facts.pixel_m is None or step.statistic == "topographic position":
            continue
        old, new = np.array(step.pixel_m), np.array(facts.pixel_m)
        if np.abs(new - old).max() > _PIXEL_SHARE * np.abs(old).max():
            yield Problem(
                f"{step.name!r} reckons with the pixels of the scene that the model was trained on "
                f"({_size(old)} m), and those of this scene are another size or turned ({_size(new)} m)",
                "scene.grid", "train the model again on this grid, or bring the scene onto the old one", "warning",
            )  # fmt: skip


def _size(vectors: np.ndarray) -> str:
    """Length of a step of one column and of one row, in metres."""
    return f"{np.hypot(*vectors[:2]):.4g} x {np.hypot(*vectors[2:]):.4g}"


def _wavelength_findings(recipe: Recipe, facts: SceneFacts) -> Iterator[Problem]:
    for step in recipe.steps:
        if not isinstance(step, AbsorptionStep | RedEdgeStep):
            continue
        for role, nm in zip(step.bands, step.wavelengths_nm, strict=True):
            here = facts.wavelengths_nm.get(role, nm)
            if abs(here - nm) > _NM:
                yield Problem(
                    f"band {role!r} is at {here:g} nm, and {step.outputs[0]!r} was trained with one at {nm:g} nm",
                    "scene.bands", "name the band that is nearest to the old one, or train the model again", "warning",
                )  # fmt: skip
