"""Linear combinations of the rates of a table, with the simple formula beside them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from svyrates.compare.families import Tests
from svyrates.compare.hypothesis import Hypothesis, normal_df
from svyrates.compare.measures import MEASURES, Scale
from svyrates.compare.simple import (
    ENOUGH_VARIANCE,
    SimpleFormula,
    counted_shift,
    ingredients,
    real_coverage,
    real_error_rate,
)
from svyrates.compare.verdict import LITTLE_POWER_DF, judge
from svyrates.errors import ComparisonError
from svyrates.rates.limits import t_p_value, t_quantile
from svyrates.rates.source import SideRates, freedom_of
from svyrates.rates.table import RateTable
from svyrates.totals import ZERO, Linear

__all__ = ["SCALES", "Combined", "combine", "fetch_rates"]

FloatArray = NDArray[np.float64]
SCALES: dict[str, Scale] = {
    "rate": MEASURES["difference"],
    "log": MEASURES["ratio"],
    "logit": MEASURES["odds_ratio"],
}
_FEW_DF = 8


@dataclass(frozen=True)
class Combined:
    """Contrasts of one set of rates; arrays of shape (contrasts,).

    Attributes
    ----------
    estimate, se, low, high, statistic, df, p : on the scale of the contrast
    covariance : (contrasts, contrasts)
    simple : what the simple formula says, and would do
    verdict, note : texts
    tests : for adjusting several together
    """

    estimate: FloatArray
    se: FloatArray
    low: FloatArray
    high: FloatArray
    statistic: FloatArray
    df: FloatArray
    p: FloatArray
    covariance: FloatArray
    simple: SimpleFormula
    verdict: NDArray[np.object_]
    note: NDArray[np.object_]
    tests: Tests


def combine(
    rates: RateTable,
    rows: Sequence[int],
    weights: FloatArray,
    *,
    scale: str,
    asked: Hypothesis,
    variant: str,
) -> Combined:
    """Contrasts `weights` (contrasts, rows) of the rates in some rows of a table."""
    chosen = SCALES[scale]
    found, df_of_side, no_variance = fetch_rates(rates, rows)
    m = len(rows)
    involved = weights != 0.0
    undefined = _undefined(found)
    lost = (involved & undefined).any(axis=1)
    slope = np.concatenate((chosen.slope(found.rate), chosen.slope(found.unweighted)))
    slope = np.where(np.isfinite(slope), slope, 0.0)
    of_p = np.hstack((weights * slope[:m], np.zeros_like(weights)))
    of_u = np.hstack((np.zeros_like(weights), weights * slope[m:]))
    joint = np.nan_to_num(found.covariance())

    def variance_of(combination: FloatArray) -> FloatArray:
        variance = np.einsum("qi,ij,qj->q", combination, joint, combination)
        formed_from = combination**2 @ joint.diagonal()
        rounded = np.where(variance < ZERO * formed_from, 0.0, variance)
        return np.asarray(np.where(lost, np.nan, rounded))

    estimate = _summed(weights, chosen.forward(found.rate))
    variance = variance_of(of_p)
    df = _freedom(rates, found, df_of_side, weights * slope[:m], involved)
    se = np.sqrt(variance)
    statistic, p = asked.test(estimate, se, df)

    def limits_at(level: float) -> tuple[FloatArray, FloatArray]:
        half = t_quantile(df, level) * se
        return estimate - half, estimate + half

    low, high = asked.limits(*limits_at(asked.pointwise))
    true = (variance, variance_of(of_u), variance_of(of_u - of_p))
    simple = _simple(found, weights, chosen, asked, variant, df, estimate, true)
    tests = Tests(
        p=p,
        equality_p=t_p_value(statistic, df),
        se=se,
        df=df,
        covariance=lambda: joint[:m, :m] * np.outer(slope[:m], slope[:m]),
        contrasts=weights,
        limits_at=limits_at,
    )
    covariance = of_p @ joint @ of_p.T
    covariance[lost, :] = np.nan
    covariance[:, lost] = np.nan
    return Combined(
        estimate, se, low, high, statistic, df, p, covariance, simple,
        judge(estimate, variance, p, simple, df, asked),
        _notes(found, weights, undefined, df, se, simple, no_variance),
        tests,
    )  # fmt: skip


def fetch_rates(rates: RateTable, rows: Sequence[int]) -> tuple[SideRates, FloatArray, str]:
    """Rates of some rows with their joint covariance, and the df of each."""
    n_groups = len(rates.groups)
    block, _ = rates.block_of(rows[0] // n_groups)
    outcomes = {row // n_groups for row in rows}
    if not outcomes <= set(block.outcomes):
        raise ComparisonError(
            "The contrast combines outcomes that were tallied apart, so their covariance is "
            "unknown. Estimate them with joint=True."
        )
    cell_of = dict(
        zip(
            (o * n_groups + g for o in block.outcomes for g in range(n_groups)),
            rates.cells_of(block),
            strict=True,
        )
    )
    found = block.source.sides(block.source.rows_of([cell_of[row] for row in rows]))
    return found, freedom_of(found, block.source, rates.df_rule), block.source.no_variance


def _undefined(found: SideRates) -> NDArray[np.bool_]:
    """Rates without a variance: empty, certain, alone in a unit, or not stated."""
    variance = found.variance()
    alone = (variance == 0.0) & (found.units < 2)
    return np.asarray((found.n == 0) | found.certain | alone | np.isnan(variance))


def _summed(weights: FloatArray, values: FloatArray) -> FloatArray:
    """`weights @ values`, where a rate that is not involved may be infinite or undefined."""
    with np.errstate(invalid="ignore"):
        return np.asarray(np.where(weights == 0.0, 0.0, weights * values).sum(axis=1))


def _freedom(
    rates: RateTable,
    found: SideRates,
    df_of_side: FloatArray,
    on_scale: FloatArray,
    involved: NDArray[np.bool_],
) -> FloatArray:
    """The smallest df of the rates involved, or Satterthwaite's of the contrast."""
    if rates.df_rule == "satterthwaite":
        q, m = on_scale.shape
        spread = found.stacked.apply(Linear(np.hstack((on_scale, np.zeros((q, m)))))).spread
        return np.asarray(spread.satterthwaite(np.arange(q), np.full(q, -1)))
    return np.asarray(np.where(involved, df_of_side, np.inf).min(axis=1))


