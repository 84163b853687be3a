"""Several comparisons at once: adjusted p-values and simultaneous limits.

Bonferroni, Šidák, Holm, Hochberg, Benjamini & Hochberg (1995) and Benjamini & Yekutieli (2001)
come from statsmodels. "max-t" is the single-step procedure on the actual correlations (Hothorn,
Bretz & Westfall 2008). All pairs of K rates have a singular correlation matrix, so the K rates are
drawn, and their pairs formed. Each draw keeps the smallest p-value of the family: with unequal
degrees of freedom every comparison then counts by its own t distribution, with the same quantile
of chi-square for all.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal, get_args

import numpy as np
from numpy.typing import NDArray
from scipy import special

__all__ = ["MULTIPLICITY", "Drawn", "Multiplicity", "adjust", "draw_smallest", "pointwise_alpha"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
Multiplicity = Literal[
    "none", "bonferroni", "sidak", "holm", "hochberg", "benjamini-hochberg",
    "benjamini-yekutieli", "max-t",
]  # fmt: skip
MULTIPLICITY: tuple[str, ...] = get_args(Multiplicity)
SIMULTANEOUS = ("bonferroni", "sidak", "max-t")
_OUTSIDE = {
    "bonferroni": "bonferroni",
    "sidak": "sidak",
    "holm": "holm",
    "hochberg": "simes-hochberg",
    "benjamini-hochberg": "fdr_bh",
    "benjamini-yekutieli": "fdr_by",
}

# With so many draws a p-value of 0.05 has a Monte Carlo error of 0.0007; large families get fewer.
_DRAWS, _LEAST_DRAWS = 100_000, 5_000
_MOST_WORK = 2_000_000_000
_AT_A_TIME = 4_000_000
_BISECTIONS = 60


@dataclass(frozen=True, slots=True)
class Drawn:
    """Comparisons whose joint distribution is known.

    Attributes
    ----------
    smallest : (draws,) sorted, the smallest p-value of each draw; empty for none
    count : comparisons in it
    """

    smallest: FloatArray
    count: int

    def reaches(self, p: FloatArray) -> FloatArray:
        """Probability that some p-value is at most `p`, at most what Bonferroni says of it."""
        if self.count < 2:
            return self.count * p
        below = np.searchsorted(self.smallest, p, side="right")
        drawn = (below + 1.0) / (self.smallest.size + 1.0)
        return np.asarray(np.minimum(drawn, self.count * p))


def draw_smallest(
    covariance: FloatArray,
    contrasts: tuple[IntArray, IntArray] | FloatArray,
    se: FloatArray,
    df: FloatArray,
    side: str,
    seed: int,
) -> Drawn:
    """Draw K rates, form the contrasts, and keep the smallest p-value of each draw.

    Parameters
    ----------
    covariance : (K, K) of the rates on the scale of the test
    contrasts : plus and minus sides of each pair, -1 for none; or weights (pairs, K)
    se, df : (pairs,) of each comparison
    side : "two-sided", "greater" or "less"
    seed : of the draws
    """
    count = se.size
    if count < 2:
        return Drawn(np.empty(0), count)
    values, vectors = np.linalg.eigh(covariance)
    kept = values > 1e-14 * max(values[-1], 0.0)
    root = vectors[:, kept] * np.sqrt(values[kept])
    n_draws = int(np.clip(_MOST_WORK // count, _LEAST_DRAWS, _DRAWS))
    random = np.random.default_rng(seed)
    kinds, of_kind = np.unique(df, return_inverse=True)
    smallest = np.empty(n_draws)
    step = max(_AT_A_TIME // max(count, root.shape[0]), 1)
    for start in range(0, n_draws, step):
        size = min(step, n_draws - start)
        rates = random.standard_normal((size, root.shape[1])) @ root.T
        spread = random.random(size)
        z = _formed(rates, contrasts) / se
        z = np.abs(z) if side == "two-sided" else z if side == "greater" else -z
        largest = [
            _tail(z[:, of_kind == k].max(axis=1), df_k, spread) for k, df_k in enumerate(kinds)
        ]
        p = np.min(largest, axis=0)
        smallest[start : start + size] = np.minimum(2.0 * p, 1.0) if side == "two-sided" else p
    return Drawn(np.sort(smallest), count)


def _formed(rates: FloatArray, contrasts: tuple[IntArray, IntArray] | FloatArray) -> FloatArray:
    if isinstance(contrasts, np.ndarray):
        return np.asarray(rates @ contrasts.T)
    plus, minus = contrasts
    return rates[:, plus] - np.where(minus >= 0, rates[:, minus], 0.0)


def _tail(z: FloatArray, df: float, spread: FloatArray) -> FloatArray:
    """Upper tail of Student's t at `z/√(χ²/df)`, χ² at its quantile `spread`."""
    if np.isinf(df):
        return np.asarray(special.ndtr(-z))
    chi = special.chdtri(df, spread) / df
    return np.asarray(special.stdtr(df, -z / np.sqrt(chi)))


def adjust(p: FloatArray, method: str, drawn: Sequence[Drawn]) -> FloatArray:
    """Adjusted p-values of one family; NaN stays NaN and does not count.

    Parameters
    ----------
    p : (tests,)
    method : one of `MULTIPLICITY`
    drawn : for "max-t", groups of tests whose joint distribution is known; other tests, and the
        groups among each other, are put together by Bonferroni's inequality
    """
    out = p.copy()
    known = ~np.isnan(p)
    if method == "none" or not known.any():
        return out
    if method == "max-t":
        out[known] = np.clip(_reaches(p[known], drawn, int(known.sum())), p[known], 1.0)
        return out
    from statsmodels.stats.multitest import multipletests

    out[known] = multipletests(p[known], method=_OUTSIDE[method])[1]
    return out


def pointwise_alpha(alpha: float, method: str, n_tests: int, drawn: Sequence[Drawn]) -> float:
    """Level of each interval at which all of them together keep 1 - alpha."""
    if n_tests == 0:
        return alpha
    if method == "bonferroni":
        return alpha / n_tests
    if method == "sidak":
        return float(-np.expm1(np.log1p(-alpha) / n_tests))
    low, high = alpha / n_tests, alpha
    for _ in range(_BISECTIONS):
        middle = (low + high) / 2.0
        if _reaches(np.array([middle]), drawn, n_tests)[0] <= alpha:
            low = middle
        else:
            high = middle
    return low


def _reaches(p: FloatArray, drawn: Sequence[Drawn], n_tests: int) -> FloatArray:
    alone = n_tests - sum(group.count for group in drawn)
    return np.asarray(sum((group.reaches(p) for group in drawn), alone * p))
