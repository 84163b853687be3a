"""Confidence limits for one rate: seven methods, each for a rate with a design-based variance.

Notation: `n_star = p(1 - p)/V` is the effective size, `df` the degrees of freedom of `V`. Two ways
of counting those exist, and each method uses one of them once:

* Student's t on `df` at `n_star` (Wald, logit, arcsine, Wilson);
* the df-adjusted size `min(n, n_star (t_{n-1} / t_df)²)` with Beta quantiles (Korn-Graubard,
  Jeffreys) or z (Agresti-Coull).

Sources: Korn & Graubard (1998), Survey Methodology 24, 193-201; Dean & Pagano (2015), Journal of
Survey Statistics and Methodology 3, 484-503; Franco, Little, Louis & Slud (2019), same journal 7,
334-364; Wilson (1927); Clopper & Pearson (1934); Agresti & Coull (1998); Brown, Cai & DasGupta
(2001).
"""

from __future__ import annotations

from typing import Literal, get_args

import numpy as np
from numpy.typing import NDArray
from scipy import special

__all__ = [
    "INTERVALS",
    "Interval",
    "adjusted_size",
    "rate_limits",
    "t_p_value",
    "t_quantile",
    "t_tail",
]

FloatArray = NDArray[np.float64]
Limits = tuple[FloatArray, FloatArray]

Interval = Literal[
    "korn-graubard", "wilson", "logit", "wald", "arcsine", "jeffreys", "agresti-coull"
]
INTERVALS: tuple[str, ...] = get_args(Interval)
_FALL_BACK = ("wald", "logit", "arcsine")


def t_quantile(df: FloatArray, level: float) -> FloatArray:
    """Two-sided quantile of Student's t; the normal's at infinite df, NaN below any df."""
    upper = 0.5 + level / 2.0
    df = np.asarray(df, dtype=np.float64)
    with np.errstate(invalid="ignore"):
        usable = df > 0
    quantile = special.stdtrit(np.where(usable & np.isfinite(df), df, 1.0), upper)
    quantile = np.where(np.isinf(df), special.ndtri(upper), quantile)
    return np.where(usable, quantile, np.nan)


def t_tail(statistic: FloatArray, df: FloatArray) -> FloatArray:
    """Upper tail of Student's t; the normal's at infinite df, NaN below any df."""
    with np.errstate(invalid="ignore"):
        usable = df > 0
    tail = special.stdtr(np.where(usable & np.isfinite(df), df, 1.0), -statistic)
    tail = np.where(np.isinf(df), special.ndtr(-statistic), tail)
    return np.where(usable, tail, np.nan)


def t_p_value(statistic: FloatArray, df: FloatArray) -> FloatArray:
    """Two-sided p-value of Student's t."""
    return np.minimum(2.0 * t_tail(np.abs(statistic), df), 1.0)


def adjusted_size(n: FloatArray, n_star: FloatArray, df: FloatArray, level: float) -> FloatArray:
    """The df-adjusted effective size of Korn & Graubard (1998), at most `n`."""
    ratio = t_quantile(n - 1.0, level) / t_quantile(df, level)
    return np.minimum(n, n_star * ratio**2)


def rate_limits(
    rate: FloatArray,
    n: FloatArray,
    n_star: FloatArray,
    df: FloatArray,
    method: str,
    level: float,
) -> Limits:
    """Limits of each rate.

    Parameters
    ----------
    rate : (k,) proportions in [0, 1]; NaN gives NaN limits
    n : (k,) unweighted sizes; NaN where unknown, and then no cap
    n_star : (k,) effective sizes p(1 - p)/V; not read where the rate is 0 or 1
    df : (k,) degrees of freedom; limits are NaN where they are 0, but for rates of 0 and 1
    method : one of `INTERVALS`
    level : confidence level in (0, 1)

    Returns
    -------
    low, high : (k,) proportions

    Notes
    -----
    At a rate of exactly 0 or 1 the variance is undefined and `n` takes the place of `n_star`:
    Korn-Graubard then uses `n` itself (the rule of NCHS Series 2 No. 175), and Wald, logit and
    arcsine, which would have no width, fall back to Clopper-Pearson on `n`.
    """
    n = np.where(np.isnan(n), np.inf, n)
    edge = (rate == 0.0) | (rate == 1.0)
    size = np.where(edge, n, n_star)
    exact = edge if method in _FALL_BACK or method == "korn-graubard" else np.zeros_like(edge)
    with np.errstate(invalid="ignore", divide="ignore"):
        low, high = _METHODS[method](rate, n, size, df, level)
        low_exact, high_exact = clopper_pearson(rate, n, level)
    low, high = np.where(exact, low_exact, low), np.where(exact, high_exact, high)
    # What the formula leaves undefined at its own end of the range is that end.
    low = np.where(edge & (rate == 0.0), 0.0, low)
    high = np.where(edge & (rate == 1.0), 1.0, high)
    undefined = np.isnan(rate) | np.isnan(low) | np.isnan(high)
    return np.where(undefined, np.nan, low), np.where(undefined, np.nan, high)


