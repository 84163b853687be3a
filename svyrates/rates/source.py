"""What a table of rates needs from where its rates come from."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal, Protocol

import numpy as np
from numpy.typing import NDArray

from svyrates.totals import ZERO, Estimates

__all__ = ["RateSource", "SideRates", "SpreadKind", "freedom_of", "variances"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
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
    own_df : (m,) degrees of freedom that came with the rates; None where they are counted
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
    own_df: FloatArray | None = None

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


class RateSource(Protocol):
    """Rates of one block of cells, and of what can be formed from them."""

    @property
    def design_df(self) -> int:
        """Units minus strata of the whole design."""
        ...

    @property
    def scheme_df(self) -> float | None:
        """Degrees of freedom of the replicates, None without them."""
        ...

    @property
    def no_variance(self) -> str:
        """Why a variance may be missing, as part of a sentence."""
        ...

    @property
    def n_cells(self) -> int:
        """Cells in the block."""
        ...

    @property
    def adds_cells(self) -> bool:
        """Whether the rate of a union of cells is known."""
        ...

    @property
    def knows_records(self) -> bool:
        """Whether the variance of independent records is known."""
        ...

    @property
    def tells_strata_apart(self) -> bool:
        """Whether the parts of the design's variance can be told apart."""
        ...

    def estimates(self, sides: Any, kind: SpreadKind = "design") -> Estimates:
        """Estimates of `[rate | unweighted]` of each row of `sides` (m, cells)."""
        ...

    def sides(self, sides: Any) -> SideRates:
        """Rates of each row of `sides` (m, cells), a signed sum of cells."""
        ...

    def row(self, cells: dict[int, float]) -> Any:
        """One side as a row: cell -> sign."""
        ...

    def rows_of(self, cells: list[int]) -> Any:
        """Sides that are single cells."""
        ...


def variances(
    found: SideRates, source: RateSource, df: str | float | None
) -> tuple[FloatArray, FloatArray]:
    """Variance of each side's rate, NaN where undefined, and its degrees of freedom."""
    variance = found.variance()
    undefined = (found.n == 0) | found.certain | ((variance == 0.0) & (found.units < 2))
    undefined |= np.isnan(variance)
    freedom = freedom_of(found, source, df)
    return np.where(undefined, np.nan, variance), np.where(found.n > 0, freedom, np.nan)


def freedom_of(found: SideRates, source: RateSource, df: str | float | None) -> FloatArray:
    """Degrees of freedom of each side's rate under a rule."""
    m = found.rate.size
    if found.own_df is not None:
        return found.own_df
    if df is None or df == "domain":
        return (found.units - found.strata).astype(np.float64)
    if df == "scheme":
        return np.full(m, np.nan if source.scheme_df is None else source.scheme_df)
    if df == "design":
        return np.full(m, float(source.design_df))
    if df == "satterthwaite":
        return found.stacked.spread.satterthwaite(np.arange(m), np.full(m, -1))
    return np.full(m, float(df))
