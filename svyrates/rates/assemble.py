"""From what was measured to a `RateTable`: limits, notes, and questions about replicates."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from svyrates.design import SampleDesign
from svyrates.errors import DesignWarning, warn
from svyrates.rates.limits import rate_limits
from svyrates.rates.model_table import ModelTable
from svyrates.rates.source import RateSource, variances
from svyrates.rates.table import Coverage, RateBlock, RateTable

__all__ = ["Asked", "assemble", "measure"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Asked:
    """The question, as a table of rates keeps it.

    Attributes
    ----------
    outcomes, success : names of the outcomes, and how success was defined
    columns, groups : names of the grouping columns, and the labels of the groups
    coverage : which records are spoken of
    overlapping : whether groups may overlap
    interval, level, df_rule : options
    kind, remarks : what kind of rates they are, and what must be said of them
    """

    outcomes: tuple[str, ...]
    success: tuple[str, ...]
    columns: tuple[str, ...]
    groups: tuple[tuple[object, ...], ...]
    coverage: Coverage
    overlapping: bool
    interval: str
    level: float
    df_rule: str | float
    kind: str = ""
    remarks: tuple[str, ...] = ()


def measure(
    source: RateSource, cells: list[int], n_missing: FloatArray, df: str | float
) -> dict[str, FloatArray]:
    """Everything about the rates of some cells but their limits."""
    found = source.sides(source.rows_of(cells))
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


def assemble(
    design: SampleDesign,
    asked: Asked,
    blocks: tuple[RateBlock, ...],
    parts: list[dict[str, FloatArray]],
    crude_rate: FloatArray | None = None,
    model: ModelTable | None = None,
) -> RateTable:
    """Put the measured parts of all blocks into a table."""
    joined: dict[str, Any] = {
        name: np.concatenate([part[name] for part in parts]) for name in parts[0]
    }
    with np.errstate(invalid="ignore", divide="ignore"):
        n_star = joined["rate"] * (1.0 - joined["rate"]) / joined["se"] ** 2
    notes = _notes(joined, asked.interval)
    _question_replicates(joined.pop("gaps"), joined.pop("astray") > 0, joined["se"], design)
    low, high = rate_limits(
        joined["rate"], joined["n"], n_star, joined["df"], asked.interval, asked.level
    )
    return RateTable(
        outcomes=asked.outcomes,
        success=asked.success,
        columns=asked.columns,
        groups=asked.groups,
        low=low,
        high=high,
        notes=notes,
        interval=asked.interval,
        level=asked.level,
        df_rule=asked.df_rule,
        coverage=asked.coverage,
        weights_are_relative=design.weights_are_relative,
        overlapping=asked.overlapping,
        blocks=blocks,
        kind=asked.kind,
        remarks=asked.remarks,
        crude_rate=crude_rate,
        model=model,
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
