"""From the [features] of a project to a recipe, with every problem found at once."""

from __future__ import annotations

import difflib
from collections.abc import Collection, Iterable

from classify.errors import Problem, SettingsError
from classify.features.formula import CONSTANTS, FormulaError, parse_formula, point_at
from classify.features.indices import find_index, index_catalogue, nearest_index
from classify.features.recipe import FormulaStep, Recipe, Step
from classify.settings.model import FeatureSettings


def build_recipe(settings: FeatureSettings, roles: Collection[str]) -> Recipe:
    """The recipe that `settings` ask for of a scene with these `roles`. Raises SettingsError listing every problem.

    Features come in the order bands, indices, formulas. A formula may use bands, indices of the catalogue (listed as
    features or not) and other formulas; `name@date` stands for one date of either.
    """
    return _Builder(settings, tuple(roles)).build()


class _Builder:
    """Collects features, the steps that they rest on, and problems."""

    def __init__(self, settings: FeatureSettings, roles: tuple[str, ...]) -> None:
        self.settings = settings
        self.roles = roles
        self.names: dict[str, None] = {}
        self.steps: dict[str, Step] = {}
        self.problems: list[Problem] = []
        self._under_way: list[str] = []

    def build(self) -> Recipe:
        self._bands()
        for name in self.settings.indices:
            self._index(name)
        for name in self.settings.formulas:
            if self._free(name, f"features.formulas.{name}"):
                self._formula(name)
                self.names[name] = None
        if not self.names and not self.problems:
            self._problem(
                "nothing is listed, so there are no features", "features", 'write bands = "all", for instance'
            )
        if self.problems:
            raise SettingsError(list(dict.fromkeys(self.problems)))
        return Recipe(tuple(self.names), tuple(self.steps.values()))

    def _problem(self, what: str, where: str, fix: str = "") -> None:
        self.problems.append(Problem(what, where, fix))

    def _bands(self) -> None:
        wanted = self.roles if self.settings.bands == "all" else self.settings.bands
        for role in wanted:
            if role not in self.roles:
                self._problem(f"the scene has no band {role!r}", "features.bands", _nearest(role, self.roles))
            elif role in self.names:
                self._problem(f"band {role!r} is listed twice", "features.bands", "list it once")
            self.names[role] = None

    def _index(self, written: str) -> None:
        where = "features.indices"
        name = written.strip().casefold()
        if find_index(name.partition("@")[0]) is None:
            self._problem(
                f"there is no index {written!r} in the catalogue", where, nearest_index(name.partition("@")[0])
            )
        elif name in self.roles or name in self.settings.formulas:
            self._problem(
                f"{name!r} is an index, and also the name of a {'band' if name in self.roles else 'formula'}", where,
                "give one of them another name",
            )  # fmt: skip
        elif name in self.names:
            self._problem(f"index {name!r} is listed twice", where, "list it once")
        else:
            self._catalogue_step(name, where)
            self.names[name] = None

    def _free(self, name: str, where: str) -> bool:
        taken = "a band of the scene" if name in self.roles else "a constant" if name in CONSTANTS else ""
        if not taken and name in index_catalogue() and name not in self.settings.indices:
            taken = "an index of the catalogue"
        if taken:
            self._problem(f"{name!r} is already the name of {taken}", where, "give the formula another name")
        return not taken and name not in self.settings.indices

    def _catalogue_step(self, name: str, where: str) -> None:
        """The step for an index, `name` or `name@date`, and for those that it uses."""
        if name in self.steps:
            return
        base, _, date = name.partition("@")
        index = find_index(base)
        assert index is not None, name
        formula = index.formula.on_date(date) if date else index.formula
        missing = [part for part in formula.names if not self._provide(part, where)]
        if missing:
            self._problem(
                f"index {name!r} needs {_bands(missing)}, which the scene does not have", where,
                "leave the index out, or name the band in [scene.bands]",
            )  # fmt: skip
        self.steps[name] = FormulaStep(name, formula)

    def _provide(self, name: str, where: str) -> bool:
        """Make sure that a layer is there for a name of a formula: a band, an index or another formula."""
        if name in self.roles or name in self.steps:
            return True
        if name in self.settings.formulas:
            self._formula(name)
            return True
        if find_index(name.partition("@")[0]) is not None:
            self._catalogue_step(name, where)
            return True
        return False

    def _formula(self, name: str) -> None:
        if name in self.steps:
            return
        text, where = self.settings.formulas[name], f"features.formulas.{name}"
        if name in self._under_way:
            loop = " -> ".join([*self._under_way[self._under_way.index(name) :], name])
            self._problem(f"the formulas go round in a circle: {loop}", where, "break the circle")
            return
        try:
            formula = parse_formula(text)
        except FormulaError as error:
            self._problem(str(error), where)
            return
        if not formula.names:
            self._problem(f"the formula {text!r} uses no band and no feature", where, "a feature must differ by pixel")
        self._under_way.append(name)
        for part, position in formula.positions.items():
            if not self._provide(part, where):
                self._problem(
                    f"there is no band and no feature {part!r}\n{point_at(text, position)}", where,
                    _nearest(part, [*self.roles, *self.settings.formulas, *index_catalogue()], self.roles),
                )  # fmt: skip
        self._under_way.pop()
        self.steps[name] = FormulaStep(name, formula)


def _nearest(name: str, known: Iterable[str], shown: Iterable[str] | None = None) -> str:
    known = list(known)
    close = difflib.get_close_matches(name, known, n=1, cutoff=0.6)
    if close:
        return f"did you mean {close[0]!r}?"
    return f"the bands are {', '.join(known if shown is None else shown)}"


def _bands(names: list[str]) -> str:
    return ("band " if len(names) == 1 else "bands ") + " and ".join(repr(name) for name in names)
