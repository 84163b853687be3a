"""`estimate_rates`: from a design and a question to a table of rates."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from svyrates.design import SampleDesign
from svyrates.errors import DesignWarning, some, warn
from svyrates.rates.crude import CrudeRates
from svyrates.rates.limits import INTERVALS, Interval, rate_limits
from svyrates.rates.question import (
    Grouping,
)
from svyrates.rates.source import variances
from svyrates.rates.table import RateBlock, RateTable
from svyrates.rates.tallied import Tallied, check_design, tally_question

__all__ = ["estimate_rates"]

FloatArray = NDArray[np.float64]
DF_RULES = ("domain", "design", "satterthwaite", "scheme")


def estimate_rates(
    design: SampleDesign,
    outcome: Any,
    *,
    success: Any = None,
    by: Any = None,
    where: Any = None,
    interval: Interval = "korn-graubard",
    level: float = 0.95,
    df: str | float | None = None,
    joint: bool = False,
) -> RateTable:
    """Estimate the weighted rate of an outcome in every group, with design-based variances.

    Parameters
    ----------
    design : SampleDesign
        The full sample.
    outcome : str, list of str, or dict
        A 0/1 or boolean column, or any column with `success`; a list for several outcomes; a dict
        of name -> column, (column, success values), or mask.
    success : value, list of values, or dict of outcome -> values, optional
        The answers that count as success. All other known answers count as failure; missing
        answers are left out of the rate, and counted.
    by : str, list of str, or dict, optional
        A grouping column, several (crossed), or a dict of name -> mask, whose groups may overlap.
        Without it everyone is one group.
    where : mask, optional
        The subpopulation: a boolean array, a column name or a narwhals expression. It is a domain
        inside the full design, never a filter; a null is outside, and counted.
    interval : {"korn-graubard", "wilson", "logit", "wald", "arcsine", "jeffreys", "agresti-coull"}
        Method of the confidence limits of each rate.
    level : float
        Confidence level in (0, 1).
    df : {"domain", "design", "satterthwaite", "scheme"} or float, optional
        Degrees of freedom: sampling units with members minus strata with members (the default);
        units minus strata of the whole design; Satterthwaite's from the strata's contributions;
        those of the replicate scheme (the default with replicate weights); or a number.
    joint : bool
        Tally several outcomes together, so that they can be compared with each other.

    Returns
    -------
    RateTable

    Raises
    ------
    QuestionError
        Lists every fault found in the outcome, groups, subpopulation and options.

    Notes
    -----
    `p = Σwy/Σw` over the members of a group: records of positive weight with a known outcome and
    a known group. Its variance is that of the total of the linearized variable `w(y - p)/Σw`
    over all sampling units, those without a member included (Wolter 2007, chapter 6).

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.estimate_rates(
    ...     design, outcome="cold_home", success=["often", "always"], by="tenure"
    ... )
    >>> rates.columns
    ('tenure',)

    Each row is the estimated share of a tenure group whose home is often or always cold.
    """
    faults: list[str] = []
    check_design(design)
    check_options(interval, level, df, faults)
    check_rule(design, df, faults)
    tallied = tally_question(design, outcome, success, by, where, faults, joint=joint)
    rule = usual_rule(design, df)
    parts = [
        _measure(block.source, len(block.outcomes), tallied.grouping, rule)
        for block in tallied.blocks
    ]
    return _assemble(design, tallied, parts, interval, level, rule)


def usual_rule(design: SampleDesign, df: str | float | None) -> str | float:
    """The rule asked for, or the usual one for this kind of variance."""
    return df or ("domain" if design.replicates is None else "scheme")


def check_rule(design: SampleDesign, df: str | float | None, faults: list[str]) -> None:
    """Check that the rule for the degrees of freedom fits the kind of variance."""
    replicates = design.replicates
    if replicates is None:
        if df == "scheme":
            faults.append("df='scheme' goes with replicate weights; this design has none.")
    elif df == "domain":
        faults.append(
            "df='domain' counts sampling units, which replicate weights do not show. Leave df out "
            "for the scheme's own degrees of freedom, or give a number."
        )
    elif df == "design" and not design.names_units:
        faults.append("df='design' needs the strata and clusters of the design, or give a number.")
    elif df == "satterthwaite" and replicates.stratum is None:
        faults.append(
            "df='satterthwaite' needs a jackknife with its strata; leave df out, or give a number."
        )


def check_options(interval: str, level: float, df: str | float | None, faults: list[str]) -> None:
    """Check the options that every question shares."""
    if interval not in INTERVALS:
        faults.append(f"interval must be one of {some(INTERVALS, 7)}; got {interval!r}.")
    if isinstance(level, bool) or not isinstance(level, int | float) or not 0.0 < level < 1.0:
        faults.append(f"level must be a number between 0 and 1, such as 0.95; got {level!r}.")
    number = isinstance(df, int | float | np.number) and not isinstance(df, bool)
    if df is not None and df not in DF_RULES and not (number and float(df) > 0):
        faults.append(f"df must be one of {some(DF_RULES)} or a positive number; got {df!r}.")


def _measure(
    source: CrudeRates, n_outcomes: int, grouping: Grouping, df: str | float | None
) -> dict[str, FloatArray]:
    """Everything about the rows of one block but their limits, outcomes slowest."""
    n_cells = grouping.membership.shape[1]
    cells = [
        position * n_cells + group
        for position in range(n_outcomes)
        for group in range(grouping.n_groups)
    ]
    found = source.sides(source.rows_of(cells))
    n_missing = source.units.by_cell(source.units.tally.n, answered=False)[cells]
    variance, df_values = variances(found, source, df)
    return {
        "n": found.n,
        "n_success": found.y,
        "n_missing": n_missing,
        "weighted_n": found.weighted_n,
        "rate": found.rate,
        "se": np.sqrt(variance),
        "df": df_values,
        "kish_factor": found.kish_factor,
        "unweighted_rate": found.unweighted,
        "gaps": found.stacked.spread.gaps()[: found.n.size],
        "astray": found.stacked.spread.astray()[: found.n.size],
    }


def _assemble(
    design: SampleDesign,
    tallied: Tallied,
    parts: list[dict[str, FloatArray]],
    interval: str,
    level: float,
    df_rule: str | float,
) -> RateTable:
    outcomes, grouping = tallied.outcomes, tallied.grouping
    joined: dict[str, Any] = {
        name: np.concatenate([part[name] for part in parts]) for name in parts[0]
    }
    with np.errstate(invalid="ignore", divide="ignore"):
        n_star = joined["rate"] * (1.0 - joined["rate"]) / joined["se"] ** 2
    notes = _notes(joined, interval)
    _question_replicates(joined.pop("gaps"), joined.pop("astray") > 0, joined["se"], design)
    low, high = rate_limits(joined["rate"], joined["n"], n_star, joined["df"], interval, level)
    return RateTable(
        outcomes=tuple(outcome.name for outcome in outcomes),
        success=tuple(outcome.defined for outcome in outcomes),
        columns=grouping.columns,
        groups=grouping.labels,
        low=low,
        high=high,
        notes=notes,
        interval=interval,
        level=level,
        df_rule=df_rule,
        coverage=tallied.coverage,
        weights_are_relative=design.weights_are_relative,
        overlapping=grouping.overlapping,
        blocks=tuple(RateBlock(block.outcomes, block.source) for block in tallied.blocks),
        **joined,
    )


def _question_replicates(
    gaps: FloatArray, astray: NDArray[np.bool_], se: FloatArray, design: SampleDesign
) -> None:
    """Say where replicates were left out, and where they do not lie about the estimate."""
    if design.replicates is None:
        return
    left_out = (gaps > 0) & ~np.isnan(se)
    count = design.replicates.count
    if left_out.any():
        most = round(float(gaps[left_out].max()) * count)
        warn(
            f"{int(left_out.sum())} rates are undefined in some replicates (at most {most} of "
            f"{count}): those replicates are left out of their variances, which are scaled up.",
            DesignWarning,
        )
    if astray.any():
        warn(
            f"{int(astray.sum())} of {astray.size} rates differ from the mean of their replicates "
            "by more than the replicates differ from each other. Are these the columns that belong "
            "to this weight, and all of them? Standard errors cannot be trusted before that is "
            "settled.",
            DesignWarning,
        )


def _notes(found: dict[str, FloatArray], interval: str) -> tuple[str, ...]:
    """What a reader must know about each row."""
    rate, se, n, df = found["rate"], found["se"], found["n"], found["df"]
    certain = (rate == 0.0) | (rate == 1.0)
    stand_in = " by Clopper–Pearson" if interval in ("wald", "logit", "arcsine") else ""
    conditions = [
        ((n == 0) & (found["n_missing"] == 0), "no members"),
        ((n == 0) & (found["n_missing"] > 0), "no member has a known outcome"),
        (
            certain,
            f"rate of exactly 0 or 1: no variance, limits{stand_in} use n, review it first",
        ),
        (
            ~certain & (n > 0) & np.isnan(se) & (found["gaps"] > 0),
            "the rate is undefined in too many replicates: its variance is unknown",
        ),
        (
            ~certain & (n > 0) & np.isnan(se) & (found["gaps"] == 0),
            "all members in one sampling unit: its variance cannot be estimated",
        ),
        (
            ~certain & (n > 0) & ~np.isnan(se) & ~(df > 0),
            "no degrees of freedom: one sampling unit with members in each stratum, no limits",
        ),
        (~certain & (se == 0.0), "the standard error is zero"),
    ]
    notes = [[text for flag, text in conditions if flag[row]] for row in range(rate.size)]
    return tuple("; ".join(row) for row in notes)
