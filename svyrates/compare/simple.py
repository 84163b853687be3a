"""The simple formula, and what it would really do under the survey's design.

Two independent simple random samples: pooled standard error for the test, unpooled for the
interval. Its common misuses are variants of the counts and rates put into it.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, get_args

import numpy as np
from numpy.typing import NDArray
from scipy import special

from svyrates.compare.measures import MEASURES, Scale
from svyrates.compare.sides import Joint

__all__ = ["VARIANTS", "SimpleFormula", "SimpleVariant", "simple_formula", "two_sided"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
SimpleVariant = Literal["unweighted", "weighted", "weights-as-counts", "kish"]
VARIANTS: tuple[str, ...] = get_args(SimpleVariant)

# Common practice, not a published standard.
ENOUGH_VARIANCE = 10.0
SMALL_SHARE = 0.05


@dataclass(frozen=True, slots=True)
class SimpleFormula:
    """What the simple formula says, and what it would do; all arrays (pairs,).

    Attributes
    ----------
    estimate, low, high : on the measure itself
    se : unpooled standard error, on the measure's scale (log for ratios)
    p : p-value of its test
    on_scale : its estimate on the measure's scale
    shift, shift_p : its estimate minus the weighted one on that scale, and the shift's p-value
    s_u : true standard deviation of its estimate under the design; NaN where undefined
    error_rate : how often its test rejects where the two population rates are equal
    coverage : how often its interval holds the difference that the weights estimate
    few, large_share : usual conditions that fail: np(1-p) under 10; 5% or more of the population
    """

    estimate: FloatArray
    se: FloatArray
    low: FloatArray
    high: FloatArray
    p: FloatArray
    on_scale: FloatArray
    shift: FloatArray
    shift_p: FloatArray
    s_u: FloatArray
    error_rate: FloatArray
    coverage: FloatArray
    few: BoolArray
    large_share: BoolArray


@dataclass(frozen=True, slots=True)
class _Ingredients:
    rate: FloatArray
    n: FloatArray
    unweighted: bool


def _ingredients(joint: Joint, variant: str) -> _Ingredients:
    if variant == "unweighted":
        return _Ingredients(joint.values[2:], joint.n, True)
    sizes = {
        "weighted": joint.n,
        "weights-as-counts": joint.weighted_n,
        "kish": joint.n / joint.kish,
    }
    return _Ingredients(joint.values[:2], sizes[variant], False)


def two_sided(statistic: FloatArray, df: FloatArray) -> FloatArray:
    """Two-sided p-value of Student's t; the normal's at infinite df, NaN without df."""
    size = -np.abs(statistic)
    with np.errstate(invalid="ignore"):
        usable = df > 0
    tail = special.stdtr(np.where(usable & np.isfinite(df), df, 1.0), size)
    tail = np.where(np.isinf(df), special.ndtr(size), tail)
    return np.where(usable, np.minimum(2.0 * tail, 1.0), np.nan)


def simple_formula(
    joint: Joint,
    measure: str,
    variant: str,
    alternative: str,
    null: float,
    level: float,
    df: FloatArray,
    weights_are_relative: bool,
) -> SimpleFormula:
    """Apply the simple formula to every pair and work out its real behaviour.

    Parameters
    ----------
    joint : both sides of every pair
    measure, variant, alternative : as in `compare_rates`
    null : null value on the measure's scale
    level : confidence level
    df : (pairs,) degrees of freedom of the design-based comparison
    weights_are_relative : whether the population is unknown
    """
    scale = MEASURES[measure]
    used = _ingredients(joint, variant)
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        on_scale = scale.forward(used.rate[0]) - scale.forward(used.rate[1])
        pooled_se, se = _standard_errors(used, joint.fixed, scale)
        usual = null == 0.0
        in_points = used.rate[0] - used.rate[1]
        statistic = in_points / pooled_se if usual else (on_scale - null) / se
        statistic = np.where(np.isfinite(statistic), statistic, np.nan)
        p = normal_tail(statistic, alternative)
        z = special.ndtri(0.5 + level / 2.0) if alternative == "two-sided" else special.ndtri(level)
        low, high = sided(on_scale - z * se, on_scale + z * se, alternative)
    shift, shift_p, b, s_u = _shift(joint, scale, used, level, df)
    with np.errstate(invalid="ignore", divide="ignore"):
        if usual:
            _, _, b_points, _ = _shift(joint, MEASURES["difference"], used, level, df)
            s_null = _null_deviation(joint, used)
            error_rate = _rejection(z, pooled_se, b_points, s_null, alternative)
        else:
            error_rate = _rejection(z, se, b, s_u, alternative)
        coverage = _coverage(z, se, b, s_u, alternative)
    few, large = _conditions(joint, weights_are_relative)
    return SimpleFormula(
        scale.back(on_scale), se, scale.back(low), scale.back(high), p, on_scale,
        shift, shift_p, s_u, error_rate, coverage, few, large,
    )  # fmt: skip


def _conditions(joint: Joint, weights_are_relative: bool) -> tuple[BoolArray, BoolArray]:
    """Pairs where a group has np(1 - p) under 10, or is 5% or more of its population."""
    groups = 1 if joint.fixed is not None else 2
    n, rate = joint.n[:groups], joint.values[2 : 2 + groups]
    with np.errstate(invalid="ignore", divide="ignore"):
        few = (n * rate * (1.0 - rate) < ENOUGH_VARIANCE).any(axis=0)
        large = (n / joint.weighted_n[:groups] >= SMALL_SHARE).any(axis=0)
    return np.asarray(few), np.asarray(large & (not weights_are_relative))


def normal_tail(statistic: FloatArray, alternative: str) -> FloatArray:
    """p-value of a standard normal statistic."""
    if alternative == "two-sided":
        return np.asarray(np.minimum(2.0 * special.ndtr(-np.abs(statistic)), 1.0))
    return np.asarray(special.ndtr(-statistic if alternative == "greater" else statistic))


def sided(low: FloatArray, high: FloatArray, alternative: str) -> tuple[FloatArray, FloatArray]:
    """Open the side of the limits that a one-sided question does not ask about."""
    defined = np.isfinite(low) & np.isfinite(high)
    if alternative == "greater":
        return low, np.where(defined, np.inf, np.nan)
    if alternative == "less":
        return np.where(defined, -np.inf, np.nan), high
    return low, high


def _standard_errors(
    used: _Ingredients, fixed: float | None, scale: Scale
) -> tuple[FloatArray, FloatArray]:
    """Pooled (or null) standard error of the difference, and unpooled one on the scale."""
    rate, n = used.rate, used.n
    slope = scale.slope(rate)
    # Undefined slopes at 0 and 1 leave NaN behind, which is the answer there.
    each = slope**2 * rate * (1.0 - rate) / n
    if fixed is not None:
        return np.sqrt(fixed * (1.0 - fixed) / n[0]), np.sqrt(each[0])
    pooled = pooled_rate(rate, n)
    return np.sqrt(pooled * (1.0 - pooled) * (1.0 / n[0] + 1.0 / n[1])), np.sqrt(each[0] + each[1])


def pooled_rate(rate: FloatArray, n: FloatArray) -> FloatArray:
    """`(n_1 r_1 + n_2 r_2)/(n_1 + n_2)`."""
    return np.asarray((n * rate).sum(axis=0) / n.sum(axis=0))


def _shift(
    joint: Joint, scale: Scale, used: _Ingredients, level: float, df: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Shift, its p-value, the bias counted (with its sign) and the true standard deviation.

    The bias counts only where the shift test rejects: an insignificant shift would blame the
    weights for noise. `b² = max(0, shift² - V(shift))`.
    """
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        values, slope = scale.forward(joint.values), scale.slope(joint.values)
        weighted = values[0] - values[1]
        plain = values[2] - values[3]
        slope = np.where(np.isfinite(slope), slope, 0.0)
    nothing = np.zeros_like(weighted)
    of_p = np.stack((slope[0], -slope[1], nothing, nothing))
    of_u = np.stack((nothing, nothing, slope[2], -slope[3]))
    if not used.unweighted:
        s_u = np.sqrt(joint.contrast_variance(of_p))
        undefined = np.isnan(s_u)
        return np.where(undefined, np.nan, 0.0), np.full_like(s_u, np.nan), nothing, s_u
    s_u = np.sqrt(joint.contrast_variance(of_u))
    variance = joint.contrast_variance(of_u - of_p)
    with np.errstate(invalid="ignore", divide="ignore"):
        shift = plain - weighted
        # Rounding alone separates the two where all weights are equal.
        shift = np.where(np.abs(shift) < 1e-12 * (np.abs(plain) + np.abs(weighted)), 0.0, shift)
        statistic = np.where(shift == 0.0, 0.0, shift / np.sqrt(variance))
    shift_p = np.where(np.isfinite(statistic), two_sided(statistic, df), np.nan)
    counted = shift_p < 1.0 - level
    b = np.where(counted, np.sqrt(np.maximum(shift**2 - variance, 0.0)), 0.0)
    return shift, shift_p, np.copysign(b, shift), s_u


