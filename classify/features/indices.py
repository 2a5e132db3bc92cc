"""The catalogue of published indices in configs/indices.toml, and which of them a scene can compute."""

from __future__ import annotations

import difflib
from collections.abc import Collection, Mapping
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from types import MappingProxyType
from typing import Any

from classify.errors import Problem, SettingsError
from classify.features.facts import NO_FACTS, SceneFacts, describe_band
from classify.features.formula import Formula, FormulaError, parse_formula
from classify.settings.presets import configs_folder, read_toml

_KEYS = {"title": str, "shows": str, "formula": str, "source": str, "usual": list, "note": str}
_OPTIONAL = {"note"}


@dataclass(frozen=True, slots=True)
class Index:
    """One published index.

    formula: over band roles, on reflectance 0..1, and over other indices. usual: range that land surfaces usually take.
    shows: its group in the catalogue. source: paper and year. note: what to know before using it, or "".
    """

    name: str
    title: str
    shows: str
    formula: Formula
    source: str
    usual: tuple[float, float]
    note: str = ""


@dataclass(frozen=True, slots=True)
class Availability:
    """Whether a scene can compute an index: missing lists the absent bands, and is empty where it can."""

    index: Index
    missing: tuple[str, ...]

    @property
    def available(self) -> bool:
        """Whether no band is missing."""
        return not self.missing

    @property
    def reason(self) -> str:
        """Why the index cannot be computed, in one phrase, or ""."""
        return f"the scene lacks {' and '.join(map(describe_band, self.missing))}" if self.missing else ""


@cache
def index_catalogue() -> Mapping[str, Index]:
    """Every index by name, in the order of configs/indices.toml. Raises SettingsError listing what is wrong with it."""
    return read_catalogue(configs_folder() / "indices.toml")


def read_catalogue(path: Path) -> Mapping[str, Index]:
    """A catalogue file as a read-only mapping. Raises SettingsError listing every problem with its key."""
    problems: list[Problem] = []
    found: dict[str, Index] = {}
    for name, entry in read_toml(path).items():
        bad = _bad_keys(entry)
        if bad:
            problems.extend(Problem(what, f"{path.name}: {name}") for what in bad)
            continue
        try:
            formula = parse_formula(entry["formula"])
        except FormulaError as error:
            problems.append(Problem(str(error), f"{path.name}: {name}.formula"))
            continue
        low, high = entry["usual"]
        found[name] = Index(
            name,
            entry["title"],
            entry["shows"],
            formula,
            entry["source"],
            (float(low), float(high)),
            entry.get("note", ""),
        )
    if problems:
        raise SettingsError(problems)
    return MappingProxyType(found)


def _bad_keys(entry: Any) -> list[str]:  # noqa: ANN401 - whatever the file holds
    if not isinstance(entry, dict):
        return ["this must be a table with title, shows, formula, source and usual"]
    bad = [f"the key {key!r} is not known" for key in entry if key not in _KEYS]
    for key, kind in _KEYS.items():
        if key not in entry:
            bad += [] if key in _OPTIONAL else [f"the key {key!r} is missing"]
        elif not isinstance(entry[key], kind):
            bad.append(f"{key} must be a {'list of two numbers' if kind is list else 'text'}")
    usual = entry.get("usual")
    if isinstance(usual, list) and not (
        len(usual) == 2 and all(isinstance(x, int | float) for x in usual) and usual[0] < usual[1]
    ):
        bad.append("usual must be two numbers, the lower first")
    return bad


def find_index(name: str) -> Index | None:
    """The index of that name, whatever the case, or None."""
    return index_catalogue().get(name.strip().casefold())


def nearest_index(name: str) -> str:
    """A hint: the index whose name is most like an unknown one, or where to find them all."""
    close = difflib.get_close_matches(name.strip().casefold(), index_catalogue(), n=1, cutoff=0.6)
    return f"did you mean {close[0]!r}?" if close else "'landassay check --indices' lists them all"


def bands_of(index: Index) -> tuple[str, ...]:
    """The band roles that an index rests on, those of the indices in its formula included."""
    catalogue, found = index_catalogue(), dict[str, None]()
    for name in index.formula.names:
        found |= dict.fromkeys(bands_of(catalogue[name]) if name in catalogue else (name,))
    return tuple(found)


def index_availability(roles: Collection[str], facts: SceneFacts = NO_FACTS) -> tuple[Availability, ...]:
    """For every index of the catalogue, in its order, which bands a scene with these `roles` lacks.

    A band counts as present if the scene has it on its own or for at least one date (`nir@2024_06`); one that is called
    by its wavelength, if `facts` know it.
    """
    have = set(roles) | {role.partition("@")[0] for role in roles}
    return tuple(
        Availability(index, tuple(r for r in bands_of(index) if r not in have and not facts.band_near(r)))
        for index in index_catalogue().values()
    )
