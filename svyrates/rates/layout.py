"""How a table of rates is laid out for reading."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from svyrates.words import Column, Table, count, fixed, plural, rule_or_number, significant
from svyrates.words import percent as in_percent

if TYPE_CHECKING:
    from svyrates.rates.table import RateTable

__all__ = ["INTERVAL_NAMES", "footnotes", "machine_column", "rate_layout"]

INTERVAL_NAMES = {
    "korn-graubard": "Korn–Graubard",
    "wilson": "Wilson",
    "logit": "logit",
    "wald": "Wald",
    "arcsine": "arcsine",
    "jeffreys": "Jeffreys",
    "agresti-coull": "Agresti–Coull",
}


def rate_layout(rates: RateTable, *, percent: bool, every_column: bool) -> Table:
    """Lay a `RateTable` out: what is read first, or every column."""
    names, rows = rates.label_columns()
    columns = [
        Column(name, name, [row[position] for row in rows], key=True)
        for position, name in enumerate(names)
    ]
    if not names:
        columns = [Column("group", "group", ["all"], key=True)]
    marks, remarks = footnotes(rates.notes)
    show: Callable[[Any], str] = in_percent if percent else lambda value: fixed(value, 4)
    show_se: Callable[[Any], str] = (
        (lambda value: in_percent(value, 2)) if percent else lambda value: fixed(value, 4)
    )
    if every_column:
        frame = rates.to_frame()
        columns = [column for column in columns if names]
        columns += [machine_column(frame, str(name)) for name in frame if name not in names]
        return Table(_title(rates), tuple(columns), tuple(_about(rates)))
    columns += [
        _numbers("n", "n", rates.n, count),
        _numbers("n_missing", "no answer", rates.n_missing, count),
        _numbers("rate", "rate", rates.rate, show),
        _numbers("se", "standard error", rates.se, show_se),
        _numbers("low", "low", rates.low, show),
        _numbers("high", "high", rates.high, show),
        _numbers("df", "df", rates.df, lambda value: significant(value, 4)),
        _numbers(
            "design_effect", "design effect", rates.design_effect, lambda value: fixed(value, 2)
        ),
    ]
    idle = {
        "n": np.isnan(rates.n).all(),
        "n_missing": not np.nan_to_num(rates.n_missing).any(),
        "design_effect": np.isnan(rates.n).all(),
        "df": np.isinf(rates.df).all(),
    }
    columns = [column for column in columns if not idle.get(column.name, False)]
    if rates.crude_rate is not None:
        columns.append(_numbers("crude_rate", "crude rate", rates.crude_rate, show))
    if any(marks):
        columns.append(Column("note", "note", marks))
    return Table(_title(rates), tuple(columns), (*remarks, *_about(rates)))


def _numbers(name: str, heading: str, values: Any, show: Callable[[Any], str]) -> Column:
    return Column(name, heading, np.asarray(values).tolist(), kind="number", show=show)


def machine_column(frame: pd.DataFrame, name: str) -> Column:
    """A column of a result's frame as it is, for files."""
    values = frame[name].tolist()
    if name in ("verdict", "conclusion", "note", "presentation"):
        return Column(name, name, values)
    return Column(name, name, values, kind="number")


def footnotes(notes: tuple[str, ...]) -> tuple[list[str], list[str]]:
    """Replace repeated notes by letters: the mark of each row, and the lines that explain them."""
    parts = [note.split("; ") if note else [] for note in notes]
    distinct = list(dict.fromkeys(part for row in parts for part in row))
    letter = {note: _letter(position) for position, note in enumerate(distinct)}
    marks = [" ".join(letter[part] for part in row) for row in parts]
    return marks, [f"{letter[note]}: {note}." for note in distinct]


def _letter(position: int) -> str:
    first, second = divmod(position, 26)
    return (chr(96 + first) if first else "") + chr(97 + second)


def _title(rates: RateTable) -> str:
    if len(rates.outcomes) > 1:
        kind = f", {rates.kind}" if rates.kind else ""
        return f"Rates of {plural(len(rates.outcomes), 'outcome')}{kind}"
    return f"Rate of {rates.what(0)}"


def _about(rates: RateTable) -> list[str]:
    """The lines under the table that say what it speaks of."""
    level = f"{100 * rates.level:g}"
    lines = [
        (
            f"{level}% limits: {INTERVAL_NAMES[rates.interval]}, degrees of freedom: "
            f"{rule_or_number(rates.df_rule)}."
        )
    ]
    lines += rates.remarks
    covered = rates.coverage
    if covered is None:
        return lines
    left_out = [
        f"{count(number)} {what}"
        for number, what in (
            (covered.n_outside, "outside the subpopulation"),
            (covered.n_where_unknown, "of them with an unknown subpopulation"),
            (covered.n_group_unknown, "with an unknown group"),
            (covered.n_zero_weight, "of weight zero"),
        )
        if number
    ]
    if left_out:
        lines.append(f"Of {count(covered.n_records)} records: {', '.join(left_out)}.")
    return lines
