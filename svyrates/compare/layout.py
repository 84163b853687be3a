"""How a table of comparisons is laid out for reading."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np

from svyrates.compare.conclusions import finding
from svyrates.compare.measures import MEASURES, Scale
from svyrates.compare.verdict import MEANINGS, meaning
from svyrates.rates.layout import footnotes, machine_column
from svyrates.words import Column, Table, fixed, join_words, p_value, plural, points, rule_or_number
from svyrates.words import percent as in_percent

if TYPE_CHECKING:
    from svyrates.compare.table import ComparisonTable

__all__ = ["METHOD_NAMES", "comparison_layout", "family_lines"]

METHOD_NAMES = {
    "bonferroni": "Bonferroni's method",
    "sidak": "Šidák's method",
    "holm": "Holm's method",
    "hochberg": "Hochberg's method",
    "benjamini-hochberg": "the false discovery rate of Benjamini and Hochberg",
    "benjamini-yekutieli": "the false discovery rate of Benjamini and Yekutieli",
    "max-t": "the largest t under the rates' correlations (max-t)",
}
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
    show, unit = _shown_as(table.measure, percent)
    measured = MEASURES[table.measure].name + unit
    columns = [
        _number("rate", "rate", table.rate, show_rate),
        _number("versus_rate", "versus rate", table.versus_rate, show_rate),
        _number(table.measure, measured, table.estimate, show),
        _number("low", "low", table.low, show),
        _number("high", "high", table.high, show),
        _number("p", "p", table.p, p_value),
        *_adjusted(table, show),
        _number("simple_estimate", f"simple {measured}", table.simple_estimate, show, panel=2),
        _number("simple_p", "simple p", table.simple_p, p_value, panel=2),
        Column("verdict", "verdict", list(table.verdict), panel=2),
    ]
    if any(marks):
        columns.append(Column("note", "note", marks, panel=2))
    return Table(_title(table), (*keys, *columns), (*remarks, *_about(table)))


def _adjusted(table: ComparisonTable, show: Callable[[Any], str]) -> list[Column]:
    """What several comparisons, or a margin, add to the table."""
    columns = []
    if table.multiplicity != "none":
        columns.append(_number("p_adjusted", "adjusted p", table.p_adjusted, p_value, panel=1))
    if not np.isnan(table.simultaneous_low).all():
        columns += [
            _number("simultaneous_low", "simultaneous low", table.simultaneous_low, show, panel=1),
            _number(
                "simultaneous_high", "simultaneous high", table.simultaneous_high, show, panel=1
            ),
        ]
    if table.multiplicity != "none" or table.margin is not None:
        columns.append(Column("conclusion", "conclusion", list(table.conclusion), panel=1))
    return columns


def _shown_as(measure: str, percent: bool) -> tuple[Callable[[Any], str], str]:
    """How values of a measure are written, and the unit that its heading names."""
    if measure == "difference" and percent:
        return (lambda value: points(value).removesuffix(" points")), " (points)"
    if measure == "relative_difference":
        return MEASURES[measure].show, ""
    return (lambda value: fixed(value, 4 if measure == "difference" else 3)), ""


def _number(
    name: str, heading: str, values: Any, show: Callable[[Any], str], panel: int = 0
) -> Column:
    listed = np.asarray(values).tolist()
    return Column(name, heading, listed, kind="number", show=show, panel=panel)


def _title(table: ComparisonTable) -> str:
    rates = table.rates
    name = MEASURES[table.measure].name
    what = f"{name[0].upper()}{name[1:]}s"
    if len(rates.outcomes) > 1:
        return f"{what} of rates, {plural(len(rates.outcomes), 'outcome')}"
    return f"{what} of rates of {rates.what(0)}"


def _about(table: ComparisonTable) -> list[str]:
    """The lines under the table: how it was made, the verdicts, and the usual cautions."""
    scale = MEASURES[table.measure]
    method = "linear" if table.limits == "linear" else "recovered from the groups' own limits"
    lines = [
        (
            f"{100 * table.limits_level:g}% limits, {method}; {_tests(table, scale)}; df: "
            f"{rule_or_number(table.rates.df_rule)}."
        )
    ]
    if not np.isnan(table.simple_p).all():
        lines.append(
            f"Simple formula: two independent simple random samples, {SIMPLE_NAMES[table.variant]}."
        )
    if table.rates.weights_are_relative:
        lines.append(
            "The weights are relative, so the condition that a sample be under 5% of its "
            "population cannot be checked."
        )
    noun = "".join(finding(table.alternative, table.null, scale.unity))
    found = [verdict for verdict in MEANINGS if verdict in set(table.verdict)]
    lines += [f"{verdict}: {meaning(verdict, noun)}." for verdict in found]
    lines += family_lines(
        table.family_sizes, table.held, table.multiplicity,
        table.family, table.level,
    )  # fmt: skip
    lines += table.rates.remarks
    lines.append("A difference between groups is not its cause.")
    return lines


def _tests(table: ComparisonTable, scale: Scale) -> str:
    """Which test was made, in words."""
    if table.margin is not None:
        low, high = (scale.show(end) for end in table.margin)
        return {
            "equivalent": f"two one-sided t tests of equivalence between {low} and {high}",
            "not-lower": f"one-sided t tests that the group is not lower by {low} or more",
            "not-higher": f"one-sided t tests that the group is not higher by {high} or more",
        }[table.alternative]
    sided = "" if table.alternative == "two-sided" else f" (one-sided: {table.alternative})"
    usual = "" if table.null == scale.unity else f" against {scale.show(table.null)}"
    return f"t tests{sided}{usual} with the covariance of the groups"


def family_lines(
    sizes: list[int],
    held: tuple[str, ...],
    method: str,
    family: str,
    level: float,
    noun: str = "comparison",
) -> list[str]:
    """How many comparisons were made, in which families, and what was done about it."""
    total = sum(sizes)
    if total < 2:
        return []
    if method == "none":
        return [
            (
                f"{plural(total, noun)}, no adjustment for their number: about "
                f"{100 * (1 - level):g}% would reject by chance alone."
            )
        ]
    if len(sizes) == 1 or family == "table":
        return [f"A family of {plural(total, noun)}, adjusted by {METHOD_NAMES[method]}."]
    columns = [name for name in held if name != "outcome"] or ["the outcome"]
    least, most = min(sizes), max(sizes)
    size = f"{least}" if least == most else f"{least} to {most}"
    return [
        (
            f"Families of {size} {noun}s within {join_words(columns)}, adjusted by "
            f"{METHOD_NAMES[method]}."
        )
    ]
