"""Comparisons as sentences for a reader who sees no table."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from svyrates.compare.conclusions import finding
from svyrates.compare.layout import METHOD_NAMES, family_lines
from svyrates.compare.measures import MEASURES
from svyrates.compare.pairs import EVERYONE, EVERYONE_ELSE
from svyrates.compare.verdict import MISLEADING
from svyrates.words import fixed, for_terminal, p_phrase, percent, plural, points

if TYPE_CHECKING:
    from svyrates.compare.table import ComparisonTable

__all__ = ["sentences"]


def sentences(table: ComparisonTable, *, cautions: bool = True) -> list[str]:
    """One text per comparison, and what must be said of all of them."""
    said = [_sentence(table, row) for row in range(len(table))]
    if not cautions:
        return said
    return [
        *said,
        *family_lines(
            table.family_sizes, table.held, table.multiplicity, table.family, table.level
        ),
        *table.rates.remarks,
        "A difference between groups is not its cause.",
    ]


def _sentence(table: ComparisonTable, row: int) -> str:
    where = _where(table, row)
    group, versus = _name(table.group[row]), _name(table.versus[row])
    if np.isnan(table.estimate[row]) or np.isnan(table.rate[row]):
        why = f" ({table.note[row]})" if table.note[row] else ""
        return _started(f"{where}{group} and {versus} cannot be compared{why}.")
    what = for_terminal(_what(table, row))
    rates = (percent(table.rate[row]), percent(table.versus_rate[row]))
    parts = [
        _started(f"{where}{_finding(table, row, what, (group, versus), rates)}"),
        _adjusted(table, row),
        _simple(table, row),
    ]
    return " ".join(part for part in parts if part)


def _finding(
    table: ComparisonTable, row: int, what: str, names: tuple[str, str], rates: tuple[str, str]
) -> str:
    """What the design-based test says, with the size and its limits."""
    (group, versus), (rate, other) = names, rates
    size = f"{_size(table, row)} ({_limits(table, row)}; {p_phrase(table.p[row])})"
    found = table.p[row] < 1.0 - table.level
    benchmark = table.fixed is not None
    against = f", compared with {other}" if benchmark else f" and {other} in {versus}"
    both = f"the rate of {what} is {rate} in {group}{against}"
    if np.isnan(table.p[row]):
        return f"{both}: {_size(table, row)} ({_limits(table, row)}), without a test."
    if table.margin is not None:
        return f"{both}: {size}; conclusion: {table.conclusion[row]}."
    if table.null != MEASURES[table.measure].unity:
        null = MEASURES[table.measure].show(table.null)
        return f"{both}: {size}; {'' if found else 'no '}evidence that it departs from {null}."
    if not found:
        aim = {"greater": "that it is higher", "less": "that it is lower"}
        looked = aim.get(table.alternative, "of a difference")
        return f"there is no evidence {looked}: {both}, {size}."
    word = "higher" if table.rate[row] > table.versus_rate[row] else "lower"
    than = f"the {other} it is compared with" if benchmark else f"in {versus} ({other})"
    return f"the rate of {what} is {word} in {group} ({rate}) than {than}: {size}."


def _size(table: ComparisonTable, row: int) -> str:
    value = table.estimate[row]
    if table.measure == "difference":
        return f"a difference of {points(value).replace(' points', ' percentage points')}"
    if table.measure == "relative_difference":
        return f"a relative difference of {MEASURES[table.measure].show(value)}"
    article = "a" if table.measure == "ratio" else "an"
    return f"{article} {MEASURES[table.measure].name} of {fixed(value, 2)}"


def _limits(table: ComparisonTable, row: int) -> str:
    low, high = table.low[row], table.high[row]
    show = MEASURES[table.measure].show
    level = f"{100 * table.limits_level:g}% limits"
    if np.isnan(low):
        return f"no {level}"
    if table.alternative in ("less", "not-higher"):
        return f"{level}: at most {show(high)}"
    if table.alternative in ("greater", "not-lower"):
        return f"{level}: at least {show(low)}"
    return f"{level} {show(low).removesuffix(' points')} to {show(high)}"


def _adjusted(table: ComparisonTable, row: int) -> str:
    if table.multiplicity == "none" or np.isnan(table.p_adjusted[row]):
        return ""
    return (
        f"Adjusted by {METHOD_NAMES[table.multiplicity]} {p_phrase(table.p_adjusted[row])}: "
        f"{table.conclusion[row]}."
    )


def _simple(table: ComparisonTable, row: int) -> str:
    """What the simple formula would have claimed, where it misleads."""
    verdict = str(table.verdict[row])
    if verdict not in MISLEADING:
        return ""
    scale = MEASURES[table.measure]
    found = table.simple_p[row] < 1.0 - table.level
    noun = "".join(finding(table.alternative, table.null, scale.unity))
    claims = {
        "shifted": f"would have put it at {scale.show(table.simple_estimate[row])}",
        "overconfident": "would have given limits that are too narrow",
        "underconfident": "would have given limits that are too wide",
    }
    claim = claims.get(verdict, f"would have {'claimed' if found else 'overlooked'} {noun}")
    return (
        f"The simple formula, which ignores the design, {claim} ({p_phrase(table.simple_p[row])}; "
        f"verdict: {verdict})."
    )


def _what(table: ComparisonTable, row: int) -> str:
    rates = table.rates
    if "outcome" in table.held:
        outcome = rates.outcomes.index(str(table.levels[row][table.held.index("outcome")]))
        return rates.what(outcome)
    return rates.what(0) if len(rates.outcomes) == 1 else plural(len(rates.outcomes), "outcome")


def _where(table: ComparisonTable, row: int) -> str:
    held = [
        f"{name} {level}"
        for name, level in zip(table.held, table.levels[row], strict=True)
        if name != "outcome"
    ]
    return for_terminal(f"within {', '.join(held)}, ") if held else ""


def _name(label: str) -> str:
    if label in (EVERYONE.value, EVERYONE_ELSE.value):
        return label
    return f'"{for_terminal(label)}"'


def _started(text: str) -> str:
    return text[:1].upper() + text[1:]
