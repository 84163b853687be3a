"""Where a table's rates come from: totals, their spread, and the function that makes rates."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from svyrates.totals import (
    ZERO,
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

__all__ = ["CrudeRates", "SideRates"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
_SMALL_SIDES = 20_000

SpreadKind = Literal["design", "unstratified", "independent-records"]


@dataclass(frozen=True, slots=True)
class SideRates:
    """Rates of a list of sides (groups, unions, everyone, everyone less a group).

    Attributes
    ----------
    n, y, weighted_n, squared_weights : (m,) members, successes, weighted members and Σw²
    rate, unweighted : (m,) weighted and unweighted rates; NaN where empty
    stacked : Estimates of `[rate | unweighted]`, shape (2m,)
    units, strata : (m,) first-stage units and strata with a member
    """

    n: FloatArray
    y: FloatArray
    weighted_n: FloatArray
    squared_weights: FloatArray
    rate: FloatArray
    unweighted: FloatArray
    stacked: Estimates
    units: IntArray
    strata: IntArray

    @property
    def nothing(self) -> FloatArray:
        """Variances of `[rate | unweighted]` below which rounding is all there is, shape (2m,)."""
        with np.errstate(invalid="ignore", divide="ignore"):
            rates = np.concatenate((self.rate, self.unweighted))
            return ZERO * rates * (1.0 - rates) / np.tile(self.n, 2)

    def variance(self) -> FloatArray:
        """Variances of the weighted rates, shape (m,); what rounding leaves of zero is zero."""
        m = self.rate.size
        variance = self.stacked.variance()[:m]
        return np.where(variance < self.nothing[:m], 0.0, variance)

    def covariance(self) -> FloatArray:
        """Covariance of `[rate | unweighted]`, shape (2m, 2m), with the same rule."""
        matrix = self.stacked.covariance()
        tiny = matrix.diagonal() < self.nothing
        matrix[tiny, :] = 0.0
        matrix[:, tiny] = 0.0
        return matrix

    @property
    def kish_factor(self) -> FloatArray:
        """`n Σw²/(Σw)²`, the variance inflation from unequal weights alone (Kish 1992)."""
        with np.errstate(invalid="ignore", divide="ignore"):
            return self.n * self.squared_weights / self.weighted_n**2

    @property
    def certain(self) -> NDArray[np.bool_]:
        """Sides whose rate is exactly 0 or 1, so that its variance is undefined."""
        return np.asarray((self.n > 0) & ((self.y == 0) | (self.y == self.n)))


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
    def tells_strata_apart(self) -> bool:
        """Whether the parts of the design's variance can be told apart."""
        return isinstance(self.units, UnitTotals)

    @property
    def n_cells(self) -> int:
        """Cells in the block."""
        return self.units.n_cells

    def estimates(self, sides: Any, kind: SpreadKind = "design") -> Estimates:
        """Estimates of `[rate | unweighted]` of each row of `sides` (m, cells)."""
        totals = Estimates(self.units.totals, self._spread(kind))
        return totals.apply(RatesOfSides(sides))

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
        """One side as a sparse row: cell -> sign."""
        index = np.fromiter(cells, dtype=np.intp)
        values = np.array(list(cells.values()))
        return self._rows(np.zeros_like(index), index, values, 1)

    def rows_of(self, cells: list[int]) -> Any:
        """Sides that are single cells."""
        index = np.asarray(cells, dtype=np.intp)
        return self._rows(np.arange(index.size), index, np.ones(index.size), index.size)

    def _rows(self, row: IntArray, cell: IntArray, values: FloatArray, n_rows: int) -> Any:
        matrix = sparse.csr_array((values, (row, cell)), shape=(n_rows, self.n_cells))
        # The derivatives of sides are eight times as many elements, so sides turn sparse early.
        return matrix.toarray() if n_rows * self.n_cells <= _SMALL_SIDES else matrix