def _null_deviation(joint: Joint, used: _Ingredients) -> FloatArray:
    """`S_0`: the true standard deviation of the difference, were the two rates made equal."""
    rate = used.rate
    if joint.fixed is None:
        common = pooled_rate(rate, used.n)
    else:
        common = np.full(rate.shape[1], joint.fixed)
    a = np.sqrt(common * (1.0 - common) / (rate * (1.0 - rate)))
    weights = np.zeros((4, rate.shape[1]))
    rows = (2, 3) if used.unweighted else (0, 1)
    weights[rows[0]] = np.where(np.isfinite(a[0]), a[0], 0.0)
    weights[rows[1]] = np.where(np.isfinite(a[1]), -a[1], 0.0)
    variance = joint.contrast_variance(weights)
    certain = joint.certain.any(axis=0)
    return np.where(certain, np.nan, np.sqrt(variance))


def _rejection(
    z: float, se: FloatArray, b: FloatArray, s_null: FloatArray, alternative: str
) -> FloatArray:
    if alternative == "greater":
        return np.asarray(special.ndtr((b - z * se) / s_null))
    if alternative == "less":
        return np.asarray(special.ndtr((-b - z * se) / s_null))
    below = special.ndtr((-z * se - b) / s_null)
    return np.asarray(below + special.ndtr((-z * se + b) / s_null))


def _coverage(
    z: float, se: FloatArray, b: FloatArray, s_u: FloatArray, alternative: str
) -> FloatArray:
    if alternative == "greater":
        return np.asarray(special.ndtr((z * se - b) / s_u))
    if alternative == "less":
        return np.asarray(special.ndtr((z * se + b) / s_u))
    upper = special.ndtr((z * se - b) / s_u)
    return np.asarray(upper - special.ndtr((-z * se - b) / s_u))
