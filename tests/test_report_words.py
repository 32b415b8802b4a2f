"""Property: printed numbers read back to the number they stand for, and never claim none or certainty."""

from __future__ import annotations

import math

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from gravbasin.report import words

_POWERS = str.maketrans("⁻⁰¹²³⁴⁵⁶⁷⁸⁹", "-0123456789")
sizes = st.floats(1e-12, 1e18).flatmap(lambda v: st.sampled_from([v, -v]))


def read_back(text: str) -> float:
    mantissa, _, power = text.replace("−", "-").partition(" × 10")
    return float(mantissa) * 10.0 ** int(power.translate(_POWERS) or 0)


@given(sizes, st.integers(1, 6))
@settings(max_examples=200, deadline=None)
def test_number_keeps_its_digits(value: float, digits: int) -> None:
    # Half a unit of the last of `digits` significant digits is at most 5 × 10^-digits of the value.
    assert read_back(words.number(value, digits)) == pytest.approx(value, rel=5.0001 * 10.0**-digits)


@given(sizes, st.floats(1e-6, 1e6))
@settings(max_examples=200, deadline=None)
def test_error_is_printed_to_one_or_two_digits(value: float, error: float) -> None:
    shown_value, shown_error = (read_back(part) for part in words.plus_minus(value, error).split(" ± "))
    assert shown_error == pytest.approx(error, rel=0.26)  # 1.5 to 2 at worst, and 0.95 to 1.0
    assert abs(shown_value - value) <= 0.501 * max(shown_error, 1.0) + 1e-12 * abs(value)


@given(st.floats(0.0, 1.0))
def test_probability_is_never_bare_zero_or_one(p: float) -> None:
    text = words.probability(p)
    assert text not in ("0", "1", "1.0", "0.0")
    if text[0].isdigit():
        assert read_back(text) == pytest.approx(p, rel=0.051)


@given(st.floats(1e-5, 1.0), st.floats(1e-5, 1.0))
def test_small_share_never_reads_as_none(share: float, error: float) -> None:
    shown = words.percent(share, error).removesuffix(" %").split(" ± ")
    assert float(shown[0]) > 0
    assert float(shown[1]) > 0


@pytest.mark.parametrize("function", [words.number, words.signed, words.probability])
@pytest.mark.parametrize("value", [None, math.nan, math.inf])
def test_undefined_says_so(function, value) -> None:
    assert function(value) == "not defined"


def test_signs() -> None:
    assert words.signed(2.04) == "+2.0"
    assert words.signed(-2.06) == "−2.1"
    assert words.signed(-0.04) == "0.0"  # no minus zero
