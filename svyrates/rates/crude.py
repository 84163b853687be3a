"""Crude rates: weighted successes over weighted members of a group."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from svyrates.rates.source import SideRates, SpreadKind
from svyrates.totals import (
    CellTotals,
    Estimates,
    RatesOfSides,
    ReplicateSupport,
    ReplicateTotals,
    Spread,
    Support,
    UnitSupport,
    UnitTotals,
    blocks,
)

__all__ = ["CrudeRates", "side_rows"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
_SMALL_SIDES = 20_000


@dataclass(frozen=True)
class CrudeRates:
    """Weighted subgroup rates `p = Y/N` of one block of cells.

    Attributes
    ----------
    units : totals of the cells
    support : where their members sit
    squared_weights : (cells,) Σw² of the members
    design_df : units minus strata of the whole design
    scheme_df : degrees of freedom of the replicates, None without them
    """

    units: CellTotals
    support: Support
    squared_weights: FloatArray
    design_df: int
    scheme_df: float | None = None

    @classmethod
    def of(cls, units: CellTotals, design_df: int) -> CrudeRates:
        """Prepare the rates of a tally."""
        squares = units.by_cell(units.tally.ww, answered=True)
        if isinstance(units, ReplicateTotals):
            n = np.split(units.totals, 4)[0]
            return cls(units, ReplicateSupport(n), squares, design_df, units.replicates.df)
        assert isinstance(units, UnitTotals)  # noqa: S101 - the only other kind there is
        return cls(units, UnitSupport.of(units), squares, design_df)

    @property
    def adds_cells(self) -> bool:
        """Totals of cells add up."""
        return True

    @property
    def knows_records(self) -> bool:
        """The tally keeps the squares of the weights."""
        return True

    @property
    def no_variance(self) -> str:
        """Only replicates leave one undefined."""
        return "a rate is undefined in too many replicates"

    @property
    def tells_strata_apart(self) -> bool:
        """Whether the parts of the design's variance can be told apart."""
        return isinstance(self.units, UnitTotals)

    @property
    def n_cells(self) -> int:
        """Cells in the block."""
        return self.units.n_cells

    def totals(self, kind: SpreadKind = "design") -> Estimates:
        """Estimates of the totals `[n | y | N | Y]` of the cells."""
        return Estimates(self.units.totals, self._spread(kind))

    def estimates(self, sides: Any, kind: SpreadKind = "design") -> Estimates:
        """Estimates of `[rate | unweighted]` of each row of `sides` (m, cells)."""
        return self.totals(kind).apply(RatesOfSides(sides))

    def sides(self, sides: Any) -> SideRates:
        """Rates of each row of `sides` (m, cells), a signed sum of cells."""
        n, y, weighted_n, _ = (np.asarray(sides @ block) for block in blocks(self.units.totals))
        # Counts are whole: subtraction leaves them exact, and they decide what is empty or certain.
        n, y = np.rint(n), np.rint(y)
        stacked = self.estimates(sides)
        rate, unweighted = np.split(stacked.values, 2)
        rate = np.where((n > 0) & (y == 0), 0.0, np.where((n > 0) & (y == n), 1.0, rate))
        units, strata = self.support.domain(sides)
        return SideRates(
            n,
            y,
            np.where(n > 0, weighted_n, 0.0),
            np.asarray(sides @ self.squared_weights),
            rate,
            unweighted,
            stacked,
            units,
            strata,
        )

    def _spread(self, kind: SpreadKind) -> Spread:
        if kind == "independent-records":
            return self.units.independent_records
        if kind == "unstratified" and isinstance(self.units, UnitTotals):
            return self.units.unstratified
        # What replicates know of the design cannot be taken apart.
        return self.units.spread

    def row(self, cells: dict[int, float]) -> Any:
        """One side as a row: cell -> sign."""
        index = np.fromiter(cells, dtype=np.intp)
        return side_rows(
            np.zeros_like(index), index, np.array(list(cells.values())), 1, self.n_cells
        )

    def rows_of(self, cells: list[int]) -> Any:
        """Sides that are single cells."""
        index = np.asarray(cells, dtype=np.intp)
        return side_rows(
            np.arange(index.size), index, np.ones(index.size), index.size, self.n_cells
        )


def side_rows(row: IntArray, cell: IntArray, values: FloatArray, n_rows: int, n_cells: int) -> Any:
    """Matrix of sides by cells."""
    matrix = sparse.csr_array((values, (row, cell)), shape=(n_rows, n_cells))
    # The derivatives of sides are eight times as many elements, so sides turn sparse early.
    return matrix.toarray() if n_rows * n_cells <= _SMALL_SIDES else matrix
