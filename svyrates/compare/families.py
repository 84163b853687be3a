"""Families of tests: which comparisons are adjusted together, and by what."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from svyrates.compare.hypothesis import Hypothesis
from svyrates.compare.multiplicity import (
    SIMULTANEOUS,
    Drawn,
    adjust,
    draw_smallest,
    pointwise_alpha,
)

__all__ = ["Adjusted", "Family", "Tests", "adjusted"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
Family = Literal["level", "table"]


@dataclass(frozen=True)
class Tests:
    """Tests that share a source of rates.

    Attributes
    ----------
    p, se, df : (tests,)
    equality_p : (tests,) two-sided p-values of equal rates
    covariance : fetches the covariance of the rates on the scale of the test, (K, K)
    contrasts : plus and minus sides of each test, or weights (tests, K)
    limits_at : two-sided limits of every test at a level, on the scale of the test
    """

    p: FloatArray
    equality_p: FloatArray
    se: FloatArray
    df: FloatArray
    covariance: Callable[[], FloatArray]
    contrasts: tuple[IntArray, IntArray] | FloatArray
    limits_at: Callable[[float], tuple[FloatArray, FloatArray]]

    def drawn(self, side: str, seed: int) -> Drawn:
        """The joint distribution of those tests that have a variance."""
        usable = (self.se > 0) & (self.df > 0) & ~np.isnan(self.p)
        if isinstance(self.contrasts, np.ndarray):
            chosen: tuple[IntArray, IntArray] | FloatArray = self.contrasts[usable]
        else:
            chosen = (self.contrasts[0][usable], self.contrasts[1][usable])
        return draw_smallest(
            self.covariance(), chosen, self.se[usable], self.df[usable], side, seed
        )


@dataclass(frozen=True, slots=True)
class Adjusted:
    """Adjusted p-values and simultaneous limits (on the tests' scale), all (tests,)."""

    p: FloatArray
    equality_p: FloatArray
    low: FloatArray
    high: FloatArray


def adjusted(
    tests: Sequence[Tests], asked: Hypothesis, method: str, family: str, seed: int
) -> Adjusted:
    """Adjust the tests of each family; in the order of the tests."""
    families = [list(tests)] if family == "table" else [[one] for one in tests]
    parts = [_one_family(members, asked, method, seed) for members in families]
    return Adjusted(*(np.concatenate(each) for each in zip(*parts, strict=True)))


def _one_family(
    tests: list[Tests], asked: Hypothesis, method: str, seed: int
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    p = np.concatenate([one.p for one in tests])
    equality = np.concatenate([one.equality_p for one in tests])
    drawn = [one.drawn(asked.side, seed) for one in tests] if method == "max-t" else []
    nothing = np.full(p.size, np.nan)
    adjusted_p = adjust(p, method, drawn)
    # Only equivalence looks at equality too, and it has no joint distribution.
    adjusted_equality = equality if drawn else adjust(equality, method, drawn)
    if method not in SIMULTANEOUS:
        return adjusted_p, adjusted_equality, nothing, nothing
    n_tests = int(np.count_nonzero(~np.isnan(p)))
    alpha = pointwise_alpha(1.0 - asked.level, method, n_tests, drawn)
    level = 1.0 - alpha if asked.side == "two-sided" else 1.0 - 2.0 * alpha
    both = [asked.limits(*one.limits_at(level)) for one in tests]
    low, high = (np.concatenate(each) for each in zip(*both, strict=True))
    return adjusted_p, adjusted_equality, low, high
