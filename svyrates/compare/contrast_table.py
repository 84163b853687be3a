"""`ContrastTable`: linear combinations of rates, one row each."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from svyrates.compare.conclusions import conclusions, finding
from svyrates.compare.contrasts import Combined
from svyrates.compare.families import adjusted
from svyrates.compare.hypothesis import Hypothesis
from svyrates.compare.layout import family_lines
from svyrates.compare.verdict import MEANINGS, meaning
from svyrates.rates.layout import footnotes, machine_column
from svyrates.rates.table import RateTable
from svyrates.totals import WaldTest
from svyrates.words import (
    Column,
    Table,
    Tabular,
    fixed,
    p_phrase,
    p_value,
    points,
    rule_or_number,
    significant,
)

__all__ = ["ContrastTable", "assemble_contrasts"]

FloatArray = NDArray[np.float64]
_NUMBERS = (
    "estimate", "se", "low", "high", "statistic", "df", "p", "p_adjusted", "simultaneous_low",
    "simultaneous_high", "simple_estimate", "simple_se", "simple_low", "simple_high", "simple_p",
    "shift", "shift_p", "variance_ratio", "simple_error_rate", "simple_coverage",
)  # fmt: skip


@dataclass(frozen=True, repr=False)
class ContrastTable(Tabular):
    """Linear combinations of rates; all arrays have shape (contrasts,).

    Attributes
    ----------
    title : what the contrasts are
    held, levels : names of the columns held fixed, and their labels in each row
    contrast : name of each contrast
    estimate, se, low, high : on the scale of the contrast (rates, logarithms or logits)
    statistic, df, p : t statistic, its degrees of freedom and p-value
    p_adjusted : p-value adjusted for the number of contrasts; `p` itself without adjustment
    simultaneous_low, simultaneous_high : limits that hold together, where the method has any
    simple_estimate, simple_se, simple_low, simple_high, simple_p : the same contrast of independent
        simple random samples
    shift, shift_p, variance_ratio, simple_error_rate, simple_coverage, verdict, conclusion, note :
        as in `ComparisonTable`
    joint : test that all contrasts are zero, by their covariance
    joint_is : what the joint test asks, in words
    scale, alternative, multiplicity, level : the question
    rates : the table compared

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> trend = sr.trend_test(sr.estimate_rates(design, "damp", by="age_group"))
    >>> trend.contrast
    ('linear, per step', 'quadratic')

    Two rows: the slope from one age group to the next, and the curvature.
    """

    title: str
    held: tuple[str, ...]
    levels: tuple[tuple[object, ...], ...]
    contrast: tuple[str, ...]
    estimate: FloatArray
    se: FloatArray
    low: FloatArray
    high: FloatArray
    statistic: FloatArray
    df: FloatArray
    p: FloatArray
    p_adjusted: FloatArray
    simultaneous_low: FloatArray
    simultaneous_high: FloatArray
    simple_estimate: FloatArray
    simple_se: FloatArray
    simple_low: FloatArray
    simple_high: FloatArray
    simple_p: FloatArray
    shift: FloatArray
    shift_p: FloatArray
    variance_ratio: FloatArray
    simple_error_rate: FloatArray
    simple_coverage: FloatArray
    verdict: NDArray[np.object_]
    conclusion: NDArray[np.object_]
    note: NDArray[np.object_]
    joint: WaldTest | None
    joint_is: str
    scale: str
    alternative: str
    multiplicity: str
    level: float
    rates: RateTable

    def __len__(self) -> int:
        return len(self.contrast)

    def to_frame(self) -> pd.DataFrame:
        """All columns as a pandas frame, one row per contrast, in the order of the attributes."""
        data: dict[str, Any] = {
            name: [level[position] for level in self.levels]
            for position, name in enumerate(self.held)
        }
        data["contrast"] = list(self.contrast)
        data |= {name: getattr(self, name) for name in _NUMBERS}
        for name in ("verdict", "conclusion", "note"):
            data[name] = list(getattr(self, name))
        return pd.DataFrame(data)

    def table(self, *, percent: bool = False, every_column: bool = False) -> Table:
        """The table laid out for reading."""
        frame = self.to_frame()
        keys = [
            Column(name, name, frame[name].tolist(), key=True) for name in (*self.held, "contrast")
        ]
        if every_column:
            known = {column.name for column in keys}
            rest = [machine_column(frame, str(name)) for name in frame if name not in known]
            return Table(self.title, (*keys, *rest), self._about())
        in_points = percent and self.scale == "rate"

        def show(value: Any) -> str:
            return points(value).removesuffix(" points") if in_points else fixed(value, 4)

        def number(name: str, heading: str, panel: int = 0, how: Any = show) -> Column:
            return Column(name, heading, frame[name].tolist(), "number", how, panel=panel)

        columns = [
            number("estimate", "estimate (points)" if in_points else "estimate"),
            number("low", "low"),
            number("high", "high"),
            number("df", "df", how=lambda value: significant(value, 4)),
            number("p", "p", how=p_value),
        ]
        if self.multiplicity != "none":
            columns.append(number("p_adjusted", "adjusted p", 1, p_value))
            if not np.isnan(self.simultaneous_low).all():
                columns.append(number("simultaneous_low", "simultaneous low", 1))
                columns.append(number("simultaneous_high", "simultaneous high", 1))
        columns += [
            number("simple_estimate", "simple estimate", 2),
            number("simple_p", "simple p", 2, p_value),
            Column("verdict", "verdict", list(self.verdict), panel=2),
        ]
        marks, remarks = footnotes(tuple(self.note))
        if any(marks):
            columns.append(Column("note", "note", marks, panel=2))
        return Table(self.title, (*keys, *columns), (*remarks, *self._about()))

    def _about(self) -> tuple[str, ...]:
        scale = {"rate": "rates", "log": "logarithms of rates", "logit": "logits of rates"}
        lines = [
            (
                f"{100 * self.level:g}% limits of sums of {scale[self.scale]}; t tests with the "
                f"covariance of the groups; df: {rule_or_number(self.rates.df_rule)}."
            )
        ]
        if self.joint is not None:
            test = self.joint
            said = "too few degrees of freedom or no variance"
            if not np.isnan(test.p):
                df2 = significant(test.df2, 4)
                said = f"F = {test.f:.2f} on {test.df1:g} and {df2} df, {p_phrase(test.p)}"
            lines.append(f"{self.joint_is}: {said}.")
        noun = "".join(finding(self.alternative, 0.0, 0.0))
        found = [verdict for verdict in MEANINGS if verdict in set(self.verdict)]
        lines += [f"{verdict}: {meaning(verdict, noun)}." for verdict in found]
        lines += family_lines([len(self)], (), self.multiplicity, "table", self.level, "contrast")
        lines += self.rates.remarks
        lines.append("A difference between groups is not its cause.")
        return tuple(lines)


def assemble_contrasts(
    rates: RateTable,
    parts: Sequence[Combined],
    *,
    title: str,
    held: tuple[str, ...],
    levels: Sequence[tuple[object, ...]],
    names: Sequence[str],
    asked: Hypothesis,
    scale: str,
    multiplicity: str,
    seed: int,
    joint: WaldTest | None = None,
    joint_is: str = "",
) -> ContrastTable:
    """Put parts together, one family of all of them."""
    many = adjusted([part.tests for part in parts], asked, multiplicity, "table", seed)

    def joined(name: str) -> NDArray[Any]:
        return np.concatenate([getattr(part, name) for part in parts])

    def simple(name: str) -> FloatArray:
        return np.concatenate([getattr(part.simple, name) for part in parts])

    with np.errstate(invalid="ignore", divide="ignore"):
        variance_ratio = (joined("se") / simple("se")) ** 2
    return ContrastTable(
        title=title,
        held=held,
        levels=tuple(levels),
        contrast=tuple(names),
        **{
            name: joined(name) for name in ("estimate", "se", "low", "high", "statistic", "df", "p")
        },
        verdict=joined("verdict"),
        note=joined("note"),
        p_adjusted=many.p,
        simultaneous_low=many.low,
        simultaneous_high=many.high,
        **{f"simple_{name}": simple(name) for name in ("estimate", "se", "low", "high", "p")},
        shift=simple("shift"),
        shift_p=simple("shift_p"),
        variance_ratio=variance_ratio,
        simple_error_rate=simple("error_rate"),
        simple_coverage=simple("coverage"),
        conclusion=conclusions(asked, asked.side, many.p, many.equality_p),
        joint=joint,
        joint_is=joint_is,
        scale=scale,
        alternative=asked.side,
        multiplicity=multiplicity,
        level=asked.level,
        rates=rates,
    )
