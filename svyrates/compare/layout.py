"""How a table of comparisons is laid out for reading."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np

from svyrates.compare.verdict import MEANINGS
from svyrates.rates.layout import footnotes, machine_column
from svyrates.words import Column, Table, fixed, p_value, plural, points
from svyrates.words import percent as in_percent

if TYPE_CHECKING:
    from svyrates.compare.table import ComparisonTable

__all__ = ["MEASURE_NAMES", "comparison_layout"]

MEASURE_NAMES = {"difference": "difference", "ratio": "ratio", "odds_ratio": "odds ratio"}
SIMPLE_NAMES = {
    "unweighted": "unweighted rates and counts",
    "weighted": "weighted rates with the unweighted n",
    "weights-as-counts": "weighted rates with the sum of weights as n",
    "kish": "weighted rates with Kish's effective n",
}


def comparison_layout(table: ComparisonTable, *, percent: bool, every_column: bool) -> Table:
    """Lay a `ComparisonTable` out: what is read first, or every column."""
    names, rows = table.label_columns()
    keys = [
        Column(name, name, [row[position] for row in rows], key=True)
        for position, name in enumerate(names)
    ]
    keys += [
        Column("group", "group", list(table.group), key=True),
        Column("versus", "versus", list(table.versus), key=True),
    ]
    if every_column:
        frame = table.to_frame()
        known = {column.name for column in keys}
        columns = [machine_column(frame, str(name)) for name in frame if name not in known]
        return Table(_title(table), (*keys, *columns), tuple(_about(table)))
    marks, remarks = footnotes(tuple(table.note))
    show_rate: Callable[[Any], str] = in_percent if percent else lambda value: fixed(value, 4)
    show: Callable[[Any], str] = (
        (lambda value: points(value).removesuffix(" points"))
        if percent and table.measure == "difference"
        else (lambda value: fixed(value, 4 if table.measure == "difference" else 3))
    )
    in_points = " (points)" if percent and table.measure == "difference" else ""
    measured = MEASURE_NAMES[table.measure] + in_points
    columns = [
        _number("rate", "rate", table.rate, show_rate),
        _number("versus_rate", "versus rate", table.versus_rate, show_rate),
        _number(table.measure, measured, table.estimate, show),
        _number("low", "low", table.low, show),
        _number("high", "high", table.high, show),
        _number("p", "p", table.p, p_value),
        _number("simple_estimate", f"simple {measured}", table.simple_estimate, show, panel=1),
        _number("simple_p", "simple p", table.simple_p, p_value, panel=1),
        Column("verdict", "verdict", list(table.verdict), panel=1),
    ]
    if any(marks):
        columns.append(Column("note", "note", marks, panel=1))
    return Table(_title(table), (*keys, *columns), (*remarks, *_about(table)))


def _number(
    name: str, heading: str, values: Any, show: Callable[[Any], str], panel: int = 0
) -> Column:
    listed = np.asarray(values).tolist()
    return Column(name, heading, listed, kind="number", show=show, panel=panel)


def _title(table: ComparisonTable) -> str:
    rates = table.rates
    what = {"difference": "Differences", "ratio": "Ratios", "odds_ratio": "Odds ratios"}
    if len(rates.outcomes) > 1:
        return f"{what[table.measure]} of rates, {plural(len(rates.outcomes), 'outcome')}"
    return f"{what[table.measure]} of rates of {rates.outcomes[0]} = {rates.success[0]}"


def _about(table: ComparisonTable) -> list[str]:
    """The lines under the table: how it was made, the verdicts, and the usual cautions."""
    method = "linear" if table.limits == "linear" else "recovered from the groups' own limits"
    sided = "" if table.alternative == "two-sided" else f" (one-sided: {table.alternative})"
    tests = f"t tests{sided} with the covariance of the groups"
    lines = [
        f"{100 * table.level:g}% limits, {method}; {tests}; df: {table.rates.df_rule}.",
        f"Simple formula: two independent simple random samples, {SIMPLE_NAMES[table.variant]}.",
    ]
    if table.rates.weights_are_relative:
        lines.append(
            "The weights are relative, so the condition that a sample be under 5% of its "
            "population cannot be checked."
        )
    found = [verdict for verdict in MEANINGS if verdict in set(table.verdict)]
    lines += [f"{verdict}: {MEANINGS[verdict]}." for verdict in found]
    if len(table) > 1:
        lines.append(
            f"{plural(len(table), 'comparison')}, no adjustment for their number: about "
            f"{100 * (1 - table.level):g}% would reject by chance alone."
        )
    lines.append("A difference between groups is not its cause.")
    return lines
