"""`rates_from_published`: a table of rates from a report, ready for every comparison."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import special

from svyrates.design.columns import Frame, code_column, fault_or, numbers, open_frame
from svyrates.errors import QuestionError, all_faults, some
from svyrates.rates.crude import side_rows
from svyrates.rates.limits import INTERVALS, Interval, rate_limits
from svyrates.rates.source import SideRates, SpreadKind
from svyrates.rates.table import RateBlock, RateTable
from svyrates.totals import Estimates, StatedSpread

__all__ = ["rates_from_published"]

FloatArray = NDArray[np.float64]
_INDEPENDENT = (
    "Published figures, taken as independent of each other: no correlation was given. Groups of "
    "one survey share clusters, and then are not independent."
)
_CORRELATED = "Published figures with the correlations that were given."


@dataclass(frozen=True, slots=True)
class StatedRates:
    """Rates, and a covariance that was stated or assumed.

    Attributes
    ----------
    rate, n, weighted_n, df : (cells,) n and weighted_n are NaN where unknown
    matrix : (cells, cells) covariance; NaN in the row of a rate without a standard error
    """

    rate: FloatArray
    n: FloatArray
    weighted_n: FloatArray
    df: FloatArray
    matrix: FloatArray

    design_df = 0
    scheme_df = None
    no_variance = "no standard error was published for a rate"
    adds_cells = False
    knows_records = False
    tells_strata_apart = False

    @property
    def n_cells(self) -> int:
        """Rates in the report."""
        return self.rate.size

    def estimates(self, sides: Any, kind: SpreadKind = "design") -> Estimates:  # noqa: ARG002
        """Rates of single cells twice over: there are no unweighted rates of their own."""
        cell = self._cells(sides)
        matrix = self.matrix[np.ix_(cell, cell)]
        return Estimates(np.tile(self.rate[cell], 2), StatedSpread(np.tile(matrix, (2, 2))))

    def sides(self, sides: Any) -> SideRates:
        """Rates of single cells."""
        cell = self._cells(sides)
        rate, n = self.rate[cell], self.n[cell]
        plenty = np.full(cell.size, 2, dtype=np.intp)
        return SideRates(
            n=n,
            # A rate of 0 or 1 with a standard error of its own is not certain.
            y=np.where(np.isnan(self.matrix[cell, cell]), rate * n, np.nan),
            weighted_n=self.weighted_n[cell],
            squared_weights=np.full(cell.size, np.nan),
            rate=rate,
            unweighted=np.full(cell.size, np.nan),
            stacked=self.estimates(sides),
            units=plenty,
            strata=np.zeros_like(plenty),
            own_df=self.df[cell],
        )

    def row(self, cells: dict[int, float]) -> Any:
        """One side as a row: cell -> sign."""
        index = np.fromiter(cells, dtype=np.intp)
        signs = np.array(list(cells.values()))
        return side_rows(np.zeros_like(index), index, signs, 1, self.n_cells)

    def rows_of(self, cells: list[int]) -> Any:
        """Sides that are single cells."""
        index = np.asarray(cells, dtype=np.intp)
        ones = np.ones(index.size)
        return side_rows(np.arange(index.size), index, ones, index.size, self.n_cells)

    def _cells(self, sides: Any) -> NDArray[np.intp]:
        return np.asarray(np.asarray(sides @ np.arange(self.n_cells)), dtype=np.intp)


def rates_from_published(
    report: Any,
    *,
    rate: str,
    by: str | Sequence[str],
    percent: bool = False,
    se: str | None = None,
    margin: str | None = None,
    margin_level: float = 0.90,
    n: str | None = None,
    design_effect: float | str | None = None,
    design_factor: float | str | None = None,
    weighted_n: str | None = None,
    df: float | str | None = None,
    correlation: Any = None,
    outcome: str | None = None,
    interval: Interval = "wald",
    level: float = 0.95,
) -> RateTable:
    """Make a table of rates from published figures, so that they can be compared.

    Parameters
    ----------
    report : data frame
        One row per published rate.
    rate : str
        Column of the rates: proportions in [0, 1], or percentages with ``percent=True``; standard
        errors and margins are then in percentage points.
    by : str or list of str
        Columns that tell the rows apart.
    se : str, optional
        Column of standard errors. Give this, `margin`, or `n` with a design effect.
    margin : str, optional
        Column of margins of error at `margin_level`: half the width of the limits.
    margin_level : float
        Confidence level of the margins; the U.S. Census Bureau publishes them at 0.90.
    n : str, optional
        Column of unweighted sample sizes, which the simple formula needs.
    design_effect, design_factor : float or str, optional
        A number or a column: with `n`, `se = √(design_effect p(1 - p)/n)`; the factor is its root.
    weighted_n : str, optional
        Column of population sizes.
    df : float or str, optional
        Degrees of freedom of the standard errors, a number or a column; without it they are taken
        as infinite, so that tests are normal.
    correlation : float or array, optional
        Correlation of the rates: one number for every pair, or a matrix (rows, rows) in the order
        of the report. Without it the rates are taken as independent, and every table says so.
    outcome : str, optional
        What the rates are rates of; the name of their column by default.
    interval, level : see `estimate_rates`
        Wald's limits reproduce published margins.

    Returns
    -------
    RateTable
        With `EVERYONE` and unions of groups left out: they need the totals behind the rates.

    Raises
    ------
    QuestionError
        Lists every fault found in the report and the options.

    Notes
    -----
    `se = margin/z` (U.S. Census Bureau, ACS accuracy of the data). A margin or standard error of 0
    belongs to a figure that is controlled to a known total: it adds no variance. One that is
    missing was not computable: the rate is shown, and no test is made.

    Examples
    --------
    >>> import pandas as pd
    >>> import svyrates as sr
    >>> report = pd.DataFrame(
    ...     {"area": ["Coast", "Hills"], "share": [32.2, 35.0], "margin": [0.8, 1.1]}
    ... )
    >>> rates = sr.rates_from_published(
    ...     report, rate="share", by="area", percent=True, margin="margin"
    ... )
    >>> round(float(sr.compare_rates(rates).p[0]), 4)
    0.0007

    The two published shares differ by more than their margins explain, if they are independent.
    """
    frame = open_frame(report)
    faults: list[str] = []
    columns = (by,) if isinstance(by, str) else tuple(by)
    groups = _labels(frame, columns, faults)
    unit = 100.0 if percent else 1.0
    values = _column(frame, rate, "rate", faults) / unit
    _check_rates(values, rate, percent, faults)
    size = _column(frame, n, "n", faults)
    error = _standard_errors(
        frame,
        values,
        size,
        unit,
        (se, margin, margin_level),
        (design_effect, design_factor),
        faults,
    )
    freedom = _number_or_column(frame, df, "df", faults)
    freedom = np.full(values.size, np.inf) if freedom is None else freedom
    matrix = _covariance(error, correlation, faults)
    if interval not in INTERVALS:
        faults.append(f"interval must be one of {some(INTERVALS, 7)}; got {interval!r}.")
    for name, value in (("level", level), ("margin_level", margin_level)):
        if isinstance(value, bool) or not isinstance(value, int | float) or not 0.0 < value < 1.0:
            faults.append(f"{name} must be a number between 0 and 1; got {value!r}.")
    all_faults(QuestionError, "The report has", faults)
    population = _column(frame, weighted_n, "weighted_n", faults)
    source = StatedRates(values, size, population, freedom, matrix)
    low, high = _limits(source, interval, level)
    nothing = np.full(values.size, np.nan)
    return RateTable(
        outcomes=(rate if outcome is None else outcome,),
        success=("",),
        columns=columns,
        groups=groups,
        n=size,
        n_success=nothing,
        n_missing=nothing,
        weighted_n=population,
        rate=values,
        se=np.sqrt(matrix.diagonal()),
        low=low,
        high=high,
        df=freedom,
        kish_factor=nothing,
        unweighted_rate=nothing,
        notes=tuple(_note(value) for value in matrix.diagonal()),
        interval=interval,
        level=level,
        df_rule="published",
        coverage=None,
        weights_are_relative=False,
        overlapping=False,
        blocks=(RateBlock((0,), source),),
        kind="as published",
        remarks=(_INDEPENDENT if correlation is None else _CORRELATED,),
    )


def _limits(source: StatedRates, interval: str, level: float) -> tuple[FloatArray, FloatArray]:
    variance = source.matrix.diagonal()
    with np.errstate(invalid="ignore", divide="ignore"):
        n_star = source.rate * (1.0 - source.rate) / variance
    low, high = rate_limits(source.rate, source.n, n_star, source.df, interval, level)
    controlled = variance == 0.0
    return np.where(controlled, source.rate, low), np.where(controlled, source.rate, high)


def _note(variance: float) -> str:
    if np.isnan(variance):
        return "no standard error published: no limits, no test"
    return "standard error of zero: controlled to a known total" if variance == 0.0 else ""


def _labels(frame: Frame, columns: tuple[str, ...], faults: list[str]) -> Any:
    read = [fault_or(faults, code_column, frame, name, "by") for name in columns]
    if not columns or any(codes is None for codes in read):
        return ()
    labels = tuple(
        tuple(codes.levels[codes.codes[row]] if codes.codes[row] >= 0 else None for codes in read)
        for row in range(len(frame))
    )
    unknown = sum(None in label for label in labels)
    if unknown:
        faults.append(f"by {some(columns)} is missing in {unknown} rows.")
    twice = len(labels) - len(set(labels))
    if twice:
        faults.append(f"by {some(columns)} repeats a label in {twice} rows: what tells them apart?")
    return labels


def _column(frame: Frame, name: str | None, role: str, faults: list[str]) -> FloatArray:
    found = None if name is None else fault_or(faults, numbers, frame, name, role)
    return np.full(len(frame), np.nan) if found is None else np.asarray(found)


def _number_or_column(
    frame: Frame, given: float | str | None, role: str, faults: list[str]
) -> FloatArray | None:
    if given is None:
        return None
    if isinstance(given, str):
        values = _column(frame, given, role, faults)
    elif isinstance(given, int | float | np.number) and not isinstance(given, bool):
        values = np.full(len(frame), float(given))
    else:
        faults.append(f"{role} must be a number or a column; got {given!r}.")
        return None
    bad = int(np.count_nonzero(~(values > 0)))
    if bad:
        faults.append(f"{role} is missing or not positive in {bad} of {values.size} rows.")
    return values


def _check_rates(values: FloatArray, name: str, percent: bool, faults: list[str]) -> None:
    missing = int(np.count_nonzero(np.isnan(values)))
    if missing:
        faults.append(f"rate {name!r} is missing in {missing} of {values.size} rows: drop them.")
    outside = int(np.count_nonzero((values < 0.0) | (values > 1.0)))
    if outside:
        hint = "" if percent else " Percentages? Say percent=True."
        faults.append(f"rate {name!r} is outside 0 to 1 in {outside} of {values.size} rows.{hint}")


def _standard_errors(
    frame: Frame,
    rate: FloatArray,
    size: FloatArray,
    unit: float,
    stated: tuple[str | None, str | None, float],
    effects: tuple[float | str | None, float | str | None],
    faults: list[str],
) -> FloatArray:
    """Standard errors from one of the four ways in which reports state them."""
    se, margin, margin_level = stated
    design_effect, design_factor = effects
    given = [each is not None for each in (se, margin, design_effect, design_factor)]
    if sum(given) != 1:
        faults.append(
            f"give one of `se`, `margin`, `design_effect` and `design_factor`; got {sum(given)}."
        )
        return np.full(rate.size, np.nan)
    if se is not None:
        values = _column(frame, se, "se", faults) / unit
    elif margin is not None:
        z = special.ndtri(0.5 + margin_level / 2.0) if 0.0 < margin_level < 1.0 else np.nan
        values = _column(frame, margin, "margin", faults) / unit / z
    else:
        effect = _number_or_column(frame, design_effect, "design_effect", faults)
        factor = _number_or_column(frame, design_factor, "design_factor", faults)
        if np.isnan(size).any():
            faults.append("a design effect or factor needs `n`, in every row.")
        inflation = effect if factor is None else factor**2
        if inflation is None:
            return np.full(rate.size, np.nan)
        with np.errstate(invalid="ignore", divide="ignore"):
            values = np.sqrt(inflation * rate * (1.0 - rate) / size)
        # A rate of 0 or 1 has no variance by this formula, and is not controlled either.
        return np.where((rate == 0.0) | (rate == 1.0), np.nan, values)
    negative = int(np.count_nonzero(values < 0))
    if negative:
        faults.append(f"{negative} standard errors or margins are negative; recode their marks.")
    return values


def _covariance(error: FloatArray, correlation: Any, faults: list[str]) -> FloatArray:
    k = error.size
    if correlation is None:
        matrix = np.eye(k)
    else:
        try:
            given = np.asarray(correlation, dtype=np.float64)
        except (TypeError, ValueError):
            given = np.full((1, 1), np.nan)
        matrix = np.full((k, k), float(given)) if given.ndim == 0 else given
        if matrix.shape != (k, k):
            faults.append(f"correlation must be a number or a matrix of {k} rows and columns.")
            return np.full((k, k), np.nan)
        matrix = matrix.copy()
        if given.ndim == 0:
            np.fill_diagonal(matrix, 1.0)
        sound = (
            np.isfinite(matrix).all()
            and np.allclose(matrix, matrix.T)
            and np.allclose(matrix.diagonal(), 1.0)
            and np.linalg.eigvalsh(matrix)[0] > -1e-8
        )
        if not sound:
            faults.append(
                "correlation is no correlation matrix: it must be symmetric, with ones on the "
                "diagonal, numbers between -1 and 1, and no negative eigenvalue."
            )
    matrix = matrix * np.outer(np.nan_to_num(error), np.nan_to_num(error))
    unknown = np.isnan(error)
    matrix[unknown, :] = np.nan
    matrix[:, unknown] = np.nan
    return matrix
