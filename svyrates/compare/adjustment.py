"""`compare_adjustment`: crude and adjusted gaps side by side, and what the adjustment changed."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from svyrates.compare.hypothesis import Hypothesis
from svyrates.compare.pairs import PairBlock, plan_pairs
from svyrates.errors import ComparisonError
from svyrates.rates.layout import machine_column
from svyrates.rates.limits import t_p_value, t_quantile
from svyrates.rates.model_source import ModelRates
from svyrates.rates.source import freedom_of
from svyrates.rates.standardized import StandardizedRates
from svyrates.rates.table import RateTable
from svyrates.words import Column, Table, Tabular, fixed, p_value, points, rule_or_number

__all__ = ["AdjustmentTable", "compare_adjustment"]

FloatArray = NDArray[np.float64]
_PARTS = ("crude", "adjusted", "change")
_FIELDS = ("", "_se", "_low", "_high", "_p")


@dataclass(frozen=True, repr=False)
class AdjustmentTable(Tabular):
    """Crude and adjusted gaps; all arrays have shape (pairs,).

    Attributes
    ----------
    held, levels : names of the columns held fixed, and their labels in each row
    group, versus : what is compared with what
    crude, crude_se, crude_low, crude_high, crude_p : difference of the crude rates
    adjusted, adjusted_se, adjusted_low, adjusted_high, adjusted_p : of the adjusted rates
    change, change_se, change_low, change_high, change_p : adjusted minus crude difference
    df : degrees of freedom
    level : confidence level
    rates : the adjusted table

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.standardize_rates(design, "damp", "sex", "age_group", "sample")
    >>> both = sr.compare_adjustment(rates)
    >>> bool(abs(both.adjusted[0] - both.crude[0] - both.change[0]) < 1e-12)
    True

    The change is the adjusted difference less the crude one.
    """

    held: tuple[str, ...]
    levels: tuple[tuple[object, ...], ...]
    group: tuple[str, ...]
    versus: tuple[str, ...]
    crude: FloatArray
    crude_se: FloatArray
    crude_low: FloatArray
    crude_high: FloatArray
    crude_p: FloatArray
    adjusted: FloatArray
    adjusted_se: FloatArray
    adjusted_low: FloatArray
    adjusted_high: FloatArray
    adjusted_p: FloatArray
    change: FloatArray
    change_se: FloatArray
    change_low: FloatArray
    change_high: FloatArray
    change_p: FloatArray
    df: FloatArray
    level: float
    rates: RateTable

    def to_frame(self) -> pd.DataFrame:
        """All columns as a pandas frame, in the order of the attributes."""
        data: dict[str, Any] = {
            name: [level[position] for level in self.levels]
            for position, name in enumerate(self.held)
            if name != "outcome"
        }
        data |= {"group": list(self.group), "versus": list(self.versus)}
        data |= {
            f"{part}{end}": getattr(self, f"{part}{end}") for part in _PARTS for end in _FIELDS
        }
        return pd.DataFrame(data | {"df": self.df})

    def table(self, *, percent: bool = False, every_column: bool = False) -> Table:
        """The table laid out for reading."""
        frame = self.to_frame()
        labels = [str(name) for name in frame.columns[: list(frame.columns).index("crude")]]
        keys = [Column(name, name, frame[name].tolist(), key=True) for name in labels]
        title = f"Crude and adjusted differences of rates of {self.rates.what(0)}"
        if every_column:
            rest = [machine_column(frame, str(name)) for name in frame if name not in labels]
            return Table(title, (*keys, *rest), self._about())

        def show(value: Any) -> str:
            return points(value).removesuffix(" points") if percent else fixed(value, 4)

        columns = []
        for panel, part in enumerate(_PARTS):
            unit = " (points)" if percent and not panel else ""
            for end, heading in (("", f"{part}{unit}"), ("_low", "low"), ("_high", "high")):
                columns.append(_number(frame, f"{part}{end}", heading, show, panel))
            columns.append(_number(frame, f"{part}_p", "p", p_value, panel))
        return Table(title, (*keys, *columns), self._about())

    def _about(self) -> tuple[str, ...]:
        return (
            (
                f"{100 * self.level:g}% limits, t tests with the covariance of the groups; df: "
                f"{rule_or_number(self.rates.df_rule)}."
            ),
            "change: adjusted minus crude difference, tested by its own covariance.",
            *self.rates.remarks,
            "An adjusted difference is not a cause: what was not adjusted for stays in it.",
        )


def compare_adjustment(
    rates: RateTable,
    versus: Any = None,
    *,
    within: str | Sequence[str] | None = None,
    level: float | None = None,
) -> AdjustmentTable:
    """Compare groups before and after adjustment, and test what the adjustment changed.

    Parameters
    ----------
    rates : RateTable
        From `standardize_rates` or `adjusted_rates`.
    versus, within, level : see `compare_rates`

    Returns
    -------
    AdjustmentTable

    Raises
    ------
    ComparisonError
        For a table that is not adjusted, and groups that it does not have.

    Notes
    -----
    Crude and adjusted rates come from the same totals, or from the same records' influence, so the
    change in a gap has a variance of its own: far smaller than if the two were independent.

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.adjusted_rates(design, "damp ~ tenure + age_group", by="tenure")
    >>> len(sr.compare_adjustment(rates, versus="owner").group)
    3

    Three tenures against owners, crude and adjusted.
    """
    if not isinstance(rates, RateTable) or rates.crude_rate is None:
        raise ComparisonError(
            "`rates` must be a table of adjusted rates, from standardize_rates or adjusted_rates."
        )
    chosen = rates.level if level is None else level
    if isinstance(chosen, bool) or not isinstance(chosen, int | float) or not 0.0 < chosen < 1.0:
        raise ComparisonError(f"level must be a number between 0 and 1; got {chosen!r}.")
    held, blocks, fixed_value = plan_pairs(rates, versus, within)
    asked = Hypothesis("two-sided", 0.0, 0.0, float(chosen))
    parts = [_one_block(rates, block, fixed_value, asked) for block in blocks]
    joined = {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
    return AdjustmentTable(
        held=held,
        levels=tuple(block.level for block in blocks for _ in block.group),
        group=tuple(label for block in blocks for label in block.group),
        versus=tuple(label for block in blocks for label in block.versus),
        level=float(chosen),
        rates=rates,
        **joined,
    )


def _one_block(
    rates: RateTable, block: PairBlock, fixed_value: float | None, asked: Hypothesis
) -> dict[str, FloatArray]:
    source = block.source
    assert isinstance(source, StandardizedRates | ModelRates)  # noqa: S101 - it has crude rates
    both = source.with_crude(block.sides)
    found = source.sides(block.sides)
    m, pairs = found.rate.size, block.plus.size
    rows = np.arange(pairs)
    weights = np.zeros((pairs, m))
    weights[rows, block.plus] += 1.0
    real = block.minus >= 0
    weights[rows[real], block.minus[real]] -= 1.0
    nothing = np.zeros_like(weights)
    crude = np.hstack((nothing, nothing, weights, nothing))
    adjusted = np.hstack((weights, nothing, nothing, nothing))
    side_df = freedom_of(found, source, rates.df_rule)
    df = np.where(real, np.fmin(side_df[block.plus], side_df[block.minus]), side_df[block.plus])
    covariance = np.nan_to_num(both.covariance())
    variance = found.variance()
    undefined = (found.n == 0) | found.certain | np.isnan(variance)
    lost = (weights != 0.0) @ undefined.astype(float) > 0
    shift = 0.0 if fixed_value is None else fixed_value
    out: dict[str, FloatArray] = {"df": df}
    for name, contrast in zip(_PARTS, (crude, adjusted, adjusted - crude), strict=True):
        estimate = contrast @ np.nan_to_num(both.values) - (0.0 if name == "change" else shift)
        spread = np.maximum(np.einsum("qi,ij,qj->q", contrast, covariance, contrast), 0.0)
        se = np.where(lost, np.nan, np.sqrt(spread))
        with np.errstate(invalid="ignore", divide="ignore"):
            statistic = np.where(se > 0, estimate / se, np.nan)
        half = t_quantile(df, asked.level) * se
        empty = (weights != 0.0) @ (found.n == 0).astype(float) > 0
        out[name] = np.where(empty, np.nan, estimate)
        out[f"{name}_se"] = se
        out[f"{name}_low"], out[f"{name}_high"] = estimate - half, estimate + half
        out[f"{name}_p"] = t_p_value(statistic, df)
    return out


def _number(frame: pd.DataFrame, name: str, heading: str, show: Any, panel: int) -> Column:
    return Column(name, heading, frame[name].tolist(), "number", show, panel=panel)
