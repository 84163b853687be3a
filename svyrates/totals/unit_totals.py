"""Totals of the sampling units, and their spread by stage and stratum.

Every stage of sampling adds rows to one matrix (see `LinearizedSpread`):

* clusters: `(1 - f) m/(m - 1)` times the squares of the unit totals about their mean;
* records as units: their squares need only `n`, `Σw` and `Σw²` of every (leaf, atom) pair, which
  two rows carry exactly: `(√n, Σw/√n)` and `(0, √(Σw² - (Σw)²/n))`;
* later stages: the same within each unit, times the sampling fractions above it.

Sources: Wolter (2007), chapter 6; Särndal, Swensson & Wretman (1992), chapters 4 and 5.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from svyrates.design.hierarchy import Hierarchy
from svyrates.tally import Tally
from svyrates.totals.estimates import ZERO
from svyrates.totals.linearized import LinearizedSpread
from svyrates.totals.matrices import (
    DENSE_ELEMENTS,
    as_array,
    fits,
    indicator,
    lighter,
    scaled,
    stack_rows,
)

__all__ = ["UnitTotals", "blocks"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
Part = tuple[Any, FloatArray, IntArray]


@dataclass(frozen=True)
class UnitTotals:
    """Totals of every leaf, ready to be spread by stage and stratum.

    Attributes
    ----------
    tree : Hierarchy
    tally : Tally
    membership : (patterns, cells) sparse, or an array of bool; who belongs where
    n_records : records in the sample
    """

    tree: Hierarchy
    tally: Tally
    membership: Any
    n_records: int

    @property
    def n_cells(self) -> int:
        """Cells of all outcomes together."""
        return int(self.membership.shape[1] * self.tally.level.shape[1])

    def _cells(self, atom: IntArray) -> tuple[Any, Any]:
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
        of_atom = np.bincount(self.tally.atom, weights=of_pair, minlength=self.tally.pattern.size)
        sums = np.zeros((self.tally.level.shape[1], self.membership.shape[1]))
        for chunk in _chunks(of_atom.size, self.membership.shape[1]):
            members = self.membership[self.tally.pattern[chunk]]
            known = (self.tally.level[chunk] < 2) == answered
            sums += np.asarray(members.T @ (of_atom[chunk, None] * known)).T
        return sums.ravel()

    @cached_property
    def leaves(self) -> Any:
        """Totals `[n | y | N | Y]` of every leaf, one block of cells each."""
        tally = self.tally
        if sparse.issparse(self.membership):
            return self._rows(tally.leaf, tally.atom, self.tree.n_leaves, tally.n, tally.w)
        total = np.zeros((self.tree.n_leaves, 4 * self.n_cells))
        for chunk in _chunks(tally.leaf.size, 4 * self.n_cells):
            pairs = (tally.leaf[chunk], tally.atom[chunk])
            total = total + self._rows(*pairs, self.tree.n_leaves, tally.n[chunk], tally.w[chunk])
        return total

    def _rows(
        self, row: IntArray, atom: IntArray, n_rows: int, n: FloatArray, w: FloatArray
    ) -> Any:
        """Sum pairs into rows, shape (rows, 4 cells), columns `[n | y | N | Y]`."""
        atoms, position = np.unique(atom, return_inverse=True)
        answered, success = self._cells(atoms)
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

    def _moments(self, pairs: Any, group: IntArray) -> tuple[Any, IntArray]:
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
            for chunk in _chunks(members.size, k):
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
        first = self._rows(np.arange(n.size), atom, n.size, root, w / root)
        if not uneven.size:
            return first, group
        nothing = np.zeros(uneven.size)
        rows = np.arange(uneven.size)
        second = self._rows(rows, atom[uneven], uneven.size, nothing, np.sqrt(rest[uneven]))
        return stack_rows([first, second]), np.concatenate((group, group[uneven]))

    @cached_property
    def totals(self) -> FloatArray:
        """Totals over the sample, shape (k,)."""
        return np.asarray(self.leaves.sum(axis=0)).ravel()

    @cached_property
    def spread(self) -> LinearizedSpread:
        """Spread under the design."""
        parts: list[Part] = []
        for depth in range(len(self.tree.n_children)):
            parts += self._clusters_inside(depth)
            parts += self._records_inside(depth)
        return _stacked(parts, self.tree.n_children[0])

    @cached_property
    def independent_records(self) -> LinearizedSpread:
        """Spread if the records were an independent sample with replacement."""
        return self._without_strata(None, np.ones(self.tally.leaf.size, dtype=bool), self.n_records)

    @cached_property
    def unstratified(self) -> LinearizedSpread:
        """Spread if the first-stage units were drawn with replacement from one stratum."""
        in_pool = np.isin(self.tally.leaf, self._pools(0))
        units = self._node_totals(1) if self.tree.parent else None
        return self._without_strata(units, in_pool, int(self.tree.n_children[0].sum()))

    def _without_strata(
        self, units: Any, as_records: NDArray[np.bool_], n_units: int
    ) -> LinearizedSpread:
        """`n/(n - 1) (Σzzᵀ - n z̄z̄ᵀ)` over units, and over the records of the flagged pairs."""
        rows = [] if units is None else [units]
        if as_records.any():
            tally = self.tally
            n, w, ww = (
                np.bincount(tally.atom[as_records], weights=part[as_records]).astype(np.float64)
                for part in (tally.n, tally.w, tally.ww)
            )
            atom = np.flatnonzero(n)
            pairs = (atom, n[atom], w[atom], ww[atom])
            rows.append(self._moments(pairs, np.zeros_like(atom))[0])
        rows.append(self.totals[None, :] / np.sqrt(n_units))
        matrix = stack_rows(rows)
        weight = np.full(matrix.shape[0], n_units / max(n_units - 1, 1))
        weight[-1] *= -1.0
        return _stacked(
            [(matrix, weight, np.zeros(weight.size, dtype=np.intp))], np.array([n_units])
        )

    def _pools(self, depth: int) -> IntArray:
        return np.flatnonzero(self.tree.leaf_is_pool & (self.tree.leaf_depth == depth))

    def _node_totals(self, depth: int) -> Any:
        """Totals of every node of a depth, shape (nodes, k)."""
        node = self.tree.ancestor(depth)
        n_nodes = self.tree.n_strata if depth == 0 else self.tree.parent[depth - 1].size
        if node.size == n_nodes and np.array_equal(node, np.arange(n_nodes)):
            return self.leaves
        below = np.flatnonzero(node >= 0)
        return _gathered(node[below], n_nodes, below, self.leaves)

    def _stratum_of(self, depth: int) -> IntArray:
        node = np.arange(self.tree.n_children[depth].size)
        for level in range(depth, 0, -1):
            node = self.tree.parent[level - 1][node]
        return node

    def _scale(self, depth: int) -> FloatArray:
        """`λ (1 - f) m/(m - 1)` of each node; 0 where a later-stage unit was drawn alone."""
        m = self.tree.n_children[depth].astype(np.float64)
        fraction = self.tree.fraction[depth]
        ratio = np.divide(m, m - 1.0, out=np.zeros_like(m), where=m > 1)
        return self.tree.inflation(depth) * (1.0 - fraction) * ratio

    def _clusters_inside(self, depth: int) -> list[Part]:
        tree = self.tree
        if depth >= len(tree.parent):
            return []
        parent = tree.parent[depth]
        rows = self._node_totals(depth + 1)
        scale, stratum = self._scale(depth), self._stratum_of(depth)
        parts: list[Part] = []
        usual = np.ones(parent.size, dtype=bool)
        if depth == 0 and tree.centre_on_all.any():
            usual = ~tree.centre_on_all[parent]
            parts.append(self._about_all_units(rows[~usual], parent[~usual]))
        m = np.maximum(np.bincount(parent, minlength=scale.size), 1).astype(np.float64)
        sums = _gathered(parent, scale.size, np.arange(parent.size), rows)
        rows, of_unit = lighter(rows), (scale[parent[usual]], stratum[parent[usual]])
        if sparse.issparse(rows):
            parts.append((rows[usual], *of_unit))
            parts.append((scaled(1.0 / np.sqrt(m), sums), -scale, stratum))
            return parts
        # Centred first, squares lose no digits.
        means = scaled(1.0 / m, as_array(sums))
        parts.append(((rows - means[parent])[usual], *of_unit))
        return parts

    def _about_all_units(self, rows: Any, stratum: IntArray) -> Part:
        """Lone units about the mean over all first-stage units: `(1 - f)(z - z̄)²`."""
        mean = self.totals / self.tree.n_children[0].sum()
        rows = as_array(rows)
        return rows - mean, 1.0 - self.tree.fraction[0][stratum], stratum

    def _records_inside(self, depth: int) -> list[Part]:
        pools = self._pools(depth)
        if not pools.size:
            return []
        tree, tally = self.tree, self.tally
        parts: list[Part] = []
        scale, stratum = self._scale(depth), self._stratum_of(depth)
        if depth == 0 and tree.centre_on_all.any():
            lone = tree.centre_on_all[tree.leaf_node[pools]]
            parts.append(
                self._about_all_units(self.leaves[pools[lone]], tree.leaf_node[pools[lone]])
            )
            pools = pools[~lone]
        mine = np.isin(tally.leaf, pools)
        pairs = (tally.atom[mine], tally.n[mine], tally.w[mine], tally.ww[mine])
        rows, node = self._moments(pairs, tree.leaf_node[tally.leaf[mine]])
        parts.append((rows, scale[node], stratum[node]))
        nodes = tree.leaf_node[pools]
        m = tree.n_children[depth][nodes].astype(np.float64)
        parts.append((scaled(1.0 / np.sqrt(m), self.leaves[pools]), -scale[nodes], stratum[nodes]))
        return parts


def blocks(totals: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Split `[n | y | N | Y]` along the last axis."""
    n, y, weighted_n, weighted_y = np.split(totals, 4, axis=-1)
    return n, y, weighted_n, weighted_y


def _chunks(n_rows: int, n_columns: int) -> Iterator[slice]:
    """Cut rows into pieces whose dense matrix is of moderate size."""
    step = max(4 * DENSE_ELEMENTS // n_columns, 1)
    for start in range(0, n_rows, step):
        yield slice(start, min(start + step, n_rows))


def _gathered(target: IntArray, n_targets: int, chosen: IntArray, rows: Any) -> Any:
    """Sum the chosen rows into their targets."""
    shape = (n_targets, rows.shape[0])
    return sparse.csr_array((np.ones(chosen.size), (target, chosen)), shape=shape) @ rows


def _stacked(parts: list[Part], n_units: NDArray[np.intp]) -> LinearizedSpread:
    rows = stack_rows([part[0] for part in parts])
    weight = np.concatenate([part[1] for part in parts])
    stratum = np.concatenate([part[2] for part in parts])
    used = weight != 0.0
    if not used.all():
        rows, weight, stratum = rows[used], weight[used], stratum[used]
    return LinearizedSpread(rows, weight, stratum, n_units)
