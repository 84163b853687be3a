"""Numbers against exact fractions, and at the ends of what a float can hold."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pandas as pd
import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from svyrates.words import count, fixed, p_value, percent, points, rule_or_number, significant

FINITE = st.floats(allow_nan=False, allow_infinity=False)


def _by_hand(value: float, digits: int, *, times: int = 1) -> str:
    """Round the printed digits as on paper: cut, look at what was cut, carry."""
    exact = abs(Fraction(repr(value))) * times * 10**digits
    whole, rest = divmod(exact.numerator, exact.denominator)
    whole += 2 * rest >= exact.denominator
    text = str(whole).zfill(digits + 1)
    text = f"{text[:-digits]}.{text[-digits:]}" if digits else text
    return f"-{text}" if value < 0 and whole else text


@given(FINITE, st.integers(0, 8))
@example(0.5, 0)
@example(-2.5, 0)
@example(1e300, 2)
@example(5e-324, 8)
@example(1.7976931348623157e308, 4)
def test_fixed_is_rounded_by_hand(value: float, digits: int) -> None:
    assert fixed(value, digits) == _by_hand(value, digits)


@given(FINITE, st.integers(0, 3))
@example(0.00005, 2)
@example(-0.0005, 1)
@example(1e30, 1)
def test_percentages_and_points_are_rounded_by_hand(value: float, digits: int) -> None:
    shown = _by_hand(value, digits, times=100)
    assert percent(value, digits) == f"{shown}%"
    above = value > 0 and float(shown) != 0
    assert points(value, digits) == f"{'+' if above else ''}{shown} points"


@given(FINITE)
def test_counts_differ_from_whole_numbers_by_commas_only(value: float) -> None:
    shown = count(value)
    assert shown.replace(",", "") == _by_hand(value, 0)
    groups = shown.removeprefix("-").split(",")
    assert 1 <= len(groups[0]) <= 3
    assert {len(group) for group in groups[1:]} <= {3}


@given(FINITE.filter(bool), st.integers(1, 8))
@example(9.9996, 4)
@example(0.099996, 4)
@example(1000.0, 1)
@example(5e-324, 2)
def test_significant_digits(value: float, digits: int) -> None:
    shown = significant(value, digits)
    exact = abs(Fraction(repr(value)))
    # The value of the last digit kept; whole parts are never cut.
    last = Fraction(10) ** (len(str(exact.numerator // exact.denominator)) - digits)
    if exact < 1:
        leading = next(k for k in range(1, 400) if exact * 10**k >= 1)
        last = Fraction(1, 10 ** (leading + digits - 1))
    assert abs(Fraction(shown) - Fraction(repr(value))) <= min(last, Fraction(1)) / 2
    assert "e" not in shown
    assert "." not in shown or shown[-1] not in "0."
    if "." in shown:
        assert len(shown.lstrip("-0.").replace(".", "")) <= digits


@given(st.floats(0, 1))
@example(0.0)
@example(5e-324)
@example(0.00009999999999999999)
@example(0.0001)
@example(0.9999)
@example(0.99996)
@example(math.nextafter(1.0, 0.0))
def test_a_p_value_says_what_it_is(p: float) -> None:
    shown = p_value(p)
    if p < 0.0001:
        assert shown == "<0.0001"
    elif 0.9999 < p < 1:
        assert shown == ">0.9999"
    else:
        assert shown == _by_hand(p, 4)
    assert float(shown.lstrip("<>")) > 0
    assert p == 1 or float(shown.lstrip("<>")) < 1


MISSING = [None, math.nan, np.nan, np.float32("nan"), pd.NA, pd.NaT]
SHOWN_BY = [
    lambda x: fixed(x, 2),
    lambda x: significant(x, 3),
    count,
    percent,
    points,
    p_value,
]


@pytest.mark.parametrize("value", MISSING, ids=repr)
def test_nothing_is_shown_as_a_dash_by_every_function(value: object) -> None:
    assert [show(value) for show in SHOWN_BY] == ["–"] * len(SHOWN_BY)


@pytest.mark.parametrize("value", [math.inf, np.inf, np.float32("inf")], ids=repr)
def test_infinity_is_a_sign_without_a_unit(value: float) -> None:
    assert [show(value) for show in SHOWN_BY[:5]] == ["∞"] * 5
    assert [show(-value) for show in SHOWN_BY[:5]] == ["-∞"] * 5


def test_zero_has_no_sign() -> None:
    assert [show(-0.0) for show in SHOWN_BY[:5]] == ["0.00", "0", "0", "0.0%", "0.0 points"]
    assert [show(-1e-9) for show in (count, percent, points)] == ["0", "0.0%", "0.0 points"]


def test_numbers_of_numpy_read_like_those_of_python() -> None:
    assert fixed(np.float64(2.675), 2) == "2.68"
    assert count(np.int64(-1234567)) == "-1,234,567"
    assert percent(np.float64(0.5), 0) == "50%"


@pytest.mark.parametrize(
    ("given_rule", "text"),
    [("domain", "domain"), (math.inf, "∞"), (12.0, "12"), (12.345678, "12.35"), (1500.0, "1500")],
)
def test_rules_keep_their_names_and_numbers_are_read(given_rule: str | float, text: str) -> None:
    assert rule_or_number(given_rule) == text
