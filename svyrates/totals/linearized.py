"""Linearized spread: rows of unit totals, centred within their strata and weighted.

`V = rowsᵀ diag(weight) rows`, where every stage of sampling has added its rows; `unit_totals` makes
them.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from svyrates.totals.estimates import ZERO, SmoothFunction
from svyrates.totals.matrices import lighter

__all__ = ["LinearizedSpread"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]


@dataclass(frozen=True, slots=True)
class LinearizedSpread:
    """`V = rowsᵀ diag(weight) rows`.

    Attributes
    ----------
    rows : (rows, k), dense or sparse
    weight : (rows,); negative for the rows that subtract a mean
    stratum : (rows,) stratum that each row belongs to
    n_units : (strata,) first-stage units; strata with fewer than two carry no degrees of freedom
    """

    rows: Any
    weight: FloatArray
    stratum: IntArray
    n_units: IntArray

    def apply(self, function: SmoothFunction, at: FloatArray) -> LinearizedSpread:
        """Carry every row through the derivatives of the function."""
        jacobian = function.jacobian(at)
        rows = (jacobian @ self.rows.T).T
        if sparse.issparse(rows):
            rows = lighter(rows.tocsr())
        return LinearizedSpread(rows, self.weight, self.stratum, self.n_units)

    def picked(self, chosen: IntArray) -> LinearizedSpread:
        """The spread of some elements, in the order chosen."""
        return replace(self, rows=self.rows[:, chosen])

    def covariance(self) -> FloatArray:
        """Covariance matrix, shape (k, k)."""
        if sparse.issparse(self.rows):
            weighted = sparse.diags_array(self.weight) @ self.rows
            matrix = (self.rows.T @ weighted).toarray()
        else:
            matrix = self.rows.T @ (self.weight[:, None] * self.rows)
        matrix = (matrix + matrix.T) / 2.0
        np.fill_diagonal(matrix, self.variance())
        return np.asarray(matrix)

    def variance(self) -> FloatArray:
        """Variances, shape (k,); what rounding leaves of zero is zero."""
        squares = self.rows.multiply(self.rows) if sparse.issparse(self.rows) else self.rows**2
        variance = np.asarray(squares.T @ self.weight).ravel()
        formed_from = np.asarray(squares.T @ np.abs(self.weight)).ravel()
        return np.where(variance < ZERO * formed_from, 0.0, variance)

    def gaps(self) -> FloatArray:
        """Nothing is undefined in a part of a linearized spread, shape (k,)."""
        return np.zeros(self.rows.shape[1])

    def astray(self) -> NDArray[np.bool_]:
        """A linearized spread lies about the estimate by construction, shape (k,)."""
        return np.zeros(self.rows.shape[1], dtype=bool)

    def satterthwaite(self, plus: IntArray, minus: IntArray) -> FloatArray:
        """`(ΣV_h)² / Σ(V_h²/(n_h - 1))` over the strata of the contrast `x[plus] - x[minus]`.

        Source: Satterthwaite (1946); biased low with two units a stratum.
        """
        order = np.argsort(self.stratum, kind="stable")
        bounds = np.flatnonzero(np.diff(self.stratum[order], prepend=-1, append=-1))
        total = np.zeros(plus.size)
        squares = np.zeros(plus.size)
        pair = minus >= 0
        for start, stop in pairwise(bounds.tolist()):
            members = order[start:stop]
            n_units = self.n_units[self.stratum[members[0]]]
            if n_units < 2:
                continue
            rows = self.rows[members]
            rows = rows.toarray() if sparse.issparse(rows) else rows
            here = rows.T @ (self.weight[members, None] * rows)
            variance = here[plus, plus].copy()
            variance[pair] += (here[minus, minus] - 2.0 * here[plus, minus])[pair]
            total += variance
            squares += variance**2 / (n_units - 1)
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.where(squares > 0, total**2 / squares, np.nan)
