"""What no regression can be fitted to, and how to say so: one outcome, collinearity, separation."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from svyrates.errors import QuestionError, some

__all__ = ["Basis", "check_separation", "model_basis"]

FloatArray = NDArray[np.float64]

# Smallest eigenvalue of the columns' correlations about 0 at which their products can be trusted:
# half the digits are left.
_ENOUGH_DIGITS = 1e-8
# Length of what a column has of its own, as a share of its length, below which it has nothing.
_NOTHING_OWN = 1e-10


@dataclass(frozen=True, slots=True)
class Basis:
    """Columns of the span of a model matrix that are safe to work with.

    Attributes
    ----------
    matrix : (rows, k) the model matrix itself, or nearly orthogonal columns of its span
    change : (k, k), model matrix = matrix @ change; None for the model matrix itself
    names : (k,) columns of the model matrix
    """

    matrix: FloatArray
    change: FloatArray | None
    names: Sequence[str]

    def of(self, x: FloatArray) -> FloatArray:
        """Another model matrix of the same columns, in this basis."""
        return x if self.change is None else np.asarray(x @ np.linalg.inv(self.change))

    def coefficients(self, of_basis: FloatArray) -> FloatArray:
        """Coefficients of the model matrix from those of the basis, (…, k)."""
        if self.change is None:
            return of_basis
        return np.asarray(of_basis @ np.linalg.inv(self.change).T)


def model_basis(x: FloatArray, y: FloatArray, w: FloatArray, names: Sequence[str]) -> Basis:
    """Refuse what no regression can fit, say why, and give columns that are safe to work with.

    A polynomial in the calendar year has columns of its own, but products of them lose all digits:
    such columns are made orthogonal.

    Raises
    ------
    QuestionError
        For too few records, one outcome only, or columns that are sums of others.
    """
    used = w != 0.0
    n, k = int(used.sum()), x.shape[1]
    successes = float(y[used].sum())
    if n <= k:
        raise QuestionError(f"The model has {k} coefficients for {n} records. Ask for less.")
    if successes in (0.0, float(n)):
        raise QuestionError(
            f"The outcome is {int(successes > 0)} in all {n} records of the model: there is "
            "nothing to explain."
        )
    rows = x if used.all() else x[used]
    gram = rows.T @ rows
    length = np.sqrt(gram.diagonal())
    empty = [name for name, size in zip(names, length, strict=True) if size == 0.0]
    if empty:
        raise QuestionError(f"The model's columns {some(empty, 5)} are zero in every record.")
    if np.linalg.eigvalsh(gram / np.outer(length, length))[0] > _ENOUGH_DIGITS:
        return Basis(x, None, names)
    return _orthogonal(x, rows, length, names)


def _orthogonal(x: FloatArray, rows: FloatArray, length: FloatArray, names: Sequence[str]) -> Basis:
    """Pivoted QR, whose last columns have little or nothing of their own."""
    from scipy import linalg

    triangle, order = linalg.qr(rows / length, mode="r", pivoting=True)
    triangle = triangle[: len(order)]
    own = np.abs(triangle.diagonal())
    rank = int((own > _NOTHING_OWN * own[0]).sum())
    if rank < len(order):
        made_of = np.linalg.solve(triangle[:rank, :rank], triangle[:rank, rank])
        involved = sorted([*order[:rank][np.abs(made_of) > 1e-6], order[rank]])
        raise QuestionError(
            f"The model's columns {some([names[i] for i in involved], 8)} are collinear: one of "
            "them is a sum of the others. Leave a term out, or join levels."
        )
    change = np.empty_like(triangle)
    change[:, order] = triangle * length[order] / np.sqrt(len(rows))
    return Basis(x @ np.linalg.inv(change), change, names)


def check_separation(
    basis: Basis, y: FloatArray, w: FloatArray, step: FloatArray, moved: FloatArray
) -> None:
    """Raise where a step could be repeated for ever and never lower a record's likelihood.

    A step d with `x d ≥ 0` wherever y is 1 and `x d ≤ 0` wherever y is 0, not 0 everywhere, proves
    that the likelihood has no maximum (Albert & Anderson 1984, Biometrika 71, 1-10). Under
    separation Newton's steps tend to such a direction. `moved` is `x d`.

    Raises
    ------
    QuestionError
        Naming the columns that tell the outcome without error.
    """
    right = np.where(y == 1.0, moved, -moved)[w != 0.0]
    largest = float(right.max())
    if right.min() < -1e-6 * largest or largest <= 0.0:
        return
    told = int((right > 1e-5 * largest).sum())
    matrix, change = basis.matrix, basis.change
    size = (matrix**2).mean(axis=0) if change is None else (change**2).sum(axis=0)
    share = np.abs(basis.coefficients(step)) * np.sqrt(size)
    involved = [
        name for name, part in zip(basis.names, share, strict=True) if part > 1e-3 * share.max()
    ]
    if len(involved) > 1:
        involved = [name for name in involved if name != "Intercept"]
    raise QuestionError(
        f"The outcome is separated: in {told} of {right.size} records the columns "
        f"{some(involved, 8)} tell it without error, as a level does that has only successes or "
        "only failures, so that their coefficients have no finite estimate. Join levels or leave "
        "a term out."
    )
