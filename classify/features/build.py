"""From the [features] of a project to a recipe, with every problem found at once."""

from __future__ import annotations

import difflib
from collections.abc import Callable, Collection, Iterable, Mapping
from dataclasses import dataclass
from functools import partial

from classify.errors import Problem, SettingsError
from classify.features.dip_bands import absorption_step, one_each, rising
from classify.features.facts import NEAR_NM, NO_FACTS, SceneFacts, describe_band
from classify.features.formula import CONSTANTS, Formula, FormulaError, parse_formula, point_at
from classify.features.indices import find_index, index_catalogue, nearest_index
from classify.features.neighbourhood import terrain_step, texture_steps
from classify.features.recipe import Recipe
from classify.features.spectra import smoothing_weights
from classify.features.steps import ComponentStep, FormulaStep, SmoothedBand, Step
from classify.settings.features import FeatureSettings


def build_recipe(settings: FeatureSettings, roles: Collection[str], facts: SceneFacts = NO_FACTS) -> Recipe:
    """The recipe that `settings` ask for of a scene with layers `roles`. Raises SettingsError listing every problem.

    Features come in the order bands, layers, indices, formulas, texture, terrain, absorption, components. A formula may
    use bands, indices of the catalogue (listed as features or not) and any other feature; `name@date` is one date of
    either. A recipe with components must go through `fit_recipe`.
    """
    return _Builder(settings, tuple(roles), facts).build()


@dataclass(frozen=True, slots=True)
class _Plan:
    """A feature that is asked for: the key it stands under, the layers it is made of, and how its step is made."""

    where: str
    needs: Mapping[str, str]  # name: what to show below a message that it is missing
    make: Callable[[], Step]


