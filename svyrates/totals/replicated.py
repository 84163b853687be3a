"""Replicated spread: the vector itself under every replicate.

`V = Σ c_r (θ_r - θ)²` about the full-sample estimate, or about the replicate mean. Sources: Wolter
(2007), chapters 3 to 5.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from svyrates.totals.cells import CellTotals
from svyrates.totals.estimates import ZERO, SmoothFunction

if TYPE_CHECKING:
    from svyrates.design.replicates import ReplicateSet
    from svyrates.tally import ReplicateTally

__all__ = ["MOST_LEFT_OUT", "ReplicateTotals", "ReplicatedSpread"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]

# Beyond this share of replicates in which a rate is undefined, its variance is undefined too.
MOST_LEFT_OUT = 0.10
# The square of t beyond which a mean of so many replicates is no accident.
_FAR_OFF, _ENOUGH_TO_TELL = 25.0, 10


@dataclass(frozen=True)
class ReplicatedSpread:
    """A vector under every replicate.

    Attributes
    ----------
    values : (replicates, k); NaN where undefined in a replicate
    centre : (k,) the vector in the full sample
    replicates : the scheme
    """

    values: FloatArray
    centre: FloatArray
    replicates: ReplicateSet

    def apply(self, function: SmoothFunction, at: FloatArray) -> ReplicatedSpread:
        """The function under every replicate."""
        return replace(self, values=function.value(self.values), centre=function.value(at))

    def picked(self, chosen: IntArray) -> ReplicatedSpread:
        """The spread of some elements, in the order chosen."""
        return replace(self, values=self.values[:, chosen], centre=self.centre[chosen])

    def gaps(self) -> FloatArray:
        """Share of the replicates in which each element is undefined, shape (k,)."""
        missing = np.isnan(self.values).mean(axis=0)
        # An element that the full sample does not define has no variance, and no gaps.
        return np.where(np.isnan(self.centre), 0.0, missing)

    def astray(self) -> NDArray[np.bool_]:
        """Elements whose replicates do not lie about the full-sample estimate, shape (k,).

        Replicates of every scheme do. Their mean is tested against the estimate by a t statistic
        that chance, or the bias of a ratio, does not bring to these bounds (common practice).
        """
        beyond = [self._astray(self.values[rows]) for rows, _ in self.replicates.sets]
        return np.asarray(np.any(beyond, axis=0))

    def _astray(self, values: FloatArray) -> NDArray[np.bool_]:
        """The same for the replicates of one set, shape (replicates of the set, k)."""
        defined = ~np.isnan(values)
        count = defined.sum(axis=0)
        away = np.where(defined, values - self.centre, 0.0)
        with np.errstate(invalid="ignore", divide="ignore"):
            mean = away.sum(axis=0) / count
            about_mean = (away**2).sum(axis=0) / count - mean**2
            beyond = count * mean**2 > np.maximum(_FAR_OFF, count / 4.0) * about_mean
        return np.asarray(beyond & (np.abs(mean) > ZERO) & (count >= _ENOUGH_TO_TELL))

    def covariance(self) -> FloatArray:
        """Covariance matrix, shape (k, k).

        All elements use the same replicates: those in which every element with few enough gaps is
        defined, their coefficients scaled up for the ones left out.
        """
        usable = self._usable()
        missing = np.asarray(np.isnan(self.values[:, usable]).any(axis=1))
        if not self._enough(missing):
            usable &= self.gaps() == 0.0
            missing = np.asarray(np.isnan(self.values[:, usable]).any(axis=1))
        kept = ~missing
        away = self._away(self.values[kept][:, usable], self.centre[usable], kept)
        weight = self._coefficients(kept)
        matrix = np.full((self.centre.size, self.centre.size), np.nan)
        matrix[np.ix_(usable, usable)] = away.T @ (weight[:, None] * away)
        return matrix

    def variance(self) -> FloatArray:
        """Variances, shape (k,), each from all replicates in which it is defined."""
        usable = self._usable()
        variance = np.full(self.centre.size, np.nan)
        whole = usable & (self.gaps() == 0.0)
        every = np.ones(self.values.shape[0], dtype=bool)
        away = self._away(self.values[:, whole], self.centre[whole], every)
        variance[whole] = self._coefficients(every) @ away**2
        for position in np.flatnonzero(usable & ~whole):
            kept = ~np.isnan(self.values[:, position])
            away = self._away(self.values[kept, position], self.centre[position], kept)
            variance[position] = self._coefficients(kept) @ away**2
        with np.errstate(invalid="ignore"):
            return np.where(variance < ZERO * self.centre**2 * ZERO, 0.0, variance)

    def satterthwaite(self, plus: IntArray, minus: IntArray) -> FloatArray:
        """`(ΣV_h)² / Σ(V_h²/(n_h - 1))` over the strata of the replicates."""
        stratum, units = self.replicates.stratum, self.replicates.units
        if stratum is None or units is None:
            return np.full(plus.size, np.nan)
        away = self.values - self.centre
        contrast = away[:, plus] - np.where(minus >= 0, away[:, minus], 0.0)
        each = self.replicates.coefficients[:, None] * contrast**2
        strata, first, position = np.unique(stratum, return_index=True, return_inverse=True)
        by_stratum = np.zeros((strata.size, plus.size))
        np.add.at(by_stratum, position, each)
        squares = (by_stratum**2 / (units[first] - 1.0)[:, None]).sum(axis=0)
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.where(squares > 0, by_stratum.sum(axis=0) ** 2 / squares, np.nan)

    def _usable(self) -> NDArray[np.bool_]:
        return ~np.isnan(self.centre) & self._enough(np.isnan(self.values))

    def _enough(self, missing: NDArray[np.bool_]) -> NDArray[np.bool_]:
        """Whether every set misses few enough of its replicates; `missing` (replicates, ...)."""
        enough = [
            missing[rows].mean(axis=0) <= (MOST_LEFT_OUT if may_leave_out else 0.0)
            for rows, may_leave_out in self.replicates.sets
        ]
        return np.asarray(np.all(enough, axis=0))

    def _away(self, values: FloatArray, centre: Any, kept: NDArray[np.bool_]) -> FloatArray:
        if self.replicates.centre_on_mean and kept.any():
            centre = values.mean(axis=0)
        return np.asarray(values - centre)

    def _coefficients(self, kept: NDArray[np.bool_]) -> FloatArray:
        scaled = self.replicates.coefficients.copy()
        # Sets side by side are independent: what one leaves out, the others cannot stand in for.
        for rows, _ in self.replicates.sets:
            scaled[rows] *= kept[rows].size / max(int(kept[rows].sum()), 1)
        return scaled[kept]


@dataclass(frozen=True)
class ReplicateTotals(CellTotals):
    """Totals of the cells under every replicate.

    Attributes
    ----------
    sums : the tally under every replicate
    replicates : the scheme
    """

    sums: ReplicateTally
    replicates: ReplicateSet

    @cached_property
    def spread(self) -> ReplicatedSpread:
        """Totals under every replicate."""
        values = self.laid_out(self.sums.n, self.sums.w)
        return ReplicatedSpread(values, self.totals, self.replicates)
