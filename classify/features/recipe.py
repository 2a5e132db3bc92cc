"""A recipe: which features to make of a pixel, in which order, from which layers; complete in itself.

The recipe of a model is stored with it and holds the formulas themselves, so that a catalogue which changes later does
not change what an old model means.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from classify.errors import ModelError
from classify.features.formula import Formula, FormulaError, parse_formula
from classify.features.program import Program

Layers = Mapping[str, NDArray[np.float32]]

SCHEMA = 1


@dataclass(frozen=True, slots=True)
class FormulaStep:
    """A layer made pixel by pixel by a formula over band roles and earlier layers."""

    name: str
    formula: Formula

    @property
    def needs(self) -> tuple[str, ...]:
        """Names of the layers that the step reads."""
        return self.formula.names

    @property
    def halo_px(self) -> int:
        """Pixels around a pixel that the step looks at, beyond those of the layers it reads."""
        return 0

    def to_json(self) -> dict[str, Any]:
        """The step as plain data."""
        return {"name": self.name, "formula": self.formula.text}


Step = FormulaStep


@dataclass(frozen=True)
class Recipe:
    """names: the features, in order; each is a step's name or, where no step has it, a band as it is. steps: how layers
    are made, each from bands and from steps before it."""

    names: tuple[str, ...]
    steps: tuple[Step, ...] = ()

    @cached_property
    def needs(self) -> tuple[str, ...]:
        """The roles (or other scene layers) that the features rest on, each once, in a stable order."""
        made = {step.name for step in self.steps}
        wanted = [*self.names, *(name for step in self.steps for name in step.needs)]
        return tuple(dict.fromkeys(name for name in wanted if name not in made))

    @cached_property
    def halo_px(self) -> int:
        """Pixels around a window that must be read so that its features are those of the whole scene."""
        halo: dict[str, int] = {}
        for step in self.steps:
            halo[step.name] = step.halo_px + max((halo.get(name, 0) for name in step.needs), default=0)
        return max((halo.get(name, 0) for name in self.names), default=0)

    @cached_property
    def _program(self) -> Program:
        return Program.compile({step.name: step.formula.root for step in self.steps}, self.names)

    def compute(self, layers: Layers) -> NDArray[np.float32]:
        """The features, float32 (n_features, h, w), NaN where invalid.

        `layers` holds every name of `needs` as float32 (h + 2p, w + 2p) with p = `halo_px`: finite, or NaN where
        invalid. Safe to call from several threads.
        """
        pad = self.halo_px
        height, width = next(iter(layers.values())).shape
        out = np.empty((len(self.names), height - 2 * pad, width - 2 * pad), dtype=np.float32)
        self._program.run(layers, out, crop_px=pad)
        return out

    def to_json(self) -> dict[str, Any]:
        """The recipe as plain data, complete in itself."""
        return {"schema": SCHEMA, "features": list(self.names), "steps": [step.to_json() for step in self.steps]}

    @classmethod
    def from_json(cls, data: Mapping[str, Any]) -> Recipe:
        """The recipe that `to_json` wrote. Raises ModelError if the data are not such a recipe."""
        if not isinstance(data, Mapping) or data.get("schema") != SCHEMA:
            raise ModelError(
                f"the recipe of features is not of schema {SCHEMA}", where="recipe",
                fix="use the version of landassay that made the model, or train it again",
            )  # fmt: skip
        try:
            names = _texts(data["features"])
            steps = tuple(_step(step) for step in data["steps"])
        except FormulaError as error:
            raise ModelError(f"the recipe of features holds a broken formula: {error}", where="recipe") from error
        except (KeyError, TypeError, ValueError) as error:
            raise ModelError(
                f"the recipe of features is broken ({error})", where="recipe", fix="train it again"
            ) from error
        return cls(names, steps)


def _texts(values: Iterable[Any]) -> tuple[str, ...]:
    texts = tuple(value for value in values if isinstance(value, str))
    if isinstance(values, str) or len(texts) != len(tuple(values)):
        raise ValueError("a list of texts is expected")
    return texts


def _step(data: Mapping[str, Any]) -> Step:
    name, text = _texts((data["name"], data["formula"]))
    return FormulaStep(name, parse_formula(text))
