"""Material expectations: what a polygon that claims to be green leaves, soil or water must show in the bands at hand.

Materials are data in configs/materials and, beside them, in a folder of the user's. An expectation names stretches of
wavelength, a formula over them and a limit; bands are found by their centre, or by role where no wavelength is known.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator

from classify.errors import LandassayError, Problem, SettingsError
from classify.features.formula import parse_formula
from classify.settings import load_preset, preset_names
from classify.settings.presets import read_toml


class Expectation(BaseModel):
    """One thing that a material shows. The formula's value must lie above and/or below its limits."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    name: str = Field(min_length=1)
    of: dict[str, tuple[float, float]] = Field(min_length=1, description="name in the formula = [from, to] in nm")
    formula: str = Field(min_length=1)
    above: float | None = None
    below: float | None = None
    says: str = Field(min_length=1, description="what it means when it is not met")

    @model_validator(mode="after")
    def _has_a_limit(self) -> Expectation:
        if self.above is None and self.below is None:
            raise ValueError(f"expectation {self.name!r} needs 'above' or 'below'")
        return self

    def holds(self, value: float) -> bool:
        """Whether a value of the formula meets the limits."""
        return (self.above is None or value > self.above) and (self.below is None or value < self.below)


class Material(BaseModel):
    """A material: its title, where the expectations come from, and the expectations."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    title: str = Field(min_length=1)
    source: str = ""
    expect: list[Expectation] = Field(min_length=1)


@dataclass(frozen=True)
class Check:
    """One expectation on one polygon. value: the median over its pixels; met None: the bands cannot show it."""

    name: str
    value: float | None
    above: float | None
    below: float | None
    met: bool | None
    sentence: str


@dataclass(frozen=True)
class MaterialFinding:
    """All expectations of the material that a polygon claims."""

    polygon: int
    class_name: str
    material: str
    checks: tuple[Check, ...]

    @property
    def met(self) -> bool:
        """False if at least one expectation that could be checked failed."""
        return not any(check.met is False for check in self.checks)


@dataclass(frozen=True, eq=False)
class Spectra:
    """Reflectance of pixels, float32 (n, b), with the bands' roles and centre wavelengths (NaN: unknown)."""

    reflectance: NDArray[np.float32]
    roles: tuple[str, ...]
    wavelengths_nm: tuple[float, ...]


def load_materials(names: Sequence[str], own_folder: Path | None = None) -> dict[str, Material]:
    """Materials by the name that a class gives. A file in `own_folder` goes before a shipped one of the same name.

    Raises SettingsError with every name that is not found and every file that is wrong.
    """
    found: dict[str, Material] = {}
    problems: list[Problem] = []
    own = {path.stem.casefold(): path for path in sorted(own_folder.glob("*.toml"))} if own_folder else {}
    for name in dict.fromkeys(names):
        path = own.get(name.strip().casefold())
        try:
            found[name] = _material(read_toml(path) if path else load_preset("materials", name), name)
        except SettingsError as error:
            problems.extend(error.problems)
    if problems:
        listed = ", ".join([*preset_names("materials"), *own])
        raise SettingsError(
            [Problem(p.what, p.where or "class material", p.fix or f"known: {listed}") for p in problems]
        )
    return found


def _material(data: Mapping[str, Any], name: str) -> Material:
    try:
        material = Material.model_validate(data)
        for expectation in material.expect:
            unknown = set(parse_formula(expectation.formula).names) - set(expectation.of)
            if unknown:
                raise SettingsError(
                    f"expectation {expectation.name!r} uses {', '.join(sorted(unknown))}, which 'of' does not give",
                    where=f"material {name!r}",
                )
    except ValidationError as error:
        raise SettingsError(
            [Problem(d["msg"], f"material {name!r}: {'.'.join(map(str, d['loc']))}") for d in error.errors()]
        ) from error
    except SettingsError:
        raise
    except LandassayError as error:
        raise SettingsError(error.problems[0].what, where=f"material {name!r}", fix=error.problems[0].fix) from error
    return material


def check_material(material: Material, spectra: Spectra) -> tuple[Check, ...]:
    """Check every expectation on the median over pixels of its formula."""
    return tuple(_check(expectation, spectra) for expectation in material.expect)


def _check(expectation: Expectation, spectra: Spectra) -> Check:
    limits = expectation.above, expectation.below
    layers = {name: _stretch(spectra, name, *nm) for name, nm in expectation.of.items()}
    absent = [name for name, layer in layers.items() if layer is None]
    if absent:
        missing = ", ".join(f"{name} ({expectation.of[name][0]:g}-{expectation.of[name][1]:g} nm)" for name in absent)
        return Check(expectation.name, None, *limits, None, f"not checked: no band for {missing}")
    held = {name: layer for name, layer in layers.items() if layer is not None}
    values = np.asarray(parse_formula(expectation.formula).evaluate(held), dtype=np.float64)
    values = values[np.isfinite(values)]
    if not len(values):
        return Check(expectation.name, None, *limits, None, "not checked: the formula has no value here")
    value = float(np.median(values))
    words = zip(("above", "below"), limits, strict=True)
    limit = " and ".join(f"{word} {number:g}" for word, number in words if number is not None)
    measured = f"{expectation.formula} is {value:.3g}, expected {limit}"
    if expectation.holds(value):
        return Check(expectation.name, value, *limits, True, f"{expectation.name}: {measured}")
    return Check(expectation.name, value, *limits, False, f"{expectation.says}: {measured}")


def _stretch(spectra: Spectra, name: str, from_nm: float, to_nm: float) -> NDArray[np.float32] | None:
    """Mean reflectance (1, n) of the bands centred in a stretch; of the band with that role if no centre is known."""
    centres = np.array(spectra.wavelengths_nm, dtype=np.float64)
    with np.errstate(invalid="ignore"):
        chosen = (centres >= from_nm) & (centres <= to_nm)
    chosen |= np.isnan(centres) & (np.array(spectra.roles) == name)
    if not chosen.any():
        return None
    mean: NDArray[np.float32] = spectra.reflectance[:, chosen].mean(axis=1, dtype=np.float64).astype(np.float32)
    return mean[None, :]
