"""Hadamard matrices of the orders that balanced half-samples need.

Sylvester's doubling and Paley's two constructions (1933) over prime fields give most multiples of
4; where one is not at hand, the next order is taken.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["hadamard"]

IntArray = NDArray[np.int8]


def hadamard(least: int) -> IntArray:
    """Smallest matrix at hand of an order of at least `least`, first column all ones.

    Returns
    -------
    array of -1 and 1, shape (order, order), with orthogonal columns
    """
    order = max(least, 1)
    while True:
        matrix = _of_order(order)
        if matrix is not None:
            return (matrix * matrix[:, :1]).astype(np.int8)
        order += 1


def _of_order(order: int) -> IntArray | None:
    if order in (1, 2):
        return np.array([[1]] if order == 1 else [[1, 1], [1, -1]], dtype=np.int8)
    if order % 4:
        return None
    if _is_prime(order - 1):
        return _first_paley(order - 1)
    if _is_prime(order // 2 - 1) and (order // 2 - 1) % 4 == 1:
        return _second_paley(order // 2 - 1)
    half = _of_order(order // 2)
    return None if half is None else np.block([[half, half], [half, -half]])


def _is_prime(number: int) -> bool:
    return number > 1 and all(number % divisor for divisor in range(2, int(number**0.5) + 1))


def _quadratic(q: int) -> IntArray:
    """Jacobsthal's matrix: 1 where the difference of row and column is a square modulo q."""
    character = np.full(q, -1, dtype=np.int8)
    character[np.unique(np.arange(1, q) ** 2 % q)] = 1
    character[0] = 0
    rows = np.arange(q)
    return np.asarray(character[(rows[:, None] - rows[None, :]) % q])


def _first_paley(q: int) -> IntArray:
    """Order q + 1, for a prime q of the form 4k + 3."""
    skew = np.zeros((q + 1, q + 1), dtype=np.int8)
    skew[0, 1:] = 1
    skew[1:, 0] = -1
    skew[1:, 1:] = _quadratic(q)
    return skew + np.eye(q + 1, dtype=np.int8)


def _second_paley(q: int) -> IntArray:
    """Order 2(q + 1), for a prime q of the form 4k + 1."""
    symmetric = np.zeros((q + 1, q + 1), dtype=np.int8)
    symmetric[0, 1:] = symmetric[1:, 0] = 1
    symmetric[1:, 1:] = _quadratic(q)
    off = np.array([[1, 1], [1, -1]], dtype=np.int8)
    on = np.array([[1, -1], [-1, -1]], dtype=np.int8)
    return np.kron(symmetric, off) + np.kron(np.eye(q + 1, dtype=np.int8), on)
