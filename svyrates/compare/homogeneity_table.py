"""`HomogeneityTable`: tests that all rates are equal, one row per level."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from svyrates.compare.verdict import MEANINGS, meaning
from svyrates.rates.layout import footnotes, machine_column
from svyrates.rates.table import RateTable
from svyrates.words import (
    Column,
    Table,
    Tabular,
    count,
    fixed,
    p_value,
    percent,
    rule_or_number,
    significant,
)

__all__ = ["HomogeneityTable"]

FloatArray = NDArray[np.float64]
_NAMES = {
    "second-order": "Rao–Scott, second order",
    "first-order": "Rao–Scott, first order",
    "wald": "adjusted Wald",
}


# The verdicts in words, of a test that has no interval.
_MEANINGS = {name: meaning(name) for name in MEANINGS} | {
    "overconfident": "same decision, but the simple test rejects too often under this design",
    "underconfident": "same decision, but the simple test rejects too seldom under this design",
}


@dataclass(frozen=True, repr=False)
class HomogeneityTable(Tabular):
    """Tests that all groups have the same rate; all arrays have shape (levels,).

    Attributes
    ----------
    held, levels : names of the columns held fixed, and their labels in each row
    groups, n, pooled_rate : groups with members, their members, and the weighted overall rate
    chi_square : Rao and Scott's `X²` of the weighted rates
    design_effects : generalised design effects of each row, largest first
    statistic, df1, df2, p : F, its degrees of freedom and p-value, of the method asked for
    first_order_p, second_order_p, wald_p : p-values of all three
    simple_chi_square, simple_p : Pearson's chi-square of the raw counts
    simple_error_rate : how often that test would reject equal rates under this design
    shift_p : p-value for a difference between weighted and unweighted contrasts
    verdict, note : as in `ComparisonTable`
    method, level : the question
    rates : the table compared

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.estimate_rates(design, "damp", by=["sex", "tenure"])
    >>> len(sr.homogeneity_test(rates).levels)
    2

    One test of the tenures among men, one among women.
    """

    held: tuple[str, ...]
    levels: tuple[tuple[object, ...], ...]
    groups: FloatArray
    n: FloatArray
    pooled_rate: FloatArray
    chi_square: FloatArray
    design_effects: tuple[tuple[float, ...], ...]
    statistic: FloatArray
    df1: FloatArray
    df2: FloatArray
    p: FloatArray
    first_order_p: FloatArray
    second_order_p: FloatArray
    wald_p: FloatArray
    simple_chi_square: FloatArray
    simple_p: FloatArray
    simple_error_rate: FloatArray
    shift_p: FloatArray
    verdict: tuple[str, ...]
    note: tuple[str, ...]
    method: str
    level: float
    rates: RateTable

    def to_frame(self) -> pd.DataFrame:
        """All columns as a pandas frame, one row per level; design effects as text."""
        data: dict[str, Any] = {
            name: [level[position] for level in self.levels]
            for position, name in enumerate(self.held)
        }
        for name in (
            "groups", "n", "pooled_rate", "chi_square", "statistic", "df1", "df2", "p",
            "first_order_p", "second_order_p", "wald_p", "simple_chi_square", "simple_p",
            "simple_error_rate", "shift_p",
        ):  # fmt: skip
            data[name] = getattr(self, name)
        data["design_effects"] = [
            " ".join(repr(value) for value in row) for row in self.design_effects
        ]
        data["verdict"], data["note"] = list(self.verdict), list(self.note)
        return pd.DataFrame(data)

    def table(self, *, percent: bool = False, every_column: bool = False) -> Table:
        """The table laid out for reading."""
        frame = self.to_frame()
        keys = [Column(name, name, frame[name].tolist(), key=True) for name in self.held]
        title = f"Equal rates of {self.rates.what(0)}?"
        if len(self.rates.outcomes) > 1:
            title = f"Equal rates? {len(self.rates.outcomes)} outcomes"
        if every_column:
            rest = [machine_column(frame, str(name)) for name in frame if name not in self.held]
            return Table(title, (*keys, *rest), self._about())
        show = _percent if percent else _four
        marks, remarks = footnotes(self.note)
        columns = [
            _number(frame, "groups", "groups", count, key=not keys),
            _number(frame, "pooled_rate", "overall rate", show),
            _number(frame, "statistic", "F", _two),
            _number(frame, "df1", "numerator df", _short),
            _number(frame, "df2", "denominator df", _short),
            _number(frame, "p", "p", p_value),
            _number(frame, "simple_chi_square", "simple chi-square", _two, panel=1),
            _number(frame, "simple_p", "simple p", p_value, panel=1),
            Column("verdict", "verdict", list(self.verdict), panel=1),
        ]
        if any(marks):
            columns.append(Column("note", "note", marks, panel=1))
        return Table(title, (*keys, *columns), (*remarks, *self._about()))

    def _about(self) -> tuple[str, ...]:
        lines = [
            (
                f"{_NAMES[self.method]}, tests at {100 * (1 - self.level):g}%; df: "
                f"{rule_or_number(self.rates.df_rule)}. Simple: Pearson's chi-square of the raw "
                "counts."
            )
        ]
        shown = [row for row in self.design_effects if row and not np.isnan(row[0])]
        if shown:
            low, high = min(min(row) for row in shown), max(max(row) for row in shown)
            lines.append(f"Generalised design effects: {fixed(low, 2)} to {fixed(high, 2)}.")
        found = [verdict for verdict in MEANINGS if verdict in self.verdict]
        lines += [f"{verdict}: {_MEANINGS[verdict]}." for verdict in found]
        lines += self.rates.remarks
        lines.append("A difference between groups is not its cause.")
        return tuple(lines)


def _number(
    frame: pd.DataFrame, name: str, heading: str, show: Any, *, panel: int = 0, key: bool = False
) -> Column:
    return Column(name, heading, frame[name].tolist(), "number", show, key=key, panel=panel)


def _percent(value: Any) -> str:
    return percent(value)


def _four(value: Any) -> str:
    return fixed(value, 4)


def _two(value: Any) -> str:
    return fixed(value, 2)


def _short(value: Any) -> str:
    return significant(value, 4)
