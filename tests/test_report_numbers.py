"""Numbers as printed: right-sized, and never further from the value than half a unit of the last printed place."""

from __future__ import annotations

from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from classify.report.messages import languages, load_messages
from classify.report.numbers import NumberStyle, margin_decimals

ENGLISH = NumberStyle()


def parsed(text: str, style: NumberStyle = ENGLISH) -> float:
    """A printed number read back."""
    return float(text.replace(style.thousands, "").replace(style.decimal, ".").replace("−", "-"))


def test_published_areas_are_right_sized():
    # Olofsson et al. 2014, Remote Sensing of Environment 148, section 5 (areas and half-widths in ha, from memory).
    first = ENGLISH.with_margin(21157.76, 21157.76 - 6157.5, 21157.76 + 6157.5, "ha")
    assert first == "21\u202f200\u00a0±\u00a06\u202f200\u00a0ha"
    assert ENGLISH.with_margin(11686, 11686 - 3756, 11686 + 3756).replace("\u202f", " ") == "11 700\u00a0±\u00a03 800"


def test_lopsided_interval_is_written_out():
    assert ENGLISH.with_margin(3.14, 1.2, 7.4, "ha").replace("\u00a0", " ") == "3.1 ha (1.2 to 7.4 ha)"


def test_nothing_known_is_a_dash_and_never_nan():
    assert ENGLISH.number(None) == "–"
    assert ENGLISH.number(float("nan")) == "–"
    assert ENGLISH.with_margin(None, None, None, "ha") == "–"


@pytest.mark.parametrize("language", languages())
@given(value=st.floats(-1e9, 1e9), decimals=st.integers(-4, 4))
def test_printed_number_is_within_half_a_unit(language, value, decimals):
    style = load_messages(language).numbers
    shown = parsed(style.number(value, decimals), style)
    assert abs(Decimal(shown) - Decimal(value)) <= Decimal("0.5000001") * Decimal(10) ** -decimals


@given(estimate=st.floats(1, 1e8), share=st.floats(1e-4, 0.9))
def test_margin_keeps_two_digits_and_the_estimate_its_place(estimate, share):
    half = estimate * share
    places = margin_decimals([(estimate - half, estimate + half)])
    unit = 10.0**-places
    # Two significant digits: between 10 and 100 units of the last place.
    assert 9.999 * unit <= half <= 100.001 * unit
    middle, margin = ENGLISH.with_margin(estimate, estimate - half, estimate + half).split("\u00a0±\u00a0")
    assert abs(parsed(middle) - estimate) <= 0.5001 * unit
    assert abs(parsed(margin) - half) <= 0.5001 * unit
