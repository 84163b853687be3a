"""Limits for a difference recovered from the limits of its two sides.

Sources: Zou & Donner (2008), Statistics in Medicine 27, 1693-1702; with Wilson limits and r = 0 it
is method 10 of Newcombe (1998), Statistics in Medicine 17, 873-890.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from svyrates.rates.limits import rate_limits

__all__ = ["SideLimits", "recover", "touching_level"]

FloatArray = NDArray[np.float64]
Limits = tuple[FloatArray, FloatArray]

_BISECTIONS = 60


@dataclass(frozen=True, slots=True)
class SideLimits:
    """Limits of the two sides of every pair at any level, on the measure's scale.

    Attributes
    ----------
    rate, n, variance, df : (2, pairs) of the two sides; a fixed number has df infinite
    is_fixed : whether the second side is a number
    interval : method of the sides' own limits
    forward : the measure's scale
    """

    rate: FloatArray
    n: FloatArray
    variance: FloatArray
    df: FloatArray
    is_fixed: bool
    interval: str
    forward: Callable[[FloatArray], FloatArray]

    def at(self, level: float, pairs: FloatArray | slice = slice(None)) -> tuple[FloatArray, ...]:
        """Low and high of the first side, then of the second; each (pairs,)."""
        limits: list[FloatArray] = []
        for side in (0, 1):
            rate = self.rate[side, pairs]
            if side == 1 and self.is_fixed:
                limits += [self.forward(rate)] * 2
                continue
            with np.errstate(invalid="ignore", divide="ignore"):
                n_star = rate * (1.0 - rate) / self.variance[side, pairs]
            low, high = rate_limits(
                rate, self.n[side, pairs], n_star, self.df[side, pairs], self.interval, level
            )
            limits += [self.forward(low), self.forward(high)]
        return tuple(limits)


def recover(
    first: FloatArray, second: FloatArray, limits: tuple[FloatArray, ...], r: FloatArray
) -> Limits:
    """Limits for `first - second` from each side's own limits and their correlation `r`.

    Parameters
    ----------
    first, second : (pairs,) point estimates
    limits : low and high of the first, low and high of the second
    r : (pairs,) correlation of the two estimates; 0 where one is certain
    """
    low1, high1, low2, high2 = limits
    d = first - second
    with np.errstate(invalid="ignore"):
        below = (first - low1) ** 2 - 2.0 * r * (first - low1) * (high2 - second)
        below += (high2 - second) ** 2
        above = (high1 - first) ** 2 - 2.0 * r * (high1 - first) * (second - low2)
        above += (second - low2) ** 2
        return d - np.sqrt(np.maximum(below, 0.0)), d + np.sqrt(np.maximum(above, 0.0))


def touching_level(
    sides: SideLimits, pair: int, r: float, null: float, first: float, second: float
) -> float:
    """Two-sided α at which the recovered limits of one pair just touch the null; 1 if never."""
    d = first - second

    def excludes(log_alpha: float) -> bool:
        index = np.array([pair])
        limits = sides.at(-np.expm1(log_alpha), index)
        low, high = recover(np.array([first]), np.array([second]), limits, np.array([r]))
        return bool(low[0] > null if d > null else high[0] < null)

    # At α near 1 limits are narrowest; if they hold the null even there, they never let go of it.
    inside, outside = -700.0, -1e-12
    if d == null or not excludes(outside):
        return 1.0
    for _ in range(_BISECTIONS):
        middle = (inside + outside) / 2.0
        if excludes(middle):
            outside = middle
        else:
            inside = middle
    return float(np.exp((inside + outside) / 2.0))
