"""A recipe: which features to make of a pixel, in which order, from which layers; complete in itself.

The recipe of a model is stored with it and holds the formulas and fitted weights themselves, so that a catalogue which
changes later does not change what an old model means.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import TypeAdapter, ValidationError

from classify.errors import ModelError
from classify.features.formula import FormulaError
from classify.features.program import Node, Program, Weighted
from classify.features.steps import ArrayStep, ComponentStep, FormulaStep, SmoothedBand, Step

Layers = Mapping[str, NDArray[np.float32]]

SCHEMA = 1


@dataclass(frozen=True)
class Recipe:
    """What the model sees of a pixel.

    features: names, in order; each is an output of a step or, where no step has it, a layer of the scene as it is.
    steps: how layers are made, each from those of the scene and of steps before it. smoothing: bands that are replaced
    before anything else.
    """

    features: tuple[str, ...]
    steps: tuple[Step, ...] = ()
    smoothing: tuple[SmoothedBand, ...] = ()
    schema: int = field(default=SCHEMA, kw_only=True)

    @property
    def names(self) -> tuple[str, ...]:
        """The features, in order."""
        return self.features

    @cached_property
    def needs(self) -> tuple[str, ...]:
        """The layers of the scene that the features rest on, each once, in a stable order."""
        made = {name for step in self.steps for name in step.outputs}
        wanted = dict.fromkeys((*self.features, *(name for step in self.steps for name in step.needs)))
        smoothed = {band.role: band.needs for band in self.smoothing}
        read = (part for name in wanted if name not in made for part in smoothed.get(name, (name,)))
        return tuple(dict.fromkeys(read))

    @cached_property
    def halo_px(self) -> int:
        """Pixels around a window that must be read so that its features are those of the whole scene."""
        halo: dict[str, int] = {}
        for step in self.steps:
            own = step.halo_px if isinstance(step, ArrayStep) else 0
            widest = own + max((halo.get(name, 0) for name in step.needs), default=0)
            halo.update(dict.fromkeys(step.outputs, widest))
        return max((halo.get(name, 0) for name in self.features), default=0)

    @property
    def needs_fit(self) -> bool:
        """Whether components are still to be fitted to a scene, by `fit_recipe`; until then `compute` cannot be."""
        return any(isinstance(step, ComponentStep) and step.projection is None for step in self.steps)

    def compute(self, layers: Layers) -> NDArray[np.float32]:
        """The features, float32 (n_features, h, w), NaN where invalid.

        `layers` holds every name of `needs` as float32 (h + 2p, w + 2p) with p = `halo_px`: finite, or NaN where
        invalid. Safe to call from several threads.
        """
        assert not self.needs_fit, "a recipe with components is fitted before it is used"
        pad = self.halo_px
        height, width = layers[self.needs[0]].shape
        known: dict[str, NDArray[np.float32]] = dict(layers)
        arrays, last = self._plan
        for program, step in arrays:
            inputs = np.empty((len(step.needs), height, width), dtype=np.float32)
            program.run(known, inputs)
            known.update(zip(step.outputs, step.apply(inputs), strict=True))
        out = np.empty((len(self.features), height - 2 * pad, width - 2 * pad), dtype=np.float32)
        last.run(known, out, crop_px=pad)
        return out

    @cached_property
    def _plan(self) -> tuple[tuple[tuple[Program, ArrayStep], ...], Program]:
        """Each step on arrays with the program that makes its input, then the program that makes the features."""
        smoothed: dict[str, Node] = {band.role: Weighted(band.needs, band.weights) for band in self.smoothing}
        nodes: dict[str, Node] = {}
        arrays: list[tuple[Program, ArrayStep]] = []
        for step in self.steps:
            if isinstance(step, FormulaStep | ComponentStep):
                nodes.update(step.nodes)
            else:
                arrays.append((Program.compile(nodes, step.needs, smoothed), step))
        return tuple(arrays), Program.compile(nodes, self.features, smoothed)

    def to_json(self) -> dict[str, Any]:
        """The recipe as plain data, complete in itself."""
        data: dict[str, Any] = _RECIPE.dump_python(self, mode="json")
        return data

    @classmethod
    def from_json(cls, data: Mapping[str, Any]) -> Recipe:
        """The recipe that `to_json` wrote. Raises ModelError if the data are not such a recipe."""
        if not isinstance(data, Mapping) or data.get("schema") != SCHEMA:
            raise ModelError(
                f"the recipe of features is not of schema {SCHEMA}", where="recipe",
                fix="use the version of landassay that made the model, or train it again",
            )  # fmt: skip
        try:
            return _RECIPE.validate_python(data)
        except FormulaError as error:
            raise ModelError(f"the recipe of features holds a broken formula: {error}", where="recipe") from error
        except ValidationError as error:
            first = error.errors()[0]
            place = ".".join(str(part) for part in ("recipe", *first["loc"]))
            raise ModelError(
                f"the recipe of features is broken: {first['msg']}", where=place, fix="train again"
            ) from error


_RECIPE: TypeAdapter[Recipe] = TypeAdapter(Recipe)
