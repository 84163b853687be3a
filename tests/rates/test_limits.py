"""Limits written differently: as roots of the equations that define them."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats
from scipy.optimize import brentq

from svyrates.rates import INTERVALS, rate_limits

RATES = st.floats(0.01, 0.99)
SIZES = st.integers(5, 5000)
EFFECTS = st.floats(0.4, 20.0)
DFS = st.integers(1, 200)
LEVELS = st.sampled_from([0.8, 0.9, 0.95, 0.99])


def _limits(method: str, p: float, n: float, n_star: float, df: float, level: float) -> list[float]:
    arrays = [np.array([float(value)]) for value in (p, n, n_star, df)]
    return [float(limit[0]) for limit in rate_limits(*arrays, method, level)]


def _defined(  # noqa: PLR0911 - one return a method
    method: str, p: float, n: int, n_star: float, df: int, level: float
) -> list[float]:
    t = stats.t.ppf((1 + level) / 2, df)
    tail = (1 - level) / 2
    if method == "wald":
        half = t * math.sqrt(p * (1 - p) / n_star)
        return [p - half, p + half]
    if method == "logit":
        centre, half = math.log(p / (1 - p)), t / math.sqrt(n_star * p * (1 - p))
        return [1 / (1 + math.exp(-centre + sign * half)) for sign in (1, -1)]
    if method == "arcsine":
        centre, half = math.asin(math.sqrt(p)), t / (2 * math.sqrt(n_star))
        return [
            math.sin(max(centre - half, 0.0)) ** 2,
            math.sin(min(centre + half, math.pi / 2)) ** 2,
        ]
    if method == "wilson":
        # Where the score statistic of the true rate just reaches t.
        def score(true: float) -> float:
            return (p - true) ** 2 * n_star - t**2 * true * (1 - true)

        return [brentq(score, 0.0, p, xtol=1e-14), brentq(score, p, 1.0, xtol=1e-14)]
    size = min(n, n_star * (stats.t.ppf((1 + level) / 2, n - 1) / t) ** 2)
    if method == "korn-graubard":
        return [
            stats.beta.ppf(tail, size * p, size * (1 - p) + 1),
            stats.beta.ppf(1 - tail, size * p + 1, size * (1 - p)),
        ]
    if method == "jeffreys":
        shape = stats.beta(size * p + 0.5, size * (1 - p) + 0.5)
        return list(shape.interval(level))
    z = stats.norm.ppf((1 + level) / 2)
    centre = (size * p + z**2 / 2) / (size + z**2)
    half = z * math.sqrt(centre * (1 - centre) / (size + z**2))
    return [max(centre - half, 0.0), min(centre + half, 1.0)]


@pytest.mark.parametrize("method", INTERVALS)
@given(p=RATES, n=SIZES, deff=EFFECTS, df=DFS, level=LEVELS)
def test_definition(method: str, p: float, n: int, deff: float, df: int, level: float) -> None:
    n_star = n / deff
    found = _limits(method, p, n, n_star, df, level)
    assert found == pytest.approx(_defined(method, p, n, n_star, df, level), abs=1e-8)


@pytest.mark.parametrize("method", INTERVALS)
@given(p=st.sampled_from([0.0, 1.0]) | st.floats(1e-6, 1 - 1e-6), n=SIZES, deff=EFFECTS, df=DFS)
def test_mirror(method: str, p: float, n: int, deff: float, df: int) -> None:
    low, high = _limits(method, p, n, n / deff, df, 0.95)
    mirrored = _limits(method, 1.0 - p, n, n / deff, df, 0.95)
    assert [low, high] == pytest.approx([1.0 - mirrored[1], 1.0 - mirrored[0]], abs=1e-7)
    if method == "jeffreys":
        # With less than about 0.3 effective successes its lower limit lies above the rate.
        assert low < high
    else:
        assert low - 1e-9 <= p <= high + 1e-9


@pytest.mark.parametrize("method", ["korn-graubard", "wald", "logit", "arcsine"])
def test_rate_of_zero_is_clopper_pearson_on_n(method: str) -> None:
    """The rule of three's exact form: 1 - 0.025^(1/n); the variance and its df play no part."""
    low, high = _limits(method, 0.0, 50, float("nan"), 3, 0.95)
    assert low == 0.0
    assert high == pytest.approx(1 - 0.025 ** (1 / 50), rel=1e-12)


def test_rate_of_zero_in_the_other_methods() -> None:
    """The sample size replaces the undefined effective size; df enter as usual."""
    n, df = 50, 12
    t = stats.t.ppf(0.975, df)
    assert _limits("wilson", 0.0, n, float("nan"), df, 0.95)[1] == pytest.approx(
        (t**2 / n) / (1 + t**2 / n)
    )
    size = n * (stats.t.ppf(0.975, n - 1) / t) ** 2
    upper = stats.beta.ppf(0.975, 0.5, size + 0.5)
    assert _limits("jeffreys", 0.0, n, float("nan"), df, 0.95) == pytest.approx([0.0, upper])


@pytest.mark.parametrize("method", INTERVALS)
def test_without_degrees_of_freedom_there_are_no_limits(method: str) -> None:
    assert np.isnan(_limits(method, 0.3, 50, 20.0, 0, 0.95)).all()
    assert np.isnan(_limits(method, float("nan"), 0, float("nan"), 5, 0.95)).all()