def _simple(
    found: SideRates,
    weights: FloatArray,
    scale: Scale,
    asked: Hypothesis,
    variant: str,
    df: FloatArray,
    estimate: FloatArray,
    true: tuple[FloatArray, FloatArray, FloatArray],
) -> SimpleFormula:
    """The same contrast of independent simple random samples.

    `true` holds the design-based variances of the weighted contrast, the unweighted one, and the
    shift between them.
    """
    used = ingredients(
        variant, found.rate, found.unweighted, found.n, found.weighted_n, found.kish_factor
    )
    with np.errstate(invalid="ignore", divide="ignore"):
        on_scale = _summed(weights, scale.forward(used.rate))
        each = scale.slope(used.rate) ** 2 * used.rate * (1.0 - used.rate) / used.n
        se = np.sqrt(_summed(weights**2, each))
        _, p = asked.test(on_scale, se, normal_df(se))
        low, high = asked.limits(on_scale - asked.z * se, on_scale + asked.z * se)
    if used.unweighted:
        shift, shift_p, b = counted_shift(on_scale, estimate, true[2], asked.level, df)
        s_u = np.sqrt(true[1])
    else:
        s_u = np.sqrt(true[0])
        shift, b = np.where(np.isnan(s_u), np.nan, 0.0), np.zeros_like(s_u)
        shift_p = np.full_like(s_u, np.nan)
    with np.errstate(invalid="ignore", divide="ignore"):
        error_rate = real_error_rate(asked, se, b, s_u)
        coverage = real_coverage(asked, se, b, s_u)
        thin = used.n * used.rate * (1.0 - used.rate) < ENOUGH_VARIANCE
    few = ((weights != 0.0) & thin).any(axis=1)
    return SimpleFormula(
        on_scale, se, low, high, p, on_scale, shift, shift_p, s_u, error_rate, coverage,
        few, np.zeros_like(few),
    )  # fmt: skip


def _notes(
    found: SideRates,
    weights: FloatArray,
    undefined: NDArray[np.bool_],
    df: FloatArray,
    se: FloatArray,
    simple: SimpleFormula,
    no_variance: str,
) -> NDArray[np.object_]:
    involved = weights != 0.0
    missing = np.isnan(found.variance()) & ~found.certain & (found.n != 0)
    lost = (involved & undefined).any(axis=1)
    conditions = [
        ((involved & (found.n == 0)).any(axis=1), "a group is empty"),
        ((involved & found.certain).any(axis=1), "a rate is exactly 0 or 1 and has no variance"),
        ((involved & missing).any(axis=1), no_variance),
        (~lost & ~(df > 0), "no degrees of freedom"),
        (~lost & (se == 0.0), "the standard error is zero, so there is no test"),
        (
            ~lost & (df > 0) & (df < _FEW_DF),
            "fewer than 8 degrees of freedom: the standard error is itself uncertain",
        ),
        (
            ~lost & (df >= _FEW_DF) & (df < LITTLE_POWER_DF),
            "fewer than 12 degrees of freedom: the check of the simple interval has little power",
        ),
        (simple.few, "the simple test's condition np(1 − p) ≥ 10 fails (common practice)"),
    ]
    texts = ["; ".join(text for flag, text in conditions if flag[row]) for row in range(df.size)]
    return np.array(texts, dtype=object)
