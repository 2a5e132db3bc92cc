"""What a reference sample of a given size buys, before it is drawn: sizes, allocations, expected half-widths.

Every quantity to be reported (overall, user's and producer's accuracy, area) has under stratified sampling the variance
sum_h c_h (1/n_h - 1/N_h), with coefficients c_h that follow from the conjectured make-up of the strata (Cochran 1977,
"Sampling Techniques", eq. 5.6 for means and section 6.11 for ratios). All planning is arithmetic on these coefficients:
the least size for a target and Neyman's allocation n_h ~ sqrt(c_h) (Cochran 1977, eq. 5.25 and 5.26; for overall
accuracy Olofsson et al. 2014, Remote Sensing of Environment 148, eq. 13).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal, get_args

import numpy as np
from numpy.typing import NDArray
from scipy import special

from classify.errors import Problem, SampleError, raise_if_errors

Floats = NDArray[np.float64]
Measure = Literal["overall accuracy", "user's accuracy", "producer's accuracy", "area"]
Allocation = Literal["proportional", "equal", "neyman", "floor"]
ALLOCATIONS: tuple[Allocation, ...] = get_args(Allocation)
# A variance within a stratum needs two points.
FEWEST = 2


@dataclass(frozen=True, slots=True)
class PlannedStratum:
    """A stratum to be: its area in any unit, the map class it is (or None), its pixels where known, and its make-up:
    conjectured share of each reference class in it, adding up to 1."""

    name: str
    area: float
    make_up: tuple[float, ...]
    mapped_as: str | None = None
    pixels: int | None = None


@dataclass(frozen=True, slots=True)
class Quantity:
    """One quantity to be estimated: its conjectured value (areas in the unit of the strata) and the coefficients c_h of
    its variance."""

    measure: Measure
    class_name: str | None
    value: float
    coefficients: tuple[float, ...]

    @property
    def name(self) -> str:
        """As people call it: "overall accuracy", "area of Water"."""
        if self.class_name is None:
            return self.measure
        return f"{self.measure} of {self.class_name}"


@dataclass(frozen=True, slots=True)
class Design:
    """Strata and classes of a sample to be planned. level: confidence level of the half-widths."""

    strata: tuple[PlannedStratum, ...]
    classes: tuple[str, ...]
    level: float = 0.95

    @property
    def z(self) -> float:
        """Normal quantile of the confidence level."""
        return float(special.ndtri((1 + self.level) / 2))

    @property
    def quantities(self) -> tuple[Quantity, ...]:
        """Everything that an assessment reports with an interval, in its order."""
        return _quantities(self)

    def quantity(self, measure: Measure, class_name: str | None = None) -> Quantity:
        """One of them. Raises SampleError naming what there is."""
        for found in self.quantities:
            if found.measure == measure and found.class_name == class_name:
                return found
        raise SampleError(f"no {measure} of {class_name!r} can be planned for",
                          fix=f"classes are {', '.join(map(repr, self.classes))}")  # fmt: skip

    def standard_error(self, quantity: Quantity, sizes: Sequence[int]) -> float:
        """Expected standard error with `sizes` points per stratum, with the finite population correction."""
        pairs = zip(quantity.coefficients, sizes, self.strata, strict=True)
        variance = sum(c * (1 / n - _inverse(s.pixels)) for c, n, s in pairs if c > 0)
        return math.sqrt(max(variance, 0.0))

    def half_width(self, quantity: Quantity, sizes: Sequence[int]) -> float:
        """Expected half-width of the confidence interval, z times the standard error."""
        return self.z * self.standard_error(quantity, sizes)


def conjectured_make_up(areas: Sequence[float], users: Sequence[float]) -> list[tuple[float, ...]]:
    """Make-up of strata that are the map's classes, from conjectured user's accuracies.

    What is wrong in a stratum is taken to belong to the other classes in proportion to their areas: an assumption, for
    want of a pilot sample. areas, users: per class, in one order.
    """
    result = []
    for h, right in enumerate(users):
        others = np.array([0.0 if c == h else area for c, area in enumerate(areas)])
        shares = (1 - right) * others / others.sum() if others.sum() > 0 else others
        shares[h] = right if others.sum() > 0 else 1.0
        result.append(tuple(float(share) for share in shares))
    return result


def pilot_make_up(counts: NDArray[np.int64], conjecture: Sequence[Sequence[float]]) -> list[tuple[float, ...]]:
    """Make-up of strata from a pilot sample's counts (strata by reference classes), with the weight of one more point
    given to the conjecture, so that a stratum without an error in a few points is not taken to be faultless."""
    mixed = (np.asarray(counts, dtype=np.float64) + np.asarray(conjecture)) / (counts.sum(axis=1, keepdims=True) + 1)
    return [tuple(float(share) for share in row) for row in mixed]


def check_design(design: Design, where: str = "") -> None:
    """Raise SampleError listing every reason why a design cannot be planned."""
    problems = []
    for s in design.strata:
        if not (math.isfinite(s.area) and s.area > 0):
            problems.append(Problem(f"stratum {s.name!r} has no area", where, "leave it out, or merge it with another"))
        if s.pixels is not None and s.pixels < FEWEST:
            problems.append(Problem(f"stratum {s.name!r} has {s.pixels} pixels, too few to draw {FEWEST} from", where,
                                    "merge it with another"))  # fmt: skip
        if min(s.make_up) < 0 or abs(sum(s.make_up) - 1) > 1e-9:
            problems.append(Problem(f"the accuracy conjectured for {s.name!r} is not between 0 and 1", where))
    if not design.strata:
        problems.append(Problem("there are no strata to plan for", where, "classify the scene first"))
    raise_if_errors(problems, SampleError)


def allocate(design: Design, total: int, how: Allocation, *, floor: int = 50) -> tuple[int, ...]:
    """Points per stratum, adding up to `total`; never fewer than two, never more than a stratum has pixels.

    "neyman" is optimal for overall accuracy; "floor" gives each stratum `floor` points (or all of its equal share or of
    its pixels, if that is less) and the rest in proportion to area. Raises SampleError when `total` cannot be spent.
    """
    strata = design.strata
    if total < FEWEST * len(strata):
        raise SampleError(f"{total} points are too few for {len(strata)} strata",
                          fix=f"ask for at least {FEWEST * len(strata)}: two points in each stratum")  # fmt: skip
    _check_room(strata, total)
    areas = np.array([s.area for s in strata])
    lowest = np.full(len(strata), float(FEWEST))
    if how == "equal":
        weights = np.ones(len(strata))
    elif how == "neyman":
        weights = np.sqrt(np.array(design.quantity("overall accuracy").coefficients))
        weights = weights if weights.any() else areas
    else:
        weights = areas
    if how == "floor":
        room = [math.inf if s.pixels is None else s.pixels for s in strata]
        lowest = np.minimum(max(FEWEST, min(floor, total // len(strata))), room)
        return _spend(total - int(lowest.sum()), weights, np.zeros(len(strata)), design, base=lowest)
    return _spend(total, weights, lowest, design)


def least_total(design: Design, quantity: Quantity, target: float, how: Allocation | None, *, floor: int = 50) -> int:
    """Least number of points that bring the half-width of `quantity` down to `target`, two points in each stratum.

    how: the allocation used; None for the one that is best for this quantity, where the closed form answers:
    n = (sum_h sqrt(c_h))^2 / (V + sum_h c_h / N_h). Raises SampleError when not even a census would do.
    """
    variance = (target / design.z) ** 2
    if how is None:
        return max(_closed_form(design, quantity, variance), FEWEST * len(design.strata))
    low = FEWEST * len(design.strata)
    ceiling = sum(s.pixels if s.pixels is not None else 10**9 for s in design.strata)
    high = low
    while design.half_width(quantity, allocate(design, high, how, floor=floor)) > target:
        low, high = high, min(2 * high, ceiling)
        if low == high:
            raise SampleError(f"no sample brings the half-width of {quantity.name} down to {target:g}",
                              fix="ask for a wider interval")  # fmt: skip
    while low < high:
        middle = (low + high) // 2
        if design.half_width(quantity, allocate(design, middle, how, floor=floor)) <= target:
            high = middle
        else:
            low = middle + 1
    return high


def best_half_width(design: Design, quantity: Quantity, total: int) -> float:
    """The least half-width that `total` points can buy if they serve this quantity alone."""
    roots = sum(math.sqrt(c) for c in quantity.coefficients)
    correction = sum(c * _inverse(s.pixels) for c, s in zip(quantity.coefficients, design.strata, strict=True))
    return design.z * math.sqrt(max(roots**2 / total - correction, 0.0))


# --- variances ------------------------------------------------------------------------------------------------------


def _quantities(design: Design) -> tuple[Quantity, ...]:
    areas = np.array([s.area for s in design.strata])
    weights = areas / areas.sum()
    p = np.array([s.make_up for s in design.strata])
    mapped = np.array([[s.mapped_as == c for c in design.classes] for s in design.strata], dtype=np.float64)
    right = (p * mapped).sum(axis=1)
    found = [_ratio(design, "overall accuracy", None, right, np.ones_like(right), np.zeros_like(right))]
    for k, name in enumerate(design.classes):
        x = mapped[:, k]
        if x.any():
            # x is constant within strata, so that only the stratum's own correct points vary.
            found.append(_ratio(design, "user's accuracy", name, p[:, k] * x, x, np.zeros_like(x)))
    for k, name in enumerate(design.classes):
        if weights @ p[:, k] > 0:
            found.append(_ratio(design, "producer's accuracy", name, p[:, k] * mapped[:, k], p[:, k], mapped[:, k]))
    total = float(areas.sum())
    for k, name in enumerate(design.classes):
        coefficients = weights**2 * p[:, k] * (1 - p[:, k]) * total**2
        found.append(Quantity("area", name, float(weights @ p[:, k]) * total, tuple(coefficients)))
    return tuple(found)


def _ratio(  # noqa: PLR0917 - the parts of a ratio
    design: Design, measure: Measure, name: str | None, y: Floats, x: Floats, mapped: Floats
) -> Quantity:
    """R = Y / X with d = y - R x by stratum; y and x are shares of indicator variables. Where the denominator itself is
    sampled (producer's accuracy), d is 1 - R or -R on the points of the class, as they are mapped right or not."""
    areas = np.array([s.area for s in design.strata])
    weights = areas / areas.sum()
    X = float(weights @ x)
    R = float(weights @ y) / X
    sampled = measure == "producer's accuracy"
    spread = np.where(mapped > 0, 1 - R, R) ** 2 * x * (1 - x) if sampled else y * (1 - y)
    return Quantity(measure, name, R, tuple((weights**2 * spread / X**2).tolist()))


def _closed_form(design: Design, quantity: Quantity, variance: float) -> int:
    roots = sum(math.sqrt(c) for c in quantity.coefficients)
    correction = sum(c * _inverse(s.pixels) for c, s in zip(quantity.coefficients, design.strata, strict=True))
    # Rounded up, but a value that is whole but for the last digits of floating point stays.
    return math.ceil(roots**2 / (variance + correction) - 1e-9)


def _inverse(pixels: int | None) -> float:
    return 1 / pixels if pixels else 0.0


# --- whole points ---------------------------------------------------------------------------------------------------


def _check_room(strata: Sequence[PlannedStratum], total: int) -> None:
    """Raise SampleError when strata have fewer pixels than points are asked for, or than two."""
    problems = [
        Problem(f"stratum {s.name!r} has {s.pixels} pixels to draw from, and {FEWEST} points are the least",
                fix="leave it out with 0 points of its own, merge it with another, or ask for fewer in reserve")
        for s in strata if s.pixels is not None and s.pixels < FEWEST
    ]  # fmt: skip
    raise_if_errors(problems, SampleError)
    there = sum(math.inf if s.pixels is None else s.pixels for s in strata)
    if total > there:
        raise SampleError(f"{total} points are asked for, but the strata have {there} pixels in all to draw from",
                          fix="ask for fewer points")  # fmt: skip


def _spend(total: int, weights: Floats, lowest: Floats, design: Design, base: Floats | None = None) -> tuple[int, ...]:
    """Whole points in proportion to `weights` on top of `base`, at least `lowest` and at most the pixels there are."""
    base = np.zeros_like(weights) if base is None else base
    room = np.array([math.inf if s.pixels is None else s.pixels for s in design.strata]) - base
    shares = _bounded(total, weights, lowest, room)
    whole = np.floor(shares + 1e-9)
    # Largest remainders get the points that rounding down left over.
    order = np.argsort(-(shares - whole), kind="stable")
    for h in order[np.isfinite(shares[order])]:
        if whole.sum() >= total:
            break
        whole[h] += whole[h] + 1 <= room[h]
    return tuple(int(n) for n in whole + base)


def _bounded(total: int, weights: Floats, lowest: Floats, room: Floats) -> Floats:
    """Shares of `total` in proportion to `weights`, with those beyond a bound set to it and the others shared anew."""
    fixed = np.full(len(weights), np.nan)
    while True:
        free = np.isnan(fixed)
        rest = total - fixed[~free].sum()
        if not free.any():
            return fixed
        given = weights[free].sum()
        shares = np.where(free, rest * (weights / given if given > 0 else 1 / free.sum()), fixed)
        excess = np.where(free, np.maximum(shares - room, 0) - np.maximum(lowest - shares, 0), 0)
        if not excess.any():
            return np.asarray(shares)
        # The side that is out by more is fixed first; fixing both at once could leave nothing to share.
        hit = free & ((shares > room) if excess.sum() > 0 else (shares < lowest))
        fixed = np.where(hit, np.where(shares > room, room, lowest), fixed)
