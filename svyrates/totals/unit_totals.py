"""Totals of the sampling units, and their spread by stage and stratum.

Every stage of sampling adds rows to one matrix (see `LinearizedSpread`):

* clusters: `(1 - f) m/(m - 1)` times the squares of the unit totals about their mean;
* records as units: their squares need only `n`, `Σw` and `Σw²` of every (leaf, atom) pair, which
  two rows carry exactly: `(√n, Σw/√n)` and `(0, √(Σw² - (Σw)²/n))`;
* later stages: the same within each unit, times the sampling fractions above it.

Sources: Wolter (2007), chapter 6; Särndal, Swensson & Wretman (1992), chapters 4 and 5.
"""

from __future__ import annotations

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
from svyrates.totals.matrices import fits, indicator, lighter, scaled, stack_rows

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
    membership : (patterns, cells) sparse; who belongs where
    n_records : records in the sample
    """

    tree: Hierarchy
    tally: Tally
    membership: Any
    n_records: int

    @cached_property
    def _of_atom(self) -> tuple[Any, Any]:
        """Which cells an atom counts in, and in which as a success; (atoms, outcomes × cells)."""
        of_atom = self.membership[self.tally.pattern]
        levels = self.tally.level.T
        answered, success = (
            sparse.hstack(
                [scaled(flags.astype(np.float64), of_atom) for flags in kind], format="csr"
            )
            for kind in ([level < 2 for level in levels], [level == 1 for level in levels])
        )
        return answered, success

    @cached_property
    def leaves(self) -> Any:
        """Totals `[n | y | N | Y]` of every leaf, one block of cells each."""
        tally = self.tally
        return self._laid_out(tally.leaf, self.tree.n_leaves, tally.n, tally.w)

    def _laid_out(self, row: IntArray, n_rows: int, n: FloatArray, w: FloatArray) -> Any:
        """Sum the pairs into rows, shape (rows, 4 outcomes × cells)."""
        return self._columns(row, self.tally.atom, n_rows, n, w)

    def _columns(
        self, row: IntArray, atom: IntArray, n_rows: int, n: FloatArray, w: FloatArray
    ) -> Any:
        answered, success = self._of_atom
        dense = fits(n_rows, 4 * answered.shape[1]) and fits(*answered.shape)
        if dense:
            answered, success = answered.toarray(), success.toarray()
        shape = (n_rows, answered.shape[0])
        counts, weights = indicator(row, atom, n, shape), indicator(row, atom, w, shape)
        if not dense:
            counts, weights = sparse.csr_array(counts), sparse.csr_array(weights)
        parts = [counts @ answered, counts @ success, weights @ answered, weights @ success]
        return np.hstack(parts) if dense else sparse.hstack(parts, format="csr")

    def _moments(
        self, atom: IntArray, n: FloatArray, w: FloatArray, ww: FloatArray
    ) -> tuple[Any, IntArray]:
        """Two rows for each set of records of one atom that hold its second moments.

        Returns
        -------
        rows : (rows, k)
        of_set : (rows,) the set that each row belongs to
        """
        root = np.sqrt(n)
        rest = np.maximum(ww - w**2 / n, 0.0)
        # Equal weights leave rounding noise here, not spread.
        uneven = np.flatnonzero(rest > ZERO * ww)
        sets = np.arange(n.size)
        first = self._columns(sets, atom, n.size, root, w / root)
        second = self._columns(
            np.arange(uneven.size),
            atom[uneven],
            uneven.size,
            np.zeros(uneven.size),
            np.sqrt(rest[uneven]),
        )
        return stack_rows([first, second]), np.concatenate((sets, uneven))

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
            rows.append(self._moments(atom, n[atom], w[atom], ww[atom])[0])
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
        means = scaled(1.0 / m, sums.toarray() if sparse.issparse(sums) else sums)
        parts.append(((rows - means[parent])[usual], *of_unit))
        return parts

    def _about_all_units(self, rows: Any, stratum: IntArray) -> Part:
        """Lone units about the mean over all first-stage units: `(1 - f)(z - z̄)²`."""
        mean = self.totals / self.tree.n_children[0].sum()
        rows = rows.toarray() if sparse.issparse(rows) else rows
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
        leaf = tally.leaf[mine]
        rows, of_set = self._moments(tally.atom[mine], tally.n[mine], tally.w[mine], tally.ww[mine])
        node = tree.leaf_node[leaf[of_set]]
        parts.append((rows, scale[node], stratum[node]))
        nodes = tree.leaf_node[pools]
        m = tree.n_children[depth][nodes].astype(np.float64)
        parts.append((scaled(1.0 / np.sqrt(m), self.leaves[pools]), -scale[nodes], stratum[nodes]))
        return parts


def blocks(totals: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Split `[n | y | N | Y]` along the last axis."""
    n, y, weighted_n, weighted_y = np.split(totals, 4, axis=-1)
    return n, y, weighted_n, weighted_y


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
