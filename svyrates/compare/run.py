"""`compare_rates`: design-adjusted differences, tests and limits for pairs of rates."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from svyrates.compare.explain import warn_if_misleading
from svyrates.compare.measures import MEASURES, Measure, Scale
from svyrates.compare.notes import comparison_notes
from svyrates.compare.pairs import PairBlock, plan_pairs
from svyrates.compare.recovered import SideLimits, recover, touching_level
from svyrates.compare.sides import Joint, read_joint
from svyrates.compare.simple import VARIANTS, SimpleVariant, sided, simple_formula, two_sided
from svyrates.compare.table import ComparisonTable
from svyrates.compare.verdict import judge
from svyrates.errors import ComparisonError, all_faults, some
from svyrates.rates.limits import t_quantile
from svyrates.rates.table import RateTable

__all__ = ["compare_rates"]

FloatArray = NDArray[np.float64]
Alternative = Literal["two-sided", "greater", "less"]
LimitsMethod = Literal["linear", "recovered"]


def compare_rates(
    rates: RateTable,
    versus: Any = None,
    *,
    within: str | Sequence[str] | None = None,
    measure: Measure = "difference",
    alternative: Alternative = "two-sided",
    null: float | None = None,
    limits: LimitsMethod = "linear",
    simple: SimpleVariant = "unweighted",
    level: float | None = None,
) -> ComparisonTable:
    """Compare rates with their full covariance, and judge the simple formula beside them.

    Parameters
    ----------
    rates : RateTable
        From `estimate_rates`.
    versus : group label, EVERYONE_ELSE, EVERYONE, or float, optional
        What each group is compared with: one group; all others together; everyone, the group
        itself included; or a fixed proportion in (0, 1). Without it every pair is compared.
    within : str or list of str, optional
        Columns held fixed: groups are compared within their levels. By default all grouping
        columns but the last. ``[]`` compares across all of them.
    measure : {"difference", "ratio", "odds_ratio"}
        Difference in proportions, ratio of proportions, or odds ratio; the two ratios are tested
        and their limits formed on the log scale.
    alternative : {"two-sided", "greater", "less"}
        "greater": the group's rate exceeds that of `versus`.
    null : float, optional
        Value of the measure under the null hypothesis; equal rates by default.
    limits : {"linear", "recovered"}
        Linear (Wald) limits, or limits recovered from the two groups' own limits, better near 0
        and 1 and in small groups. The p-value stays that of the t test.
    simple : {"unweighted", "weighted", "weights-as-counts", "kish"}
        What goes into the simple formula: unweighted rates and counts; weighted rates with the
        unweighted n, with the sum of weights as n, or with Kish's effective n.
    level : float, optional
        Confidence level; tests are at 1 - level. The table's own by default.

    Returns
    -------
    ComparisonTable

    Raises
    ------
    ComparisonError
        For groups or columns that the table does not have, and options out of range.

    Warns
    -----
    SimpleFormulaWarning
        When the simple formula would mislead about at least one comparison.

    Notes
    -----
    `V(d) = V_11 + V_22 - 2 V_12`, t on the smaller of the two groups' degrees of freedom (or the
    table's other rule). If a rate is exactly 0 or 1, its variance is undefined: limits are then
    recovered from the groups' own limits with r = 0, and p is the level at which they touch the
    null. All formulas are on the methods page.

    Examples
    --------
    >>> import warnings
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.estimate_rates(
    ...     design, outcome="cold_home", success=["often", "always"], by="sex"
    ... )
    >>> with warnings.catch_warnings():
    ...     warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
    ...     gaps = sr.compare_rates(rates)
    >>> len(gaps.to_frame())
    1

    One row for the one pair; ``gaps.explain()`` puts it into words.
    """
    if not isinstance(rates, RateTable):
        raise ComparisonError(
            f"`rates` must be a RateTable; got {type(rates).__name__}. Make one with "
            "estimate_rates(design, ...)."
        )
    level = rates.level if level is None else level
    _check(measure, alternative, null, limits, simple, level)
    held, blocks, fixed = plan_pairs(rates, versus, within)
    scale = MEASURES[measure]
    null_value = scale.unity if null is None else float(null)
    on_scale = float(np.log(null_value)) if _is_log(measure) else null_value
    settings = (measure, alternative, on_scale, limits, simple, level)
    parts = [_compare_block(rates, block, fixed, settings) for block in blocks]
    joined = {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
    table = ComparisonTable(
        held=held,
        levels=tuple(block.level for block in blocks for _ in block.group),
        group=tuple(label for block in blocks for label in block.group),
        versus=tuple(label for block in blocks for label in block.versus),
        measure=measure,
        alternative=alternative,
        null=null_value,
        limits=limits,
        variant=simple,
        level=level,
        fixed=fixed,
        rates=rates,
        blocks=tuple(blocks),
        **joined,
    )
    warn_if_misleading(table)
    return table


def _is_log(measure: str) -> bool:
    return measure != "difference"


def _check(
    measure: str, alternative: str, null: float | None, limits: str, simple: str, level: float
) -> None:
    faults: list[str] = []
    for name, value, allowed in (
        ("measure", measure, tuple(MEASURES)),
        ("alternative", alternative, ("two-sided", "greater", "less")),
        ("limits", limits, ("linear", "recovered")),
        ("simple", simple, VARIANTS),
    ):
        if value not in allowed:
            faults.append(f"{name} must be one of {some(allowed)}; got {value!r}.")
    if isinstance(level, bool) or not isinstance(level, int | float) or not 0.0 < level < 1.0:
        faults.append(f"level must be a number between 0 and 1, such as 0.95; got {level!r}.")
    elif alternative != "two-sided" and level <= 0.5:
        faults.append(f"a one-sided question needs a level above 0.5; got {level!r}.")
    if null is not None:
        low = -1.0 if measure == "difference" else 0.0
        high = 1.0 if measure == "difference" else np.inf
        number = isinstance(null, int | float | np.number) and not isinstance(null, bool)
        if not number or not low < float(null) < high:
            faults.append(
                f"null must be a number between {low:g} and {high:g} for the {measure}; got "
                f"{null!r}."
            )
    all_faults(ComparisonError, "The comparison has", faults)


def _compare_block(
    rates: RateTable,
    block: PairBlock,
    fixed: float | None,
    settings: tuple[str, str, float, str, str, float],
) -> dict[str, NDArray[Any]]:
    measure, alternative, null, limits, variant, level = settings
    scale = MEASURES[measure]
    joint = read_joint(block, fixed, rates.df_rule)
    weighted = joint.values[:2]
    slope = scale.slope(weighted)
    slope = np.where(np.isfinite(slope), slope, 0.0)
    with np.errstate(invalid="ignore"):
        estimate = scale.forward(weighted[0]) - scale.forward(weighted[1])
    variance = joint.contrast_variance(np.stack((slope[0], -slope[1], *np.zeros_like(slope))))
    df = _freedom(rates, joint, scale)
    with np.errstate(invalid="ignore", divide="ignore"):
        se = np.sqrt(variance)
        statistic = np.where(variance > 0, (estimate - null) / se, np.nan)
        correlation = joint.cov[0, 1] / np.sqrt(joint.cov[0, 0] * joint.cov[1, 1])
    usable = ~np.isnan(variance) & (fixed is None)
    correlation = np.where(usable, np.clip(correlation, -1.0, 1.0), np.nan)
    p = _p_value(statistic, df, alternative)
    side_level = level if alternative == "two-sided" else 2.0 * level - 1.0
    low, high = _limits(joint, rates, scale, estimate, se, df, correlation, limits, side_level)
    if measure == "difference":
        p = _where_certain(joint, rates, scale, p, null, alternative)
    low, high = sided(low, high, alternative)
    found = simple_formula(
        joint, measure, variant, alternative, null, level, df, rates.weights_are_relative
    )
    verdict = judge(estimate, variance, p, found, df, null, level)
    with np.errstate(invalid="ignore", divide="ignore"):
        variance_ratio = variance / found.se**2
        back = scale.back(np.stack((estimate, low, high)))
    certain = joint.certain.any(axis=0)
    if _is_log(measure):
        back = np.where(certain, np.nan, back)
    return {
        "rate": weighted[0],
        "versus_rate": weighted[1],
        "estimate": back[0],
        "se": se,
        "low": back[1],
        "high": back[2],
        "statistic": statistic,
        "df": df,
        "p": p,
        "correlation": correlation,
        "simple_estimate": found.estimate,
        "simple_se": found.se,
        "simple_low": found.low,
        "simple_high": found.high,
        "simple_p": found.p,
        "shift": found.shift,
        "shift_p": found.shift_p,
        "variance_ratio": variance_ratio,
        "simple_error_rate": found.error_rate,
        "simple_coverage": found.coverage,
        "verdict": verdict,
        "note": comparison_notes(joint, found, df, se, measure, limits),
    }


def _freedom(rates: RateTable, joint: Joint, scale: Scale) -> FloatArray:
    """The smallest df of the two sides, or Satterthwaite's of their contrast."""
    if rates.df_rule != "satterthwaite":
        return np.asarray(np.fmin(joint.side_df[0], joint.side_df[1]))
    slope = scale.slope(joint.found.rate)
    return joint.satterthwaite(slope)


