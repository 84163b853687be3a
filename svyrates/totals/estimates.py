"""The covariance room: a vector, its spread, and smooth functions of it.

Nothing outside this folder knows what kind of spread an estimate carries.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

__all__ = ["ZERO", "Estimates", "SmoothFunction", "Spread", "Support"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]

# A variance this small beside those it is formed from is what rounding leaves of zero.
ZERO = 1e-12


class SmoothFunction(Protocol):
    """A differentiable function of a vector of estimates."""

    def value(self, at: FloatArray) -> FloatArray:
        """Value at one vector (k,) or at many (r, k); shape (m,) or (r, m)."""
        ...

    def jacobian(self, at: FloatArray) -> Any:
        """Sparse matrix of derivatives at one vector, shape (m, k)."""
        ...


class Spread(Protocol):
    """How the estimates of a vector vary from sample to sample."""

    def apply(self, function: SmoothFunction, at: FloatArray) -> Spread:
        """The spread of `function` of the vector."""
        ...

    def picked(self, chosen: IntArray) -> Spread:
        """The spread of some elements, in the order chosen."""
        ...

    def covariance(self) -> FloatArray:
        """Covariance matrix, shape (k, k)."""
        ...

    def variance(self) -> FloatArray:
        """Its diagonal, shape (k,), without forming the matrix."""
        ...

    def gaps(self) -> FloatArray:
        """Share of the replicates in which each element is undefined, shape (k,)."""
        ...

    def astray(self) -> NDArray[np.bool_]:
        """Elements whose replicates do not lie about the estimate, shape (k,)."""
        ...

    def satterthwaite(self, plus: IntArray, minus: IntArray) -> FloatArray:
        """Satterthwaite degrees of freedom of `x[plus] - x[minus]`; a minus of -1 is nothing."""
        ...


class Support(Protocol):
    """In which sampling units the members of a group sit; answers for degrees of freedom."""

    def domain(self, sides: Any) -> tuple[IntArray, IntArray]:
        """Units and strata with a member, for every row of `sides` (sides, cells)."""
        ...


@dataclass(frozen=True, slots=True)
class Estimates:
    """A vector of estimates, shape (k,), with its spread."""

    values: FloatArray
    spread: Spread

    def apply(self, function: SmoothFunction) -> Estimates:
        """Estimates of a smooth function of the vector."""
        return Estimates(function.value(self.values), self.spread.apply(function, self.values))

    def covariance(self) -> FloatArray:
        """Covariance matrix, shape (k, k)."""
        return self.spread.covariance()

    def variance(self) -> FloatArray:
        """Variances, shape (k,)."""
        return self.spread.variance()
