"""`RateTable`: subgroup rates with their variances, limits and all that comparing them needs."""

from __future__ import annotations

from dataclasses import dataclass, fields
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from svyrates.errors import ComparisonError
from svyrates.rates.layout import rate_layout
from svyrates.rates.model_table import ModelTable
from svyrates.rates.source import RateSource
from svyrates.words import Table, Tabular

if TYPE_CHECKING:
    from svyrates.rates.presentation import Presentation, Standard

__all__ = ["Coverage", "RateBlock", "RateTable"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Coverage:
    """Which records a table speaks of.

    Attributes
    ----------
    n_records : records in the sample
    n_zero_weight : records of weight zero, in no rate
    n_outside : records outside the subpopulation
    n_where_unknown : those of them whose mask is null
    n_group_unknown : records of the subpopulation whose group is unknown
    """

    n_records: int
    n_zero_weight: int
    n_outside: int
    n_where_unknown: int
    n_group_unknown: int


@dataclass(frozen=True, slots=True)
class RateBlock:
    """Outcomes tallied together, and so comparable: positions in the table and their source."""

    outcomes: tuple[int, ...]
    source: RateSource


@dataclass(frozen=True, repr=False)
class RateTable(Tabular):
    """Rates of one or several outcomes in one or several groups.

    One row per outcome and group, outcomes slowest. All arrays have shape (rows,); all rates are
    proportions in [0, 1].

    Attributes
    ----------
    outcomes : names of the outcomes
    success : how success was defined for each
    columns : names of the grouping columns
    groups : labels of each group, one per grouping column
    n, n_success, n_missing : unweighted members, successes, and members without an answer
    weighted_n : sum of the members' weights
    rate : weighted rate
    se : design-based standard error; NaN where undefined
    low, high : confidence limits
    df : degrees of freedom of the variance
    kish_factor : `n Σw²/(Σw)²`, variance inflation from unequal weights alone (Kish 1992)
    unweighted_rate : rate without weights
    notes : what a reader must know about a row, or ""
    interval, level : method and confidence level of the limits
    df_rule : how degrees of freedom were counted
    coverage : which records the table speaks of; None where that is not known
    kind : what kind of rates these are, "" for crude ones
    crude_rate : the weighted rate before any adjustment; None where `rate` is that
    model : the regression behind adjusted rates; None for all others
    standard : the presentation standard that `presentation` judges by
    remarks : what must be said under every table made of these rates

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.estimate_rates(
    ...     design, outcome="cold_home", success=["often", "always"], by="sex"
    ... )
    >>> rates.to_frame().shape[0]
    2

    Two rows, one for each sex; ``print(rates)`` shows them.
    """

    outcomes: tuple[str, ...]
    success: tuple[str, ...]
    columns: tuple[str, ...]
    groups: tuple[tuple[object, ...], ...]
    n: FloatArray
    n_success: FloatArray
    n_missing: FloatArray
    weighted_n: FloatArray
    rate: FloatArray
    se: FloatArray
    low: FloatArray
    high: FloatArray
    df: FloatArray
    kish_factor: FloatArray
    unweighted_rate: FloatArray
    notes: tuple[str, ...]
    interval: str
    level: float
    df_rule: str | float
    coverage: Coverage | None
    weights_are_relative: bool
    overlapping: bool
    blocks: tuple[RateBlock, ...]
    kind: str = ""
    remarks: tuple[str, ...] = ()
    crude_rate: FloatArray | None = None
    model: ModelTable | None = None
    standard: str | Standard | None = "nchs-proportions"

    @property
    def presentation(self) -> Presentation | None:
        """What the presentation standard says of each row; None for a table already judged."""
        from svyrates.rates.presentation import judge_presentation

        return None if self.standard is None else judge_presentation(self, self.standard)

    def what(self, outcome: int) -> str:
        """An outcome in words, such as "damp = 1, standardised for age"."""
        success = f" = {self.success[outcome]}" if self.success[outcome] else ""
        return f"{self.outcomes[outcome]}{success}" + (f", {self.kind}" if self.kind else "")

    @property
    def variance(self) -> FloatArray:
        """Design-based variances."""
        return self.se**2

    @property
    def design_effect(self) -> FloatArray:
        """`V / (p(1 - p)/n)`."""
        with np.errstate(invalid="ignore", divide="ignore"):
            return self.variance * self.n / (self.rate * (1.0 - self.rate))

    @property
    def n_effective(self) -> FloatArray:
        """`p(1 - p)/V`, not capped; infinite where the variance is zero."""
        with np.errstate(invalid="ignore", divide="ignore"):
            return self.rate * (1.0 - self.rate) / self.variance

    @property
    def rse(self) -> FloatArray:
        """Relative standard error of the rate, as a proportion of it."""
        with np.errstate(invalid="ignore", divide="ignore"):
            return self.se / self.rate

    @property
    def covariance(self) -> pd.DataFrame:
        """Covariance matrix of the rates, rows and columns labelled by outcome and group.

        NaN between outcomes that were not estimated with ``joint=True``, and for undefined
        variances.
        """
        n_groups = len(self.groups)
        matrix = np.full((self.rate.size, self.rate.size), np.nan)
        for block in self.blocks:
            rows = np.concatenate(
                [np.arange(o * n_groups, (o + 1) * n_groups) for o in block.outcomes]
            )
            sides = block.source.rows_of(self.cells_of(block))
            here = block.source.sides(sides).covariance()[: rows.size, : rows.size]
            matrix[np.ix_(rows, rows)] = here
        undefined = np.isnan(self.se)
        matrix[undefined, :] = np.nan
        matrix[:, undefined] = np.nan
        index = self.index()
        return pd.DataFrame(matrix, index=index, columns=index)

    def cells_of(self, block: RateBlock) -> list[int]:
        """Cells of a block's rows, in the order of the table."""
        n_cells = block.source.n_cells // len(block.outcomes)
        return [
            position * n_cells + group
            for position in range(len(block.outcomes))
            for group in range(len(self.groups))
        ]

    def index(self) -> pd.Index[Any]:
        """Labels of the rows: the outcome, if there are several, and the groups."""
        names, rows = self.label_columns()
        if not names:
            return pd.Index(["all"])
        if len(names) == 1:
            return pd.Index([row[0] for row in rows], name=names[0], dtype=object)
        return pd.MultiIndex.from_tuples(rows, names=names)

    def label_columns(self) -> tuple[list[str], list[tuple[object, ...]]]:
        """Names and values of the label columns."""
        several = len(self.outcomes) > 1
        names = (["outcome"] if several else []) + list(self.columns)
        rows = [
            ((outcome,) if several else ()) + labels
            for outcome in self.outcomes
            for labels in self.groups
        ]
        return names, rows

    def to_frame(self) -> pd.DataFrame:
        """All columns of the table as a pandas frame, one row per outcome and group.

        Returns
        -------
        pandas.DataFrame
            The label columns, then `n`, `n_success`, `n_missing`, `weighted_n`, `rate`, `se`,
            `low`, `high`, `df`, `design_effect`, `n_effective`, `kish_factor`, `rse`,
            `unweighted_rate`, `crude_rate` where `rate` is adjusted, `presentation` (see
            `judge_presentation`) and `note`.
        """
        names, rows = self.label_columns()
        data: dict[str, Any] = {
            name: [row[position] for row in rows] for position, name in enumerate(names)
        }
        for name in ("n", "n_success", "n_missing"):
            values = getattr(self, name)
            data[name] = values if np.isnan(values).any() else values.astype(np.int64)
        for name in (
            "weighted_n", "rate", "se", "low", "high", "df", "design_effect", "n_effective",
            "kish_factor", "rse", "unweighted_rate",
        ):  # fmt: skip
            data[name] = getattr(self, name)
        if self.crude_rate is not None:
            data["crude_rate"] = self.crude_rate
        judged = self.presentation
        if judged is not None:
            data["presentation"] = list(judged.status)
        data["note"] = list(self.notes)
        return pd.DataFrame(data)

    def table(self, *, percent: bool = False, every_column: bool = False) -> Table:
        """The table laid out for reading."""
        return rate_layout(self, percent=percent, every_column=every_column)

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, RateTable):
            return NotImplemented
        return all(
            _same(getattr(self, each.name), getattr(other, each.name))
            for each in fields(self)
            if each.name not in ("blocks", "model")
        )

    __hash__ = None  # type: ignore[assignment]

    def block_of(self, outcome: int) -> tuple[RateBlock, int]:
        """The block that holds an outcome, and its position in it."""
        for block in self.blocks:
            if outcome in block.outcomes:
                return block, block.outcomes.index(outcome)
        raise ComparisonError(
            "This table has rates but not the totals they came from, so unions of its groups, "
            "EVERYONE and the simple formula cannot be computed from it."
        )


def _same(one: Any, other: Any) -> bool:
    if isinstance(one, np.ndarray):
        return np.array_equal(one, other, equal_nan=True)
    return bool(one == other)