def _p_value(statistic: FloatArray, df: FloatArray, alternative: str) -> FloatArray:
    both = two_sided(statistic, df)
    if alternative == "two-sided":
        return both
    toward = statistic > 0 if alternative == "greater" else statistic < 0
    return np.where(np.isnan(both), np.nan, np.where(toward, both / 2.0, 1.0 - both / 2.0))


def _side_limits(joint: Joint, rates: RateTable, scale: Scale) -> SideLimits:
    return SideLimits(
        rate=joint.values[:2],
        n=joint.n,
        variance=np.stack((joint.cov[0, 0], joint.cov[1, 1])),
        df=joint.side_df,
        is_fixed=joint.fixed is not None,
        interval=rates.interval,
        forward=scale.forward,
    )


def _limits(
    joint: Joint,
    rates: RateTable,
    scale: Scale,
    estimate: FloatArray,
    se: FloatArray,
    df: FloatArray,
    correlation: FloatArray,
    limits: str,
    side_level: float,
) -> tuple[FloatArray, FloatArray]:
    """Limits on the measure's scale; recovered ones where asked for or where a rate is certain."""
    half = t_quantile(df, side_level) * se
    low, high = estimate - half, estimate + half
    certain = joint.certain.any(axis=0)
    recovered = np.full(certain.shape, limits == "recovered") | certain
    recovered &= ~joint.undefined.any(axis=0)
    if recovered.any():
        r = np.where(np.isnan(correlation), 0.0, correlation)
        first, second = scale.forward(joint.values[0]), scale.forward(joint.values[1])
        own = _side_limits(joint, rates, scale).at(side_level)
        low_r, high_r = recover(first, second, own, r)
        low, high = np.where(recovered, low_r, low), np.where(recovered, high_r, high)
    return low, high


def _where_certain(
    joint: Joint,
    rates: RateTable,
    scale: Scale,
    p: FloatArray,
    null: float,
    alternative: str,
) -> FloatArray:
    """Where a rate is exactly 0 or 1: the level at which the recovered limits touch the null."""
    rows = np.flatnonzero(joint.certain.any(axis=0) & ~joint.undefined.any(axis=0))
    if not rows.size:
        return p
    sides = _side_limits(joint, rates, scale)
    p = p.copy()
    for row in rows:
        first, second = float(joint.values[0, row]), float(joint.values[1, row])
        level = touching_level(sides, int(row), 0.0, null, first, second)
        d = first - second
        toward = {"two-sided": True, "greater": d > null, "less": d < null}[alternative]
        one_sided = level / 2.0 if toward else 1.0 - level / 2.0
        p[row] = level if alternative == "two-sided" else one_sided
    return p
