"""Limits for one rate and for a difference against printed tables."""

from __future__ import annotations

import numpy as np
import pytest

from svyrates.compare.recovered import recover
from svyrates.rates.limits import adjusted_size, clopper_pearson, rate_limits
from tests.outside import published

pytestmark = pytest.mark.wheel

INFINITE = np.array([np.inf])


def _wilson(successes: int, n: int) -> tuple[float, float]:
    size = np.array([float(n)])
    low, high = rate_limits(
        np.array([successes / n]), size, size, INFINITE, method="wilson", level=0.95
    )
    return float(low[0]), float(high[0])


def test_wilson() -> None:
    """Newcombe (1998), Statistics in Medicine 17, 857-872, Table I, method 3."""
    wilson, _ = published("limits_one_rate")
    for (successes, n), expected in zip(wilson["inputs"], wilson["published"], strict=True):
        assert [round(value, 4) for value in _wilson(successes, n)] == expected


def test_clopper_pearson() -> None:
    """Newcombe (1998), Table I, method 5 (from memory)."""
    _, exact = published("limits_one_rate")
    for (successes, n), expected in zip(
        exact["inputs"], exact["published"]["clopper_pearson"], strict=True
    ):
        low, high = clopper_pearson(np.array([successes / n]), np.array([float(n)]), 0.95)
        assert [round(float(low[0]), 4), round(float(high[0]), 4)] == expected


def test_wald_and_its_fall_back() -> None:
    """Newcombe (1998), Table I, method 1 (from memory); at 0 of 20 ours is Clopper-Pearson."""
    _, exact = published("limits_one_rate")
    rows = zip(
        exact["inputs"],
        exact["published"]["wald"],
        exact["published"]["clopper_pearson"],
        strict=True,
    )
    for (successes, n), wald, fall_back in rows:
        size = np.array([float(n)])
        low, high = rate_limits(np.array([successes / n]), size, size, INFINITE, "wald", 0.95)
        expected = fall_back if successes == 0 else wald
        assert round(float(high[0]), 4) == expected[1]
        if not isinstance(expected[0], str):
            assert round(float(low[0]), 4) == expected[0]


def test_recovered_limits_for_a_difference() -> None:
    """Newcombe (1998), Statistics in Medicine 17, 873-890, Table II, method 10."""
    table = published("limits_difference")
    for (x1, n1, x2, n2), expected in zip(table["inputs"], table["published"], strict=True):
        own = [np.array([limit]) for limit in (*_wilson(x1, n1), *_wilson(x2, n2))]
        low, high = recover(np.array([x1 / n1]), np.array([x2 / n2]), tuple(own), np.array([0.0]))
        assert [round(float(low[0]), 4), round(float(high[0]), 4)] == expected


def test_korn_graubard_against_a_second_implementation() -> None:
    """Korn & Graubard (1998), Survey Methodology 24; numbers computed elsewhere, not printed."""
    source = published("korn_graubard_second_implementation")
    for case in source["published"]["computed"]:
        p, n, df = (np.array([float(case[name])]) for name in ("p", "n", "df"))
        n_star = n / case["deff"]
        assert adjusted_size(n, n_star, df, 0.95)[0] == pytest.approx(case["n_star"], abs=0.01)
        low, high = rate_limits(p, n, n_star, df, "korn-graubard", 0.95)
        assert low[0] == pytest.approx(case["lower"], abs=1e-6)
        assert high[0] == pytest.approx(case["upper"], abs=1e-6)
