"""`compare_rates`: design-adjusted differences, tests and limits for pairs of rates."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from svyrates.compare.conclusions import conclusions
from svyrates.compare.explain import warn_if_misleading
from svyrates.compare.families import Family, Tests, adjusted
from svyrates.compare.hypothesis import Alternative, Hypothesis, read_hypothesis
from svyrates.compare.measures import MEASURES, Measure, Scale
from svyrates.compare.multiplicity import MULTIPLICITY, Multiplicity
from svyrates.compare.notes import comparison_notes
from svyrates.compare.pairs import PairBlock, plan_pairs
from svyrates.compare.recovered import SideLimits, recover, touching_level
from svyrates.compare.sides import Joint, read_joint
from svyrates.compare.simple import VARIANTS, SimpleVariant, simple_formula
from svyrates.compare.table import ComparisonTable
from svyrates.compare.verdict import judge
from svyrates.errors import ComparisonError, all_faults, some
from svyrates.rates.limits import t_p_value, t_quantile
from svyrates.rates.table import RateTable

__all__ = ["compare_rates"]

FloatArray = NDArray[np.float64]
LimitsMethod = Literal["linear", "recovered"]


def compare_rates(
    rates: RateTable,
    versus: Any = None,
    *,
    within: str | Sequence[str] | None = None,
    measure: Measure = "difference",
    alternative: Alternative = "two-sided",
    null: float | None = None,
    margin: float | tuple[float, float] | None = None,
    limits: LimitsMethod = "linear",
    multiplicity: Multiplicity = "none",
    family: Family = "level",
    seed: int = 1,
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
    measure : {"difference", "ratio", "odds_ratio", "relative_difference"}
        Difference in proportions, ratio of proportions, odds ratio, or ratio less one; all but the
        first are tested and their limits formed on the log scale.
    alternative : str
        ``"two-sided"``; ``"greater"`` or ``"less"`` than `versus`; ``"equivalent"`` within a margin
        (two one-sided tests, limits at 1 - 2α); ``"not-lower"`` or ``"not-higher"`` than `versus`
        by a margin (non-inferiority where a high, or a low, rate is good).
    null : float, optional
        Value of the measure under the null hypothesis; equal rates by default.
    margin : float or (float, float), optional
        For the last three alternatives: 0.05 is 5 percentage points either way; for a ratio 1.25 is
        from 1/1.25 to 1.25.
    limits : {"linear", "recovered"}
        Linear (Wald) limits, or limits recovered from the two groups' own limits, better near 0
        and 1 and in small groups. The p-value stays that of the t test.
    multiplicity : str
        ``"none"``, ``"bonferroni"``, ``"sidak"``, ``"holm"``, ``"hochberg"``,
        ``"benjamini-hochberg"``, ``"benjamini-yekutieli"``, or ``"max-t"``, which uses the
        correlations of the rates. Adjusted p-values, and for Bonferroni, Šidák and max-t also
        simultaneous limits, stand beside the others.
    family : {"level", "table"}
        Which comparisons are adjusted together: those within one level of the columns held fixed,
        or all of the table.
    seed : int
        Seed of the draws behind "max-t".
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
    asked = _check(
        measure, alternative, null, margin, level, (limits, simple, multiplicity, family)
    )
    held, blocks, fixed = plan_pairs(rates, versus, within)
    scale = MEASURES[measure]
    settings = (measure, asked, limits, simple)
    parts, tests = [], []
    for block in blocks:
        part, found = _compare_block(rates, block, fixed, settings)
        parts.append(part)
        tests.append(found)
    joined = {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
    many = adjusted(tests, asked, multiplicity, family, seed)
    low, high = (scale.back(many.low), scale.back(many.high))
    certain = np.isnan(joined["estimate"])
    table = ComparisonTable(
        held=held,
        levels=tuple(block.level for block in blocks for _ in block.group),
        group=tuple(label for block in blocks for label in block.group),
        versus=tuple(label for block in blocks for label in block.versus),
        p_adjusted=many.p,
        simultaneous_low=np.where(certain, np.nan, low),
        simultaneous_high=np.where(certain, np.nan, high),
        conclusion=conclusions(asked, alternative, many.p, many.equality_p),
        measure=measure,
        alternative=alternative,
        null=float(scale.back(np.asarray(asked.null))),
        margin=(
            (float(scale.back(np.asarray(asked.low))), float(scale.back(np.asarray(asked.high))))
            if margin is not None
            else None
        ),
        limits=limits,
        multiplicity=multiplicity,
        family=family,
        variant=simple,
        level=level,
        fixed=fixed,
        rates=rates,
        blocks=tuple(blocks),
        **joined,
    )
    warn_if_misleading(table)
    return table


def _check(
    measure: str, alternative: str, null: Any, margin: Any, level: Any, options: tuple[str, ...]
) -> Hypothesis:
    faults: list[str] = []
    asked = read_hypothesis(measure, alternative, null, margin, level, faults)
    for name, value, allowed in zip(
        ("limits", "simple", "multiplicity", "family"),
        options,
        (("linear", "recovered"), VARIANTS, MULTIPLICITY, ("level", "table")),
        strict=True,
    ):
        if value not in allowed:
            faults.append(f"{name} must be one of {some(allowed, 8)}; got {value!r}.")
    if alternative == "equivalent" and options[2] == "max-t":
        faults.append("multiplicity='max-t' is for one test each; for equivalence take 'holm'.")
    all_faults(ComparisonError, "The comparison has", faults)
    assert asked is not None  # noqa: S101 - without faults it has been read
    return asked


def _compare_block(
    rates: RateTable,
    block: PairBlock,
    fixed: float | None,
    settings: tuple[str, Hypothesis, str, str],
) -> tuple[dict[str, NDArray[Any]], Tests]:
    measure, asked, limits, variant = settings
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
        correlation = joint.cov[0, 1] / np.sqrt(joint.cov[0, 0] * joint.cov[1, 1])
    statistic, p = asked.test(estimate, se, df)
    statistic = np.where(np.isnan(p) & ~(df > 0), _ratio(estimate - asked.low, se), statistic)
    usable = ~np.isnan(variance) & (fixed is None)
    correlation = np.where(usable, np.clip(correlation, -1.0, 1.0), np.nan)

    def limits_at(level: float) -> tuple[FloatArray, FloatArray]:
        return _limits(joint, rates, scale, estimate, se, df, correlation, limits, level)

    if not scale.is_log:
        p = _where_certain(joint, rates, scale, p, asked)
    low, high = asked.limits(*limits_at(asked.pointwise))
    found = simple_formula(joint, measure, variant, asked, df, rates.weights_are_relative)
    verdict = judge(estimate, variance, p, found, df, asked)
    with np.errstate(invalid="ignore", divide="ignore"):
        variance_ratio = variance / found.se**2
        back = scale.back(np.stack((estimate, low, high)))
    certain = joint.certain.any(axis=0)
    if scale.is_log:
        back = np.where(certain, np.nan, back)
    part = {
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
    m = joint.found.rate.size
    side_slope = scale.slope(joint.found.rate)
    side_slope = np.where(np.isfinite(side_slope), side_slope, 0.0)
    tests = Tests(
        p=p,
        equality_p=t_p_value(_ratio(estimate, se), df),
        se=se,
        df=df,
        covariance=lambda: (
            np.nan_to_num(joint.found.covariance()[:m, :m]) * np.outer(side_slope, side_slope)
        ),
        contrasts=(block.plus, block.minus),
        limits_at=limits_at,
    )
    return part, tests


def _ratio(above: FloatArray, below: FloatArray) -> FloatArray:
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(below > 0, above / below, np.nan)


def _freedom(rates: RateTable, joint: Joint, scale: Scale) -> FloatArray:
    """The smallest df of the two sides, or Satterthwaite's of their contrast."""
    if rates.df_rule != "satterthwaite":
        return np.asarray(np.fmin(joint.side_df[0], joint.side_df[1]))
    slope = scale.slope(joint.found.rate)
    return joint.satterthwaite(slope)


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
    joint: Joint, rates: RateTable, scale: Scale, p: FloatArray, asked: Hypothesis
) -> FloatArray:
    """Where a rate is exactly 0 or 1: the level at which the recovered limits touch the null."""
    rows = np.flatnonzero(joint.certain.any(axis=0) & ~joint.undefined.any(axis=0))
    if not rows.size:
        return p
    sides = _side_limits(joint, rates, scale)
    p = p.copy()
    for row in rows:
        first, second = float(joint.values[0, row]), float(joint.values[1, row])
        d = first - second

        def beyond(null: float, toward: bool, row: int = int(row)) -> float:
            level = touching_level(sides, row, 0.0, null, first, second)  # noqa: B023
            return level / 2.0 if toward else 1.0 - level / 2.0

        over = beyond(asked.low, d > asked.low)
        under = beyond(asked.high, d < asked.high)
        p[row] = asked.p_of_ends(over, under)
    return p
