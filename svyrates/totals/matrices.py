"""Small matrices are dense, large ones sparse; what is written here serves both.

A sparse product costs a tenth of a millisecond before it does anything, and a usual question needs
hundreds of them; a dense matrix of all units by 500 groups costs gigabytes.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

__all__ = [
    "DENSE_ELEMENTS",
    "DENSE_SHARE",
    "as_array",
    "fits",
    "indicator",
    "lighter",
    "scaled",
    "stack_rows",
]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]

# Up to this many elements a dense matrix is faster than a sparse one, whatever it holds.
DENSE_ELEMENTS = 1_000_000
# Above this share of filled elements a dense matrix is also the smaller one.
DENSE_SHARE = 0.25


def fits(*shape: int) -> bool:
    """Whether a matrix of this shape may be dense without a second thought."""
    return int(np.prod(shape, dtype=np.float64)) <= DENSE_ELEMENTS


def as_array(matrix: Any) -> Any:
    """The matrix as an array, whatever it is."""
    return matrix.toarray() if sparse.issparse(matrix) else matrix


def lighter(matrix: Any) -> Any:
    """The matrix as an array where that is faster or smaller, else as it is."""
    if not sparse.issparse(matrix):
        return matrix
    if fits(*matrix.shape) or matrix.nnz > DENSE_SHARE * matrix.shape[0] * matrix.shape[1]:
        return matrix.toarray()
    return matrix


def indicator(row: IntArray, column: IntArray, values: FloatArray, shape: tuple[int, int]) -> Any:
    """Matrix with the values added up at their positions."""
    if not fits(*shape):
        return sparse.csr_array((values, (row, column)), shape=shape)
    flat = np.bincount(row * shape[1] + column, weights=values, minlength=shape[0] * shape[1])
    return flat.reshape(shape)


def scaled(factors: FloatArray, matrix: Any) -> Any:
    """Each row of the matrix times its factor."""
    if sparse.issparse(matrix):
        return (sparse.diags_array(factors) @ matrix).tocsr()
    return factors[:, None] * matrix


def stack_rows(parts: Sequence[Any]) -> Any:
    """Matrices with the same columns below each other."""
    if len(parts) == 1:
        return parts[0]
    size = sum(part.shape[0] for part in parts) * parts[0].shape[1]
    filled = sum(part.nnz if sparse.issparse(part) else part.size for part in parts)
    if fits(size) or filled > DENSE_SHARE * size:
        return np.concatenate([as_array(part) for part in parts])
    return sparse.vstack([sparse.csr_array(part) for part in parts], format="csr")
