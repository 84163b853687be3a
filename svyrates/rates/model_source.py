"""Adjusted rates as a source of comparisons: groups only, for a union has no label to predict."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from svyrates.rates.crude import CrudeRates
from svyrates.rates.source import SideRates, SpreadKind
from svyrates.totals import Estimates, Spread

__all__ = ["ModelRates"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class ModelRates:
    """Predictive margins with the crude rates of the same groups.

    Attributes
    ----------
    crude : crude rates of the groups
    values : (3 groups,) margins, unweighted and weighted crude rates
    spreads : spread of those and of the coefficients, by kind
    n_cells : groups
    """

    crude: CrudeRates
    values: FloatArray
    spreads: Mapping[str, Spread]
    n_cells: int

    adds_cells = False
    no_variance = "the model cannot be fitted under too many replicates"

    @property
    def design_df(self) -> int:
        """Units minus strata of the whole design."""
        return self.crude.design_df

    @property
    def scheme_df(self) -> float | None:
        """Degrees of freedom of the replicates, None without them."""
        return self.crude.scheme_df

    @property
    def knows_records(self) -> bool:
        """Whether the variance of independent records is known."""
        return "independent-records" in self.spreads

    @property
    def tells_strata_apart(self) -> bool:
        """Whether the parts of the design's variance can be told apart."""
        return "unstratified" in self.spreads

    def estimates(self, sides: Any, kind: SpreadKind = "design") -> Estimates:
        """Estimates of `[margin | unweighted]` of each row of `sides`, single groups."""
        cell = self._cells(sides)
        return self._pick(np.concatenate((cell, self.n_cells + cell)), kind)

    def with_crude(self, sides: Any) -> Estimates:
        """`[margin | unweighted | crude | unweighted]` of each row of `sides`."""
        cell = self._cells(sides)
        plain = self.n_cells + cell
        return self._pick(np.concatenate((cell, plain, 2 * self.n_cells + cell, plain)), "design")

    def sides(self, sides: Any) -> SideRates:
        """Margins of single groups, with the sizes of the crude rates."""
        whole = self.crude.sides(self.crude.rows_of(self._cells(sides).tolist()))
        stacked = self.estimates(sides)
        rate, unweighted = np.split(stacked.values, 2)
        return SideRates(
            n=whole.n,
            y=whole.y,
            weighted_n=whole.weighted_n,
            squared_weights=whole.squared_weights,
            rate=np.where(whole.n > 0, rate, np.nan),
            unweighted=np.where(whole.n > 0, unweighted, np.nan),
            stacked=stacked,
            units=whole.units,
            strata=whole.strata,
        )

    def row(self, cells: dict[int, float]) -> Any:
        """One side as a row: group -> sign."""
        return self.crude.row(cells)

    def rows_of(self, cells: list[int]) -> Any:
        """Sides that are single groups."""
        return self.crude.rows_of(cells)

    def _cells(self, sides: Any) -> NDArray[np.intp]:
        return np.asarray(np.rint(sides @ np.arange(self.n_cells)), dtype=np.intp)

    def _pick(self, chosen: NDArray[np.intp], kind: str) -> Estimates:
        # What replicates know of the design cannot be taken apart.
        spread = self.spreads.get(kind, self.spreads["design"])
        return Estimates(self.values[chosen], spread.picked(chosen))
