"""From atoms to cells: what totals of every kind share."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from svyrates.tally import Tally
from svyrates.totals.estimates import ZERO, Spread
from svyrates.totals.linearized import LinearizedSpread
from svyrates.totals.matrices import (
    DENSE_ELEMENTS,
    as_array,
    fits,
    indicator,
    scaled,
    stack_rows,
)

__all__ = ["CellTotals", "about_mean", "blocks", "chunks"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]


@dataclass(frozen=True)
class CellTotals:
    """A tally, and the cells that its atoms belong to.

    Attributes
    ----------
    tally : Tally
    membership : (patterns, cells) sparse, or an array of bool; who belongs where
    n_records : records in the sample
    """

    tally: Tally
    membership: Any
    n_records: int

    @property
    def n_cells(self) -> int:
        """Cells of all outcomes together."""
        return int(self.membership.shape[1] * self.tally.level.shape[1])

    def cells_of(self, atom: IntArray) -> tuple[Any, Any]:
        """Cells that each atom answers in, and succeeds in; (atoms, outcomes × cells)."""
        of_atom = self.membership[self.tally.pattern[atom]]
        levels = self.tally.level[atom].T
        answered = [scaled((level < 2).astype(np.float64), of_atom) for level in levels]
        success = [scaled((level == 1).astype(np.float64), of_atom) for level in levels]
        if sparse.issparse(of_atom):
            return sparse.hstack(answered, format="csr"), sparse.hstack(success, format="csr")
        return np.hstack(answered), np.hstack(success)

    def by_cell(self, of_pair: FloatArray, *, answered: bool) -> FloatArray:
        """Sum a number of each pair by cell, over the answered records or over the others."""
        of_atom = self._by_atom(of_pair)
        sums = np.zeros((self.tally.level.shape[1], self.membership.shape[1]))
        for chunk in chunks(of_atom.size, self.membership.shape[1]):
            members = self.membership[self.tally.pattern[chunk]]
            known = (self.tally.level[chunk] < 2) == answered
            sums += np.asarray(members.T @ (of_atom[chunk, None] * known)).T
        return sums.ravel()

    def rows(self, row: IntArray, atom: IntArray, n_rows: int, n: FloatArray, w: FloatArray) -> Any:
        """Sum pairs into rows, shape (rows, 4 cells), columns `[n | y | N | Y]`."""
        atoms, position = np.unique(atom, return_inverse=True)
        answered, success = self.cells_of(atoms)
        shape = (n_rows, atoms.size)
        counts, weights = indicator(row, position, n, shape), indicator(row, position, w, shape)
        if not sparse.issparse(answered) or (
            fits(n_rows, 4 * self.n_cells) and fits(*answered.shape)
        ):
            answered, success = as_array(answered), as_array(success)
            parts = [counts @ answered, counts @ success, weights @ answered, weights @ success]
            return np.hstack(parts)
        counts, weights = sparse.csr_array(counts), sparse.csr_array(weights)
        parts = [counts @ answered, counts @ success, weights @ answered, weights @ success]
        return sparse.hstack(parts, format="csr")

    def moments(self, pairs: Any, group: IntArray) -> tuple[Any, IntArray]:
        """Rows whose squares are the second moments of the records of each group of pairs.

        Parameters
        ----------
        pairs : tuple of atom, n, Σw and Σw², each (pairs,)
        group : (pairs,)

        Returns
        -------
        rows : (rows, k)
        of_group : (rows,) the group that each row belongs to
        """
        k = 4 * self.n_cells
        if not group.size or sparse.issparse(self.membership) or fits(group.size, k):
            return self._moment_rows(pairs, group)
        # Many patterns of overlapping masks: keep of each group's rows a triangle with the same
        # squares (QR decomposition), at most k rows.
        order = np.argsort(group, kind="stable")
        found, of_group = [], []
        for members in np.split(order, np.flatnonzero(np.diff(group[order])) + 1):
            triangle = np.empty((0, k))
            for chunk in chunks(members.size, k):
                few = members[chunk]
                rows, _ = self._moment_rows(tuple(part[few] for part in pairs), few)
                both = np.concatenate((triangle, as_array(rows)))
                triangle = np.asarray(np.linalg.qr(both, mode="r"))
            found.append(triangle)
            of_group.append(np.full(triangle.shape[0], group[members[0]]))
        return np.concatenate(found), np.concatenate(of_group)

    def _moment_rows(self, pairs: Any, group: IntArray) -> tuple[Any, IntArray]:
        """`(√n, Σw/√n)` and `(0, √(Σw² - (Σw)²/n))` of every pair, laid out by cell."""
        atom, n, w, ww = pairs
        root = np.sqrt(n)
        rest = np.maximum(ww - w**2 / n, 0.0)
        # Equal weights leave rounding noise here, not spread.
        uneven = np.flatnonzero(rest > ZERO * ww)
        first = self.rows(np.arange(n.size), atom, n.size, root, w / root)
        if not uneven.size:
            return first, group
        nothing = np.zeros(uneven.size)
        rows = np.arange(uneven.size)
        second = self.rows(rows, atom[uneven], uneven.size, nothing, np.sqrt(rest[uneven]))
        return stack_rows([first, second]), np.concatenate((group, group[uneven]))

    def laid_out(self, n: FloatArray, w: FloatArray) -> FloatArray:
        """Sums by atom, (rows, atoms), as totals `[n | y | N | Y]` by cell, (rows, 4 cells)."""
        out = np.zeros((n.shape[0], 4 * self.n_cells))
        for chunk in chunks(n.shape[1], self.n_cells):
            answered, success = self.cells_of(np.arange(n.shape[1])[chunk])
            parts = [part[:, chunk] @ cells for part in (n, w) for cells in (answered, success)]
            out += np.hstack([np.asarray(part) for part in parts])
        return out

    @property
    def spread(self) -> Spread:
        """Spread of the totals under the design."""
        raise NotImplementedError

    @cached_property
    def totals(self) -> FloatArray:
        """Totals over the sample, shape (k,)."""
        n, w = self._by_atom(self.tally.n), self._by_atom(self.tally.w)
        return np.asarray(self.laid_out(n[None, :], w[None, :])[0])

    @cached_property
    def independent_records(self) -> LinearizedSpread:
        """Spread if the records were an independent sample with replacement."""
        rows = self.records_as_units(np.ones(self.tally.atom.size, dtype=bool))
        return about_mean([rows], self.totals, self.n_records)

    def records_as_units(self, chosen: NDArray[np.bool_]) -> Any:
        """Rows whose squares are the second moments of the records of the chosen pairs."""
        n, w, ww = (
            self._by_atom(np.where(chosen, part, 0.0))
            for part in (self.tally.n, self.tally.w, self.tally.ww)
        )
        atom = np.flatnonzero(n)
        return self.moments((atom, n[atom], w[atom], ww[atom]), np.zeros_like(atom))[0]

    def _by_atom(self, of_pair: FloatArray) -> FloatArray:
        sums = np.bincount(self.tally.atom, weights=of_pair, minlength=self.tally.pattern.size)
        return np.asarray(sums, dtype=np.float64)


def about_mean(rows: list[Any], totals: FloatArray, n_units: int) -> LinearizedSpread:
    """`n/(n - 1) (Σzzᵀ - n z̄z̄ᵀ)` over units of one stratum whose squares the rows hold."""
    matrix = stack_rows([*rows, totals[None, :] / np.sqrt(n_units)])
    weight = np.full(matrix.shape[0], n_units / max(n_units - 1, 1))
    weight[-1] *= -1.0
    return LinearizedSpread(
        matrix, weight, np.zeros(weight.size, dtype=np.intp), np.array([n_units])
    )


def blocks(totals: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Split `[n | y | N | Y]` along the last axis."""
    n, y, weighted_n, weighted_y = np.split(totals, 4, axis=-1)
    return n, y, weighted_n, weighted_y


def chunks(n_rows: int, n_columns: int) -> Iterator[slice]:
    """Cut rows into pieces whose dense matrix is of moderate size."""
    step = max(4 * DENSE_ELEMENTS // n_columns, 1)
    for start in range(0, n_rows, step):
        yield slice(start, min(start + step, n_rows))
