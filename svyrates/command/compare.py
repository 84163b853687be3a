"""`svyrates compare`: one question about one file."""

from __future__ import annotations

import shutil
import warnings
from pathlib import Path
from typing import Any

import narwhals.stable.v2 as nw
import numpy as np
import pandas as pd
import typer
from numpy.typing import NDArray

from svyrates.command.files import write_table
from svyrates.command.survey import SurveyFile
from svyrates.compare import EVERYONE, EVERYONE_ELSE, ComparisonTable, compare_rates
from svyrates.compare.explain import ADVICE
from svyrates.design.columns import ColumnFault, code_column, open_frame, read_mask
from svyrates.errors import DataFileError, QuestionError, RatesWarning, some
from svyrates.rates import RateTable, estimate_rates

__all__ = ["positions", "run_compare", "screen_width", "show", "typed", "versus_of"]

BoolArray = NDArray[np.bool_]


def run_compare(
    survey: SurveyFile,
    *,
    outcome: list[str],
    by: list[str] | None,
    success: list[str] | None,
    where: list[str] | None,
    versus: str | None,
    within: list[str] | None,
    measure: str,
    alternative: str,
    null: float | None,
    margin: list[float] | None,
    multiplicity: str,
    family: str,
    limits: str,
    simple: str,
    interval: str,
    level: float,
    df: str | None,
    out: list[Path] | None,
    out_rates: list[Path] | None,
    percent: bool,
    explain: bool,
) -> None:
    """Read the columns, ask the question, print the tables and write them."""
    conditions = [_condition(text) for text in where or ()]
    for path in (*(out or ()), *(out_rates or ())):
        if path.suffix.lower() not in (".csv", ".json"):
            raise DataFileError(f"{path}: results are written as '.csv' or '.json'.")
    data, design = survey.read([*outcome, *(by or ()), *(column for column, _ in conditions)])
    rates = estimate_rates(
        design,
        outcome if len(outcome) > 1 else outcome[0],
        success=typed(data, outcome, success) if success else None,
        by=by,
        where=_mask(data, conditions) if conditions else None,
        interval=interval,  # type: ignore[arg-type]
        level=level,
        df=_number_or_text(df),
    )
    typer.echo(design.summary().text(screen_width()) + "\n")
    typer.echo(rates.text(screen_width(), percent=percent) + "\n")
    gaps = None
    if by or versus is not None:
        with warnings.catch_warnings(record=True) as caught:
            warnings.simplefilter("always", RatesWarning)
            gaps = compare_rates(
                rates,
                versus_of(versus, rates),
                within=within,
                measure=measure,  # type: ignore[arg-type]
                alternative=alternative,  # type: ignore[arg-type]
                null=null,
                margin=_margin(margin),
                multiplicity=multiplicity,  # type: ignore[arg-type]
                family=family,  # type: ignore[arg-type]
                limits=limits,  # type: ignore[arg-type]
                simple=simple,  # type: ignore[arg-type]
            )
        show(gaps, caught, percent=percent, explain=explain)
    _write(rates, gaps, out or [], out_rates or [])


def show(
    gaps: ComparisonTable,
    caught: list[warnings.WarningMessage],
    *,
    percent: bool = False,
    explain: bool = False,
) -> None:
    """Print comparisons, what they mean in words, and the warning last, where it is seen."""
    typer.echo(gaps.text(screen_width(), percent=percent) + "\n")
    if explain:
        for row in range(len(gaps)):
            typer.echo(_wrapped(f"{gaps.title_of(row)}: {gaps.explain_row(row)}") + "\n")
    for warning in caught:
        # The advice at the end is for Python, where a warning can be silenced.
        text = str(warning.message).removesuffix(ADVICE)
        typer.echo(_wrapped(f"Warning: {text}"), err=True)


def _wrapped(text: str) -> str:
    from svyrates.words.text import wrap

    return "\n".join(
        line for part in text.splitlines() for line in wrap(part, screen_width(), indent="  ")
    )


def screen_width() -> int:
    """Columns of the terminal, within reason."""
    return min(max(shutil.get_terminal_size((80, 24)).columns, 60), 160)


def _condition(text: str) -> tuple[str, list[str] | None]:
    """Split COLUMN=VALUE,VALUE; a bare column is a mask."""
    column, sign, values = text.partition("=")
    if sign and not values:
        raise QuestionError(f"--where {text!r}: give a value after '='.")
    return column, values.split(",") if sign else None


def positions(levels: tuple[object, ...], wanted: list[str], role: str) -> set[int]:
    """Find labels of any type by their text, as the command line only has text."""
    texts = [str(level) for level in levels]
    absent = [value for value in wanted if value not in texts]
    if absent:
        raise QuestionError(
            f"{role}: no record has {some(absent)}. The column holds {some(texts, 12)}."
        )
    return {texts.index(value) for value in wanted}


def typed(data: pd.DataFrame, outcomes: list[str], success: list[str]) -> dict[str, Any]:
    """Success values with the types that each outcome column has."""
    found: dict[str, Any] = {}
    frame = open_frame(data)
    for name in outcomes:
        try:
            levels = code_column(frame, name, "outcome").levels
        except ColumnFault as fault:
            raise QuestionError(str(fault)) from fault
        chosen = sorted(positions(levels, success, f"--success for {name!r}"))
        found[name] = [levels[position] for position in chosen]
    return found


def _mask(data: pd.DataFrame, conditions: list[tuple[str, list[str] | None]]) -> BoolArray:
    """Records that meet all conditions; a null meets none."""
    frame: nw.DataFrame[Any] = open_frame(data)
    inside = np.ones(len(data), dtype=bool)
    for column, values in conditions:
        try:
            if values is None:
                member, _ = read_mask(frame, column, "--where")
            else:
                coded = code_column(frame, column, "--where")
                wanted = positions(coded.levels, values, f"--where {column!r}")
                member = np.isin(coded.codes, sorted(wanted))
        except ColumnFault as fault:
            raise QuestionError(str(fault)) from fault
        inside &= member
    return inside


def _number_or_text(text: str | None) -> str | float | None:
    try:
        return None if text is None else float(text)
    except ValueError:
        return text


def _margin(ends: list[float] | None) -> float | tuple[float, float] | None:
    if not ends or len(ends) == 1:
        return ends[0] if ends else None
    if len(ends) > 2:
        raise QuestionError(f"--margin was given {len(ends)} times; it has one end or two.")
    return ends[0], ends[1]


def versus_of(text: str | None, rates: RateTable) -> Any:
    """A group before all else, then one of the two unions, then a number."""
    if text is None or any(text == str(label) for group in rates.groups for label in group):
        return text
    unions = {"everyone": EVERYONE, "everyone else": EVERYONE_ELSE, "everyone-else": EVERYONE_ELSE}
    return unions.get(text, _number_or_text(text))


def _write(
    rates: RateTable, gaps: ComparisonTable | None, out: list[Path], out_rates: list[Path]
) -> None:
    if out and gaps is None:
        raise QuestionError("--out writes comparisons, but there are none without --by.")
    for path in out_rates:
        write_table(path, rates.table(every_column=True))
        typer.echo(f"Rates written to {path}")
    for path in out:
        if gaps is not None:
            write_table(path, gaps.table(every_column=True))
            typer.echo(f"Comparisons written to {path}")