class _Builder:
    """Collects features, the steps that they rest on, and problems."""

    def __init__(self, settings: FeatureSettings, roles: tuple[str, ...], facts: SceneFacts) -> None:
        self.settings = settings
        self.roles = roles
        self.facts = facts
        self.names: dict[str, None] = {}
        self.plans: dict[str, _Plan] = {}
        self.steps: dict[str, Step] = {}  # by each of their outputs
        self.problems: list[Problem] = []
        self._under_way: list[str] = []

    def build(self) -> Recipe:
        self._bands()
        self._layers()
        self._plan_indices()
        self._plan_formulas()
        self._plan_neighbourhood()
        self._plan_absorption()
        self._plan_components()
        for name in tuple(self.plans):
            self._make(name)
        if not self.names and not self.problems:
            self._problem(
                "nothing is listed, so there are no features", "features", 'write bands = "all", for instance'
            )
        smoothing = self._smoothing()
        if self.problems:
            raise SettingsError(list(dict.fromkeys(self.problems)))
        steps = dict.fromkeys(self.steps.values())  # a step of several outputs stands there once
        return Recipe(tuple(self.names), tuple(steps), smoothing)

    def _problem(self, what: str, where: str, fix: str = "") -> None:
        self.problems.append(Problem(what, where, fix))

    def _is_bad(self, role: str) -> bool:
        nm = self.facts.wavelengths_nm.get(role)
        return nm is not None and any(low <= nm <= high for low, high in self.settings.bad_bands_nm)

    def _good_bands(self, date: str | None = "") -> list[str]:
        """Bands outside the bad ranges, without a date, of one, or (None) of all."""
        return [
            role
            for role in self.roles
            if role not in self.facts.ancillary
            and not self._is_bad(role)
            and (date is None or role.partition("@")[2] == date)
        ]

    def _wavelengths(self, date: str) -> dict[str, float]:
        """Wavelength of each good band of a date that has one."""
        known = self.facts.wavelengths_nm
        return {role: known[role] for role in self._good_bands(date) if role in known}

    def _bands(self) -> None:
        wanted = self.settings.bands
        if isinstance(wanted, str):
            self.names |= dict.fromkeys(self._good_bands("" if wanted == "all" else None))
        else:
            self._as_they_are(wanted, "features.bands")

    def _layers(self) -> None:
        self._as_they_are(self.settings.layers, "features.layers")

    def _as_they_are(self, wanted: list[str], where: str) -> None:
        for role in wanted:
            if role not in self.roles:
                kind = "band" if where == "features.bands" else "layer"
                self._problem(f"the scene has no {kind} {role!r}", where, _nearest(role, self.roles))
            elif role in self.names:
                self._problem(f"{role!r} is listed twice", where, "list it once")
            self.names[role] = None

    def _plan(self, names: Iterable[str], plan: _Plan, *, own_name: bool = True) -> None:
        """Enter a feature under its names, unless one is taken."""
        for name in names:
            taken = ""
            if name in self.roles:
                taken = "a layer of the scene"
            elif name in self.plans:
                taken = f"a feature of {self.plans[name].where}"
            elif name in CONSTANTS:
                taken = "a constant"
            elif own_name and name in index_catalogue():
                taken = "an index of the catalogue"
            if taken:
                self._problem(f"{name!r} is already the name of {taken}", plan.where, "give one of them another name")
            else:
                self.plans[name] = plan
                self.names[name] = None

    def _plan_indices(self) -> None:
        where = "features.indices"
        for written in self.settings.indices:
            name = written.strip()
            base, _, date = name.partition("@")
            if find_index(base) is None:
                self._problem(f"there is no index {written!r} in the catalogue", where, nearest_index(base))
                continue
            name = base.casefold() + (f"@{date}" if date else "")
            if name in self.plans:
                self._problem(f"index {name!r} is listed twice", where, "list it once")
            else:
                self._plan([name], self._index_plan(name, where), own_name=False)

    def _index_plan(self, name: str, where: str) -> _Plan:
        base, _, date = name.partition("@")
        index = find_index(base)
        assert index is not None, name
        formula = index.formula.on_date(date) if date else index.formula
        return _Plan(where, dict.fromkeys(formula.names, ""), partial(FormulaStep, name, formula.text))

    def _plan_formulas(self) -> None:
        for name, text in self.settings.formulas.items():
            where = f"features.formulas.{name}"
            try:
                formula = parse_formula(text)
            except FormulaError as error:
                self._problem(str(error), where)
                continue
            if not formula.names:
                self._problem(f"the formula {text!r} uses no layer and no feature", where, "a feature differs by pixel")
            self._plan([name], _Plan(where, _places(formula), partial(FormulaStep, name, text)))

    def _plan_neighbourhood(self) -> None:
        textures, problems = texture_steps(self.settings.texture, self.facts)
        steps: list[tuple[str, Step]] = [*textures]
        for place, entry in enumerate(self.settings.terrain, start=1):
            made = terrain_step(entry, self.facts, f"features.terrain[{place}]")
            if isinstance(made, Problem):
                problems.append(made)
            else:
                steps.append((f"features.terrain[{place}]", made))
        self.problems += problems
        for where, step in steps:
            self._plan_step(where, step)

    def _plan_absorption(self) -> None:
        for place, entry in enumerate(self.settings.absorption, start=1):
            where = f"features.absorption[{place}]"
            made = absorption_step(entry, self._wavelengths(entry.dip.partition("@")[2]), where)
            if isinstance(made, Problem):
                self.problems.append(made)
            else:
                self._plan_step(where, made)

    def _plan_components(self) -> None:
        wanted, where = self.settings.components, "features.components"
        if wanted is None:
            return
        bands = list(self._wavelengths("")) or self._good_bands()
        of = bands if wanted.of == "bands" else wanted.of
        if len(set(of)) != len(of) or len(of) < wanted.count:
            self._problem(
                f"{wanted.count} components need as many different layers, and there are {len(set(of))}",
                f"{where}.count", "ask for fewer components, or name more layers",
            )  # fmt: skip
            return
        kind = "principal_component" if wanted.method == "principal components" else "noise_fraction"
        outputs = tuple(f"{kind}_{number}" for number in range(1, wanted.count + 1))
        self._plan_step(where, ComponentStep(outputs, tuple(of), wanted.method, standardise=wanted.of != "bands"))

    def _plan_step(self, where: str, step: Step) -> None:
        self._plan(step.outputs, _Plan(where, dict.fromkeys(step.needs, ""), lambda: step))

    def _make(self, name: str) -> None:
        """The step of a planned feature, after those that it needs."""
        plan = self.plans[name]
        if name in self.steps:
            return
        if name in self._under_way:
            loop = " -> ".join([*self._under_way[self._under_way.index(name) :], name])
            self._problem(f"these features go round in a circle: {loop}", plan.where, "break the circle")
            return
        self._under_way.append(name)
        missing = [part for part in plan.needs if not self._provide(part)]
        self._under_way.pop()
        if missing:
            self._report_missing(name, plan, missing)
        step = plan.make()
        self.steps |= dict.fromkeys(step.outputs, step)

    def _provide(self, name: str) -> bool:
        """Make sure that a layer is there for a name: one of the scene, a feature, or an index not listed as one."""
        if name in self.roles or name in self.steps:
            return True
        if name not in self.plans:
            if near := self.facts.band_near(name):
                self.steps[name] = FormulaStep(name, near)
                return True
            if name in self.settings.formulas:
                return True  # could not be read, which has been reported
            if find_index(name.partition("@")[0]) is None:
                return False
            self.plans[name] = self._index_plan(name, self.plans[self._under_way[-1]].where)
        self._make(name)
        return True

    def _report_missing(self, name: str, plan: _Plan, missing: list[str]) -> None:
        if find_index(name.partition("@")[0]) is not None:
            bands = " and ".join(map(describe_band, missing))
            self._problem(
                f"index {name!r} needs {bands}, which the scene does not have", plan.where,
                "leave the index out, or name the band in [scene.bands]",
            )  # fmt: skip
            return
        if unseen := [part for part in missing if NEAR_NM.fullmatch(part)]:
            self._problem(f"the scene does not have {describe_band(unseen[0])}{plan.needs[unseen[0]]}", plan.where)
            return
        known = [*self.roles, *self.names, *index_catalogue()]
        for part in missing:
            self._problem(
                f"there is no layer and no feature {part!r}{plan.needs[part]}", plan.where,
                _nearest(part, known, self.roles),
            )  # fmt: skip

    def _smoothing(self) -> tuple[SmoothedBand, ...]:
        """Each band with a wavelength from its neighbours along the spectrum; dates with few bands stay as they are."""
        wanted, where = self.settings.smoothing, "features.smoothing"
        if wanted is None:
            return ()
        smoothed: list[SmoothedBand] = []
        most = 0
        for date in dict.fromkeys(role.partition("@")[2] for role in self.roles):
            bands = rising(self._wavelengths(date))
            roles = one_each(bands)
            most = max(most, len(roles))
            if len(roles) < wanted.window:
                continue
            spectrum = list(roles)
            weights = dict(zip(spectrum, smoothing_weights(spectrum, wanted.window, wanted.order), strict=True))
            for role, nm in bands.items():
                needs = tuple(roles[spectrum[place]] for place in weights[nm])
                smoothed.append(SmoothedBand(role, needs, tuple(weights[nm].values())))
        if not smoothed:
            self._problem(
                f"smoothing over {wanted.window} bands needs as many of different wavelength, and there are {most}",
                where, "leave smoothing out; it is for imaging spectrometers",
            )  # fmt: skip
        return tuple(smoothed)


def _places(formula: Formula) -> dict[str, str]:
    """Each name of a formula with two lines that point at it."""
    return {name: f"\n{point_at(formula.text, position)}" for name, position in formula.positions.items()}


def _nearest(name: str, known: Iterable[str], shown: Iterable[str] | None = None) -> str:
    known = list(known)
    close = difflib.get_close_matches(name, known, n=1, cutoff=0.6)
    if close:
        return f"did you mean {close[0]!r}?"
    return f"the layers are {', '.join(known if shown is None else shown)}"