def clopper_pearson(rate: FloatArray, size: FloatArray, level: float) -> Limits:
    """Clopper-Pearson limits at a size that need not be whole."""
    tail = (1.0 - level) / 2.0
    successes = rate * size
    failures = size - successes
    low = special.betaincinv(successes, failures + 1.0, tail)
    high = special.betaincinv(successes + 1.0, failures, 1.0 - tail)
    return np.where(successes <= 0, 0.0, low), np.where(failures <= 0, 1.0, high)


def _korn_graubard(
    rate: FloatArray, n: FloatArray, n_star: FloatArray, df: FloatArray, level: float
) -> Limits:
    return clopper_pearson(rate, adjusted_size(n, n_star, df, level), level)


def _jeffreys(
    rate: FloatArray, n: FloatArray, n_star: FloatArray, df: FloatArray, level: float
) -> Limits:
    size = adjusted_size(n, n_star, df, level)
    tail = (1.0 - level) / 2.0
    first, second = rate * size + 0.5, size - rate * size + 0.5
    return special.betaincinv(first, second, tail), special.betaincinv(first, second, 1.0 - tail)


def _agresti_coull(
    rate: FloatArray, n: FloatArray, n_star: FloatArray, df: FloatArray, level: float
) -> Limits:
    size = adjusted_size(n, n_star, df, level)
    z = special.ndtri(0.5 + level / 2.0)
    larger = size + z**2
    centre = (rate * size + z**2 / 2.0) / larger
    half = z * np.sqrt(centre * (1.0 - centre) / larger)
    return np.maximum(centre - half, 0.0), np.minimum(centre + half, 1.0)


def _wald(
    rate: FloatArray, _n: FloatArray, n_star: FloatArray, df: FloatArray, level: float
) -> Limits:
    half = t_quantile(df, level) * np.sqrt(rate * (1.0 - rate) / n_star)
    return rate - half, rate + half


def _logit(
    rate: FloatArray, _n: FloatArray, n_star: FloatArray, df: FloatArray, level: float
) -> Limits:
    half = t_quantile(df, level) / np.sqrt(n_star * rate * (1.0 - rate))
    return special.expit(special.logit(rate) - half), special.expit(special.logit(rate) + half)


def _arcsine(
    rate: FloatArray, _n: FloatArray, n_star: FloatArray, df: FloatArray, level: float
) -> Limits:
    angle = np.arcsin(np.sqrt(rate))
    half = t_quantile(df, level) / (2.0 * np.sqrt(n_star))
    low, high = np.maximum(angle - half, 0.0), np.minimum(angle + half, np.pi / 2.0)
    return np.sin(low) ** 2, np.sin(high) ** 2


def _wilson(
    rate: FloatArray, _n: FloatArray, n_star: FloatArray, df: FloatArray, level: float
) -> Limits:
    t_squared = t_quantile(df, level) ** 2
    shrunk = 1.0 + t_squared / n_star
    centre = (rate + t_squared / (2.0 * n_star)) / shrunk
    spread = rate * (1.0 - rate) / n_star + t_squared / (4.0 * n_star**2)
    half = np.sqrt(t_squared * spread) / shrunk
    return np.maximum(centre - half, 0.0), np.minimum(centre + half, 1.0)


_METHODS = {
    "korn-graubard": _korn_graubard,
    "jeffreys": _jeffreys,
    "agresti-coull": _agresti_coull,
    "wald": _wald,
    "logit": _logit,
    "arcsine": _arcsine,
    "wilson": _wilson,
}
