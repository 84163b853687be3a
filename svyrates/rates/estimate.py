"""`estimate_rates`: from a design and a question to a table of rates."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from svyrates.design import SampleDesign
from svyrates.errors import some
from svyrates.rates.assemble import Asked, assemble, measure
from svyrates.rates.limits import INTERVALS, Interval
from svyrates.rates.question import (
    Grouping,
)
from svyrates.rates.table import RateBlock, RateTable
from svyrates.rates.tallied import TalliedBlock, check_design, tally_question

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
    parts = [_measure(block, tallied.grouping, rule) for block in tallied.blocks]
    asked = Asked(
        outcomes=tuple(outcome.name for outcome in tallied.outcomes),
        success=tuple(outcome.defined for outcome in tallied.outcomes),
        columns=tallied.grouping.columns,
        groups=tallied.grouping.labels,
        coverage=tallied.coverage,
        overlapping=tallied.grouping.overlapping,
        interval=interval,
        level=level,
        df_rule=rule,
    )
    blocks = tuple(RateBlock(block.outcomes, block.source) for block in tallied.blocks)
    return assemble(design, asked, blocks, parts)


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


def _measure(block: TalliedBlock, grouping: Grouping, rule: str | float) -> dict[str, FloatArray]:
    """Rates of one block, outcomes slowest."""
    source = block.source
    n_cells = grouping.membership.shape[1]
    cells = [
        position * n_cells + group
        for position in range(len(block.outcomes))
        for group in range(grouping.n_groups)
    ]
    n_missing = source.units.by_cell(source.units.tally.n, answered=False)[cells]
    return measure(source, cells, n_missing, rule)
