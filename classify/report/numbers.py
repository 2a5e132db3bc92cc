"""Numbers as a reader meets them: as many digits as the evidence carries, and no more.

A margin keeps two significant digits and its estimate the same decimal place: 21157.76 with 6157.5 reads
21 200 ± 6 200.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass

MISSING = "–"
# Half-widths whose two arms differ by less than this share of their mean are given as one margin.
_SYMMETRIC = 0.02


@dataclass(frozen=True, slots=True)
class NumberStyle:
    """How a language writes numbers. thousands and decimal are the separators; percent follows a percentage."""

    thousands: str = "\u202f"
    decimal: str = "."
    percent_sign: str = "\u00a0%"
    to: str = "to"

    def number(self, value: float | None, decimals: int = 0) -> str:
        """`value` rounded to `decimals` places (negative: to tens, hundreds, ...), with separators."""
        if value is None or not math.isfinite(value):
            return MISSING
        text = f"{round(value, decimals):,.{max(decimals, 0)}f}"
        whole, _, rest = text.partition(".")
        whole = whole.replace(",", self.thousands).replace("-", "−")
        return f"{whole}{self.decimal}{rest}" if rest else whole

    def percent(self, share: float | None, decimals: int = 1) -> str:
        """A proportion 0..1 in per cent."""
        return MISSING if share is None else self.number(100 * share, decimals) + self.percent_sign

    def with_margin(
        self, estimate: float | None, lower: float | None, upper: float | None, unit: str = "", *,
        decimals: int | None = None,
    ) -> str:  # fmt: skip
        """An estimate with its interval: "21 200 ± 6 200 ha", or "3.1 ha (1.2 to 7.4 ha)" when it is lopsided.

        decimals: places printed; None for those that give the margin two significant digits.
        """
        tail = f"\u00a0{unit}" if unit else ""
        if estimate is None or lower is None or upper is None:
            return self.rounded(estimate) + (tail if estimate is not None else "")
        places = margin_decimals([(lower, upper)]) if decimals is None else decimals
        middle = self.number(estimate, places)
        if is_symmetric(estimate, lower, upper):
            return f"{middle}\u00a0±\u00a0{self.number((upper - lower) / 2, places)}{tail}"
        return f"{middle}{tail} ({self.number(lower, places)} {self.to} {self.number(upper, places)}{tail})"

    def rounded(self, value: float | None, digits: int = 3) -> str:
        """`value` to so many significant digits, for a number without a margin."""
        if value is None:
            return MISSING
        return self.number(value, significant_decimals(value, digits))

    def percent_range(self, lower: float, upper: float) -> str:
        """An interval of proportions in per cent: whole ones unless it is narrow."""
        places = share_decimals(lower, upper)
        return f"{self.percent(lower, places)} {self.to} {self.percent(upper, places)}"


def is_symmetric(estimate: float, lower: float, upper: float) -> bool:
    """Whether one margin describes both arms of an interval."""
    below, above = estimate - lower, upper - estimate
    return abs(above - below) <= _SYMMETRIC * (above + below) / 2


def share_decimals(lower: float, upper: float) -> int:
    """Decimals of a per cent value whose interval is lower..upper: none when it is at least one point wide."""
    return 0 if upper - lower >= 0.01 else 1


def significant_decimals(value: float, digits: int) -> int:
    """Decimal places that keep `digits` significant digits of `value` (negative: tens, hundreds, ...)."""
    if not value or not math.isfinite(value):
        return 0
    return digits - 1 - math.floor(math.log10(abs(value)))


def margin_decimals(intervals: Iterable[tuple[float | None, float | None]], digits: int = 2) -> int:
    """Decimal places for a column of estimates: those that give the narrowest interval two significant digits."""
    widths = [(u - lo) / 2 for lo, u in intervals if lo is not None and u is not None and u > lo]
    return significant_decimals(min(widths), digits) if widths else 0
