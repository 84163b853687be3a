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

from svyrates.compare.hypothesis import Hypothesis, normal_df
from svyrates.compare.measures import MEASURES, Scale
from svyrates.compare.sides import Joint
from svyrates.rates.limits import t_p_value

__all__ = [
    "VARIANTS",
    "SimpleFormula",
    "SimpleVariant",
    "counted_shift",
    "ingredients",
    "real_coverage",
    "real_error_rate",
    "simple_formula",
]

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
class Ingredients:
    """What goes into the simple formula: rates and sizes, and whether they are the raw ones."""

    rate: FloatArray
    n: FloatArray
    unweighted: bool


def ingredients(
    variant: str,
    weighted: FloatArray,
    plain: FloatArray,
    n: FloatArray,
    weighted_n: FloatArray,
    kish: FloatArray,
) -> Ingredients:
    """Rates and sizes of a variant, all of the same shape."""
    # Published rates come without unweighted ones; their readers put in what there is.
    if variant == "unweighted" and not np.isnan(plain).all():
        return Ingredients(plain, n, True)
    sizes = {
        "unweighted": n,
        "weighted": n,
        "weights-as-counts": weighted_n,
        "kish": n / kish,
    }
    return Ingredients(weighted, sizes[variant], False)


def simple_formula(
    joint: Joint,
    measure: str,
    variant: str,
    asked: Hypothesis,
    df: FloatArray,
    weights_are_relative: bool,
) -> SimpleFormula:
    """Apply the simple formula to every pair and work out its real behaviour.

    Parameters
    ----------
    joint : both sides of every pair
    measure, variant : as in `compare_rates`
    asked : the test's question
    df : (pairs,) degrees of freedom of the design-based comparison
    weights_are_relative : whether the population is unknown
    """
    scale = MEASURES[measure]
    used = ingredients(
        variant, joint.values[:2], joint.values[2:], joint.n, joint.weighted_n, joint.kish
    )
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        on_scale = scale.forward(used.rate[0]) - scale.forward(used.rate[1])
        pooled_se, se = _standard_errors(used, joint.fixed, scale)
        if asked.is_equality:
            _, p = asked.test(used.rate[0] - used.rate[1], pooled_se, normal_df(se))
        else:
            _, p = asked.test(on_scale, se, normal_df(se))
        low, high = asked.limits(on_scale - asked.z * se, on_scale + asked.z * se)
    shift, shift_p, b, s_u = _shift(joint, scale, used, asked.level, df)
    with np.errstate(invalid="ignore", divide="ignore"):
        if asked.is_equality:
            _, _, b_points, _ = _shift(joint, MEASURES["difference"], used, asked.level, df)
            s_null = _null_deviation(joint, used)
            error_rate = real_error_rate(asked, pooled_se, b_points, s_null)
        else:
            error_rate = real_error_rate(asked, se, b, s_u)
        coverage = real_coverage(asked, se, b, s_u)
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


def _standard_errors(
    used: Ingredients, fixed: float | None, scale: Scale
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
    joint: Joint, scale: Scale, used: Ingredients, level: float, df: FloatArray
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
    shift, shift_p, b = counted_shift(plain, weighted, variance, level, df)
    return shift, shift_p, b, s_u


def counted_shift(
    plain: FloatArray, weighted: FloatArray, variance: FloatArray, level: float, df: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Shift `plain - weighted`, its p-value, and the bias that counts, with its sign."""
    with np.errstate(invalid="ignore", divide="ignore"):
        shift = plain - weighted
        # Rounding alone separates the two where all weights are equal.
        shift = np.where(np.abs(shift) < 1e-12 * (np.abs(plain) + np.abs(weighted)), 0.0, shift)
        statistic = np.where(shift == 0.0, 0.0, shift / np.sqrt(variance))
    shift_p = np.where(np.isfinite(statistic), t_p_value(statistic, df), np.nan)
    counted = shift_p < 1.0 - level
    b = np.where(counted, np.sqrt(np.maximum(shift**2 - variance, 0.0)), 0.0)
    return shift, shift_p, np.copysign(b, shift)


def _null_deviation(joint: Joint, used: Ingredients) -> FloatArray:
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


def real_error_rate(
    asked: Hypothesis, se: FloatArray, b: FloatArray, deviation: FloatArray
) -> FloatArray:
    """How often the test rejects where its null hypothesis just holds.

    Parameters
    ----------
    asked : the test's question
    se : (pairs,) standard error that the test uses
    b : (pairs,) bias of its estimate, with its sign
    deviation : (pairs,) true standard deviation of its estimate there
    """
    reach = asked.z * se
    above = special.ndtr((b - reach) / deviation)
    below = special.ndtr((-b - reach) / deviation)
    if asked.side == "two-sided":
        return np.asarray(above + below)
    if asked.side == "greater":
        return np.asarray(above)
    if asked.side == "less":
        return np.asarray(below)
    # Equivalence errs where the truth is an end of the margin; the worse end counts.
    room = asked.high - asked.low
    at_low = special.ndtr((room - reach - b) / deviation) - special.ndtr((reach - b) / deviation)
    at_high = special.ndtr((-reach - b) / deviation) - special.ndtr((reach - room - b) / deviation)
    return np.asarray(np.maximum(np.maximum(at_low, at_high), np.where(np.isnan(se), np.nan, 0.0)))


def real_coverage(asked: Hypothesis, se: FloatArray, b: FloatArray, s_u: FloatArray) -> FloatArray:
    """How often the limits hold what the weights estimate."""
    z = asked.z
    if asked.side == "greater":
        return np.asarray(special.ndtr((z * se - b) / s_u))
    if asked.side == "less":
        return np.asarray(special.ndtr((z * se + b) / s_u))
    upper = special.ndtr((z * se - b) / s_u)
    return np.asarray(upper - special.ndtr((-z * se - b) / s_u))
