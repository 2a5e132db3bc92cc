"""Confidence intervals from an estimate, its standard error, degrees of freedom and effective sample size."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

from scipy import stats

from classify.assessment.estimate import Linearised
from classify.assessment.options import IntervalName


@dataclass(frozen=True, slots=True)
class Estimate:
    """A number with its uncertainty. None where it cannot be estimated; `interval` names the method, or is None."""

    estimate: float | None
    standard_error: float | None = None
    lower: float | None = None
    upper: float | None = None
    interval: str | None = None

    def scaled(self, factor: float) -> Estimate:
        """The same in another unit: every figure times `factor` > 0."""
        figures = (self.estimate, self.standard_error, self.lower, self.upper)
        return Estimate(*(None if v is None else v * factor for v in figures), interval=self.interval)

    def to_json(self) -> dict[str, Any]:
        """Plain data."""
        return {
            "estimate": self.estimate, "standard_error": self.standard_error, "lower": self.lower,
            "upper": self.upper, "interval": self.interval,
        }  # fmt: skip


def proportion(found: Linearised, level: float, method: IntervalName) -> Estimate:
    """An estimate of a quantity in 0..1 with its interval at confidence `level`."""
    if math.isnan(found.value):
        return Estimate(None)
    value = min(max(found.value, 0.0), 1.0)
    if math.isnan(found.standard_error):
        return Estimate(value)
    chosen = _automatic(found) if method == "automatic" else method
    if chosen == "wilson":
        lower, upper = _wilson(value, found, level)
        return Estimate(value, found.standard_error, lower, upper, "wilson")
    half = _quantile(found, level, chosen) * found.standard_error
    lower, upper = value - half, value + half
    clipped = lower < 0 or upper > 1
    name = f"{chosen}, clipped to 0..1" if clipped else chosen
    return Estimate(value, found.standard_error, max(lower, 0.0), min(upper, 1.0), name)


def unbounded(found: Linearised, level: float, method: IntervalName) -> Estimate:
    """An estimate of a quantity with no natural bounds worth keeping to (kappa, differences)."""
    if math.isnan(found.value):
        return Estimate(None)
    if math.isnan(found.standard_error):
        return Estimate(found.value)
    chosen = "student" if method == "student" else "normal"
    half = _quantile(found, level, chosen) * found.standard_error
    return Estimate(found.value, found.standard_error, found.value - half, found.value + half, chosen)


def _automatic(found: Linearised) -> IntervalName:
    """Normal where the effective sample holds at least ten of each kind, else Wilson (rule of thumb, common practice)."""
    rarer = min(found.value, 1 - found.value) * found.effective_size
    return "normal" if rarer >= 10 and found.freedom >= 30 else "wilson"


def _quantile(found: Linearised, level: float, method: IntervalName) -> float:
    tail = (1 + level) / 2
    if method == "student":
        return float(stats.t.ppf(tail, max(found.freedom, 1)))
    return float(stats.norm.ppf(tail))


def _wilson(value: float, found: Linearised, level: float) -> tuple[float, float]:
    """Wilson's score interval (Wilson 1927, J. American Statistical Association 22, 209-212) on the effective size,
    which is shortened by the squared ratio of normal to t quantile (Korn & Graubard 1998)."""
    size = found.effective_size
    if math.isinf(size):
        return value, value
    z = float(stats.norm.ppf((1 + level) / 2))
    t = float(stats.t.ppf((1 + level) / 2, max(found.freedom, 1)))
    size = max(size * (z / t) ** 2, 1.0)
    centre = (value + z**2 / (2 * size)) / (1 + z**2 / size)
    half = z / (1 + z**2 / size) * math.sqrt(value * (1 - value) / size + z**2 / (4 * size**2))
    return (0.0 if value == 0 else max(centre - half, 0.0)), (1.0 if value == 1 else min(centre + half, 1.0))
