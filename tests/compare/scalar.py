"""One comparison in plain scalar arithmetic, from the formulas of the methods page.

Takes the two weighted rates, the two unweighted rates, their 4 × 4 covariance and the sizes; knows
nothing of tables, sides or arrays.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy import stats

__all__ = ["Pair", "compare"]


@dataclass
class Pair:
    """Ingredients: rates `[p1, p2, u1, u2]`, their covariance, sizes of both sides, df."""

    rates: list[float]
    cov: np.ndarray
    n: list[float]
    weighted_n: list[float]
    kish: list[float]
    df: float
    fixed: float | None = None


def _scale(measure: str, p: float) -> float:
    if measure == "difference":
        return p
    return math.log(p) if measure == "ratio" else math.log(p / (1 - p))


def _slope(measure: str, p: float) -> float:
    if measure == "difference":
        return 1.0
    return 1 / p if measure == "ratio" else 1 / (p * (1 - p))


def _t_tails(statistic: float, df: float, alternative: str) -> float:
    if alternative == "two-sided":
        return 2 * stats.t.sf(abs(statistic), df)
    return stats.t.sf(statistic if alternative == "greater" else -statistic, df)


def _z_tails(statistic: float, alternative: str) -> float:
    if alternative == "two-sided":
        return 2 * stats.norm.sf(abs(statistic))
    return stats.norm.sf(statistic if alternative == "greater" else -statistic)


def compare(  # noqa: PLR0915 - one formula after the other, as on the page
    pair: Pair,
    measure: str = "difference",
    alternative: str = "two-sided",
    null: float | None = None,
    level: float = 0.95,
    variant: str = "unweighted",
) -> dict[str, float | str]:
    """Every column of one comparison, but for recovered limits."""
    p1, p2, u1, u2 = pair.rates
    fixed = pair.fixed is not None
    usual = null is None
    h0 = 0.0 if usual else null if measure == "difference" else math.log(null)
    back = (lambda x: x) if measure == "difference" else math.exp
    s = [_slope(measure, rate) for rate in pair.rates]
    d = _scale(measure, p1) - _scale(measure, p2)
    on_p = np.array([s[0], 0 if fixed else -s[1], 0, 0])
    on_u = np.array([0, 0, s[2], 0 if fixed else -s[3]])
    variance = on_p @ pair.cov @ on_p
    se = math.sqrt(variance)
    out: dict[str, float | str] = {"se": se, "statistic": (d - h0) / se, measure: back(d)}
    out["p"] = _t_tails((d - h0) / se, pair.df, alternative)
    tail = (1 - level) / 2 if alternative == "two-sided" else 1 - level
    half = stats.t.ppf(1 - tail, pair.df) * se
    out["low"] = -math.inf if alternative == "less" else d - half
    out["high"] = math.inf if alternative == "greater" else d + half
    # The simple formula.
    if variant == "unweighted":
        r, n = [u1, u2], pair.n
    else:
        r = [p1, p2]
        n = {
            "weighted": pair.n,
            "weights-as-counts": pair.weighted_n,
            "kish": [size / k for size, k in zip(pair.n, pair.kish, strict=True)],
        }[variant]
    if fixed:
        pooled = pair.fixed
        s_pooled = math.sqrt(pooled * (1 - pooled) / n[0])
        s_simple = _slope(measure, r[0]) * math.sqrt(r[0] * (1 - r[0]) / n[0])
    else:
        pooled = (n[0] * r[0] + n[1] * r[1]) / (n[0] + n[1])
        s_pooled = math.sqrt(pooled * (1 - pooled) * (1 / n[0] + 1 / n[1]))
        s_simple = math.sqrt(
            sum(_slope(measure, r[i]) ** 2 * r[i] * (1 - r[i]) / n[i] for i in (0, 1))
        )
    d_simple = _scale(measure, r[0]) - _scale(measure, r[1])
    statistic = (r[0] - r[1]) / s_pooled if usual else (d_simple - h0) / s_simple
    out["simple_p"] = _z_tails(statistic, alternative)
    out["simple_se"] = s_simple
    out["simple_estimate"] = back(d_simple)
    z = stats.norm.ppf(1 - tail)
    out["simple_low"] = -math.inf if alternative == "less" else d_simple - z * s_simple
    out["simple_high"] = math.inf if alternative == "greater" else d_simple + z * s_simple
    for name in ("low", "high", "simple_low", "simple_high"):
        value = float(out[name])
        out[name] = (
            (0.0 if value < 0 else value)
            if math.isinf(value) and measure != "difference"
            else (back(value) if not math.isinf(value) else value)
        )
    out["variance_ratio"] = variance / s_simple**2
    # What it would really do.
    b, shift, shift_p = 0.0, 0.0, math.nan
    s_u = se
    if variant == "unweighted":
        shift, shift_p, b = _bias(pair, on_u - on_p, d_simple - d, level)
        s_u = math.sqrt(on_u @ pair.cov @ on_u)
    out |= {"shift": shift, "shift_p": shift_p}
    if usual:
        b_points = 0.0
        if variant == "unweighted":
            w = np.array([-1, 0 if fixed else 1, 1, 0 if fixed else -1])
            b_points = _bias(pair, w, (u1 - u2) - (p1 - p2), level)[2]
        where = (2, 3) if variant == "unweighted" else (0, 1)
        a = [math.sqrt(pooled * (1 - pooled) / (r[i] * (1 - r[i]))) for i in (0, 1)]
        weights = np.zeros(4)
        weights[where[0]] = a[0]
        weights[where[1]] = 0 if fixed else -a[1]
        s_0 = math.sqrt(weights @ pair.cov @ weights)
        out["simple_error_rate"] = _error(z, s_pooled, b_points, s_0, alternative)
    else:
        out["simple_error_rate"] = _error(z, s_simple, b, s_u, alternative)
    cdf = stats.norm.cdf
    out["simple_coverage"] = {
        "two-sided": cdf((z * s_simple - b) / s_u) - cdf((-z * s_simple - b) / s_u),
        "greater": cdf((z * s_simple - b) / s_u),
        "less": cdf((z * s_simple + b) / s_u),
    }[alternative]
    out["verdict"] = _verdict(out, d - h0, d_simple - h0, s_u / s_simple, pair.df, level)
    return out


def _bias(
    pair: Pair, weights: np.ndarray, shift: float, level: float
) -> tuple[float, float, float]:
    variance = weights @ pair.cov @ weights
    p = 2 * stats.t.sf(abs(shift) / math.sqrt(variance), pair.df)
    b = math.sqrt(max(0.0, shift**2 - variance)) if p < 1 - level else 0.0
    return shift, p, math.copysign(b, shift)


def _error(z: float, se: float, b: float, s_0: float, alternative: str) -> float:
    cdf = stats.norm.cdf
    return {
        "two-sided": cdf((-z * se - b) / s_0) + cdf((-z * se + b) / s_0),
        "greater": cdf((b - z * se) / s_0),
        "less": cdf((-b - z * se) / s_0),
    }[alternative]


def _verdict(
    out: dict[str, float | str], d: float, d_simple: float, ratio: float, df: float, level: float
) -> str:
    alpha = 1 - level
    design, simple = float(out["p"]) < alpha, float(out["simple_p"]) < alpha
    shifted = float(out["shift_p"]) < alpha
    if d * d_simple < 0 and (design or simple) and shifted:
        return "opposite"
    if simple != design:
        return "false-alarm" if simple else "missed"
    if shifted:
        return "shifted"
    coverage = float(out["simple_coverage"])
    low, high = stats.chi2.ppf([alpha / 2, 1 - alpha / 2], df)
    if abs(coverage - level) > 0.025 and not low <= df * ratio**2 <= high:
        return "overconfident" if coverage < level else "underconfident"
    return "agrees"
