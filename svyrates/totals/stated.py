"""A stated covariance: what published figures come with."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from svyrates.totals.estimates import SmoothFunction
from svyrates.totals.matrices import as_array

__all__ = ["StatedSpread"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]


@dataclass(frozen=True, slots=True)
class StatedSpread:
    """A covariance `matrix` (k, k) that was given; NaN where it is unknown."""

    matrix: FloatArray

    def apply(self, function: SmoothFunction, at: FloatArray) -> StatedSpread:
        """Carry the covariance through the derivatives of the function."""
        jacobian: Any = as_array(function.jacobian(at))
        unknown = np.isnan(self.matrix.diagonal())
        known = np.where(unknown[:, None] | unknown[None, :], 0.0, self.matrix)
        carried = np.asarray(jacobian @ known @ jacobian.T)
        lost = (jacobian[:, unknown] != 0.0).any(axis=1)
        carried[lost, :] = np.nan
        carried[:, lost] = np.nan
        return StatedSpread(carried)

    def picked(self, chosen: IntArray) -> StatedSpread:
        """The spread of some elements, in the order chosen."""
        return StatedSpread(self.matrix[np.ix_(chosen, chosen)])

    def covariance(self) -> FloatArray:
        """Covariance matrix, shape (k, k)."""
        return self.matrix.copy()

    def variance(self) -> FloatArray:
        """Its diagonal, shape (k,)."""
        return self.matrix.diagonal().copy()

    def gaps(self) -> FloatArray:
        """No replicates, no gaps, shape (k,)."""
        return np.zeros(self.matrix.shape[0])

    def astray(self) -> NDArray[np.bool_]:
        """No replicates, none astray, shape (k,)."""
        return np.zeros(self.matrix.shape[0], dtype=bool)

    def satterthwaite(self, plus: IntArray, minus: IntArray) -> FloatArray:  # noqa: ARG002
        """A covariance does not tell the strata's contributions."""
        return np.full(plus.size, np.nan)
