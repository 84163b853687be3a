"""What a reader who knows the sums of a table can infer about the cells withheld from it.

A table crosses factors; its cells are counts. The reader is taken to know every sum over any of
the factors, and every cell that is not withheld. A withheld cell is safe if another table of whole,
non-negative counts fits all of that and has another count there. The difference between two such
tables is a *move*: whole numbers, zero outside the withheld cells, that add up to zero along every
line of the table.

The simplest move takes one cell and one that differs from it in every factor, and adds and
subtracts a step at the corners of the box between them by turns: two cells of one factor, four of
two, eight of three. Where no box will do, integer programming looks for any move at all.

The idea of complementary suppression is Cox (1980), Journal of the American Statistical
Association 75, 377-385; choosing the cells by optimization is Fischetti & Salazar-González (2001),
Management Science 47, 1008-1027 (both from memory).
"""

from __future__ import annotations

from itertools import product

import numpy as np
from numpy.typing import NDArray
from scipy import optimize, sparse

__all__ = ["cheapest_move", "recoverable_cells"]

BoolArray = NDArray[np.bool_]
FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


def recoverable_cells(withheld: BoolArray) -> BoolArray:
    """Find withheld cells that follow exactly from the others and the sums, by linear algebra.

    Parameters
    ----------
    withheld : k-way array, every factor with two levels or more

    Returns
    -------
    k-way array
        Cells whose unit vector lies in the row space of the equations that the sums give for the
        withheld cells: whose diagonal element of the projection onto that space is 1.

    Notes
    -----
    That counts are whole and not negative can reveal more than this; `cheapest_move` heeds it.
    """
    found = np.zeros(withheld.shape, dtype=np.bool_)
    if not withheld.ndim or not withheld.any():
        return found
    lines = _lines(withheld.shape)[:, withheld.ravel()]
    used, lines = np.unique(lines, return_inverse=True)
    lines = lines.reshape(withheld.ndim, -1)
    gram = np.zeros((used.size, used.size))
    for one, other in product(lines, repeat=2):
        np.add.at(gram, (one, other), 1.0)
    inverse = np.linalg.pinv(gram, rcond=1e-10, hermitian=True)
    projection = sum(inverse[one, other] for one, other in product(lines, repeat=2))
    found[withheld] = np.abs(projection - 1.0) < 1e-8
    return found


def cheapest_move(
    cell: tuple[int, ...],
    lower: IntArray,
    upper: IntArray,
    cost: FloatArray,
    step: int,
) -> IntArray | None:
    """Find a cheap move that changes a cell by at least a step, up or down.

    Parameters
    ----------
    cell : index of the cell
    lower, upper : k-way arrays, between which the move must lie
    cost : k-way array, what it costs to withhold each cell; 0 where it is withheld anyway
    step : smallest change of the cell

    Returns
    -------
    k-way array or None
        The cheapest box; without one, a cheap move of any kind; None if there is no move.
    """
    boxes = [_cheapest_box(cell, lower, upper, cost, step * sign) for sign in (1, -1)]
    price, move = min(boxes, key=lambda box: box[0])
    if np.isfinite(price):
        return move
    for sign in (1, -1):
        any_move = _any_move(cell, lower, upper, cost, step * sign)
        if any_move is not None:
            return any_move
    return None


def _cheapest_box(
    cell: tuple[int, ...], lower: IntArray, upper: IntArray, cost: FloatArray, step: int
) -> tuple[float, IntArray]:
    """Price and move of the cheapest box; an infinite price says that there is none."""
    shape = cost.shape
    up = np.where(upper >= abs(step), cost, np.inf)
    down = np.where(lower <= -abs(step), cost, np.inf)
    price = np.zeros(shape)
    for crossed in product((False, True), repeat=len(shape)):
        odd = sum(crossed) % 2 == 1
        corner = up if (step > 0) != odd else down
        # The corner keeps the cell's level of a factor, or has that of the opposite cell.
        kept = tuple(
            slice(None) if across else slice(at, at + 1)
            for across, at in zip(crossed, cell, strict=True)
        )
        price = price + corner[kept]
    for axis, at in enumerate(cell):
        np.moveaxis(price, axis, 0)[at] = np.inf
    opposite = np.unravel_index(int(np.argmin(price)), shape)
    move = np.zeros(shape, dtype=np.int64)
    for crossed in product((False, True), repeat=len(shape)):
        corner_at = tuple(
            there if across else here
            for across, here, there in zip(crossed, cell, opposite, strict=True)
        )
        move[corner_at] = step * (-1) ** sum(crossed)
    return float(price[opposite]), move


def _any_move(
    cell: tuple[int, ...], lower: IntArray, upper: IntArray, cost: FloatArray, step: int
) -> IntArray | None:
    """Any move that changes the cell by the step or more, cheap in the sum of cost times change.

    The variables are what each cell gains and what it loses.
    """
    n_cells = cost.size
    lines = _lines(cost.shape)
    along = sparse.csr_array(
        (np.ones(lines.size), (lines.ravel(), np.tile(np.arange(n_cells), len(lines))))
    )
    most = np.concatenate((upper.ravel(), -lower.ravel())).astype(np.float64)
    least = np.zeros(2 * n_cells)
    at = int(np.ravel_multi_index(cell, cost.shape))
    gains, loses = (at, at + n_cells) if step > 0 else (at + n_cells, at)
    least[gains], most[loses] = abs(step), 0.0
    if most[gains] < abs(step):
        return None
    found = optimize.milp(
        np.tile(cost.ravel(), 2),
        integrality=np.ones(2 * n_cells),
        bounds=optimize.Bounds(least, most),
        constraints=optimize.LinearConstraint(sparse.hstack((along, -along)), 0.0, 0.0),
    )
    if found.x is None:
        return None
    gained, lost = np.split(np.rint(found.x).astype(np.int64), 2)
    move: IntArray = (gained - lost).reshape(cost.shape)
    # What a solver says is checked in whole numbers before anyone relies on it.
    balanced = all(not move.sum(axis=axis).any() for axis in range(move.ndim))
    inside = bool(((move >= lower) & (move <= upper)).all())
    return move if balanced and inside and move[cell] * np.sign(step) >= abs(step) else None


def _lines(shape: tuple[int, ...]) -> IntArray:
    """Number the lines along each factor: shape (factors, cells), the line each cell lies on."""
    rows, start = [], 0
    for axis, length in enumerate(shape):
        n_lines = int(np.prod(shape)) // length
        others = (*shape[:axis], 1, *shape[axis + 1 :])
        numbers = np.arange(start, start + n_lines).reshape(others)
        rows.append(np.broadcast_to(numbers, shape).ravel())
        start += n_lines
    return np.array(rows, dtype=np.int64)
