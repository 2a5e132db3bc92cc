"""The ways in which layers are made: each step is a value that says what it reads, how far it looks and what it gives.

Steps of a formula or of weights are pixel by pixel and end up in one program; the others work on whole arrays.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated, Literal

from pydantic import Field

from classify.features.absorption import AbsorptionStep, RedEdgeStep
from classify.features.formula import Formula, parse_formula
from classify.features.program import Node, Weighted
from classify.features.spectra import Projection
from classify.features.terrain import TerrainStep
from classify.features.texture import TextureStep

_parsed = lru_cache(maxsize=4096)(parse_formula)


@dataclass(frozen=True, slots=True)
class FormulaStep:
    """A layer made by a formula over bands and earlier layers. Raises FormulaError when made with a broken one."""

    name: str
    formula: str
    kind: Literal["formula"] = "formula"

    def __post_init__(self) -> None:
        _parsed(self.formula)

    @property
    def parsed(self) -> Formula:
        """The formula as a tree."""
        return _parsed(self.formula)

    @property
    def outputs(self) -> tuple[str, ...]:
        """The layer that the step makes."""
        return (self.name,)

    @property
    def needs(self) -> tuple[str, ...]:
        """Names of the layers that the step reads."""
        return self.parsed.names

    @property
    def nodes(self) -> Mapping[str, Node]:
        """The tree of each output."""
        return {self.name: self.parsed.root}


@dataclass(frozen=True, slots=True)
class ComponentStep:
    """Components of many layers, fitted to a scene. projection: None until fitted. standardise: of correlations."""

    outputs: tuple[str, ...]
    needs: tuple[str, ...]
    method: Literal["principal components", "minimum noise fraction"]
    standardise: bool = False
    projection: Projection | None = None
    kind: Literal["components"] = "components"

    @property
    def nodes(self) -> Mapping[str, Node]:
        """The weighted sum of each output; none before fitting."""
        if self.projection is None:
            return {}
        rows = zip(self.outputs, self.projection.weights, self.projection.offsets, strict=True)
        return {name: Weighted(self.needs, weights, offset) for name, weights, offset in rows}


@dataclass(frozen=True, slots=True)
class SmoothedBand:
    """A band that is replaced, before anything else, by a weighted sum of bands as read."""

    role: str
    needs: tuple[str, ...]
    weights: tuple[float, ...]


PixelStep = FormulaStep | ComponentStep
ArrayStep = TextureStep | TerrainStep | AbsorptionStep | RedEdgeStep
Step = Annotated[PixelStep | ArrayStep, Field(discriminator="kind")]
