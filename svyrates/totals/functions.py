"""Smooth functions of totals that the package uses, with their derivatives."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from svyrates.totals.cells import blocks
from svyrates.totals.matrices import scaled

__all__ = ["ByComplexStep", "Linear", "RatesOfSides"]

FloatArray = NDArray[np.float64]

# Everyone less a group may leave rounding noise where nobody is; a replicate may count a person as
# a fraction, but never as so little.
_NOBODY = 1e-6
_TINY = 1e-100
_COMPLEX_ELEMENTS = 2_000_000


@dataclass(frozen=True, slots=True)
class Linear:
    """`x -> matrix @ x`, `matrix` (m, k) sparse."""

    matrix: Any

    def value(self, at: FloatArray) -> FloatArray:
        """Value at (k,) or (r, k)."""
        return np.asarray((self.matrix @ at.T).T)

    def jacobian(self, at: FloatArray) -> Any:  # noqa: ARG002 - the same everywhere
        """The matrix itself."""
        return self.matrix


@dataclass(frozen=True, slots=True)
class ByComplexStep:
    """Any function of the last axis made of arithmetic, exp and log, of moderate size.

    Its derivative along a coordinate is `Im f(x + ih)/h`, exact to the last digit because nothing
    is subtracted (Squire & Trapp 1998, SIAM Review 40, 110-112).
    """

    function: Callable[[Any], Any]

    def value(self, at: FloatArray) -> FloatArray:
        """Value at (k,) or (r, k)."""
        return np.asarray(self.function(at))

    def jacobian(self, at: FloatArray) -> FloatArray:
        """Derivatives at one vector, shape (m, k)."""
        columns = []
        step = max(_COMPLEX_ELEMENTS // at.size, 1)
        for start in range(0, at.size, step):
            stop = min(start + step, at.size)
            moved = np.tile(at.astype(np.complex128), (stop - start, 1))
            moved[np.arange(stop - start), np.arange(start, stop)] += 1j * _TINY
            columns.append(np.imag(self.function(moved)) / _TINY)
        return np.concatenate(columns).T


@dataclass(frozen=True, slots=True)
class RatesOfSides:
    """Weighted and unweighted rates of sides: totals -> `[p_1 … p_m | u_1 … u_m]`.

    A side is a signed sum of cells, `sides` (m, cells): a group, a union of groups, everyone, or
    everyone less a group. `p = Y/N`, `u = y/n`; NaN where the side is empty, and then without
    derivatives.
    """

    sides: Any

    def value(self, at: FloatArray) -> FloatArray:
        """Rates at totals (4 cells,) or (r, 4 cells)."""
        n, y, weighted_n, weighted_y = (self._summed(block) for block in blocks(at))
        filled = n > _NOBODY
        return np.concatenate(
            (_ratio(weighted_y, weighted_n, filled), _ratio(y, n, filled)), axis=-1
        )

    def jacobian(self, at: FloatArray) -> Any:
        """`∂p/∂Y = 1/N` and `∂p/∂N = -p/N` along each side."""
        n, y, weighted_n, weighted_y = (self._summed(block) for block in blocks(at))
        filled = n > _NOBODY
        weighted = _derivatives(self.sides, weighted_y, weighted_n, filled)
        plain = _derivatives(self.sides, y, n, filled)
        if not sparse.issparse(self.sides):
            nothing = np.zeros((self.sides.shape[0], 2 * self.sides.shape[1]))
            return np.block([[nothing, *weighted], [*plain, nothing]])
        nowhere = sparse.csr_array(self.sides.shape)
        return sparse.block_array(
            [[nowhere, nowhere, *weighted], [*plain, nowhere, nowhere]], format="csr"
        )

    def _summed(self, block: FloatArray) -> FloatArray:
        return np.asarray((self.sides @ block.T).T)


def _ratio(numerator: FloatArray, denominator: FloatArray, filled: NDArray[np.bool_]) -> FloatArray:
    nothing = np.full(numerator.shape, np.nan)
    np.divide(numerator, denominator, out=nothing, where=filled)
    return nothing


def _derivatives(
    sides: Any, numerator: FloatArray, denominator: FloatArray, filled: NDArray[np.bool_]
) -> tuple[Any, Any]:
    inverse = np.divide(1.0, denominator, out=np.zeros_like(denominator), where=filled)
    return scaled(-numerator * inverse**2, sides), scaled(inverse, sides)
