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
from svyrates.totals.cells import CellTotals, about_mean, chunks
from svyrates.totals.linearized import LinearizedSpread
from svyrates.totals.matrices import as_array, lighter, scaled, stack_rows

__all__ = ["UnitTotals"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
Part = tuple[Any, FloatArray, IntArray]


@dataclass(frozen=True)
class UnitTotals(CellTotals):
    """Totals of every leaf, ready to be spread by stage and stratum.

    Attributes
    ----------
    tree : Hierarchy
    """

    tree: Hierarchy

    @cached_property
    def leaves(self) -> Any:
        """Totals `[n | y | N | Y]` of every leaf, one block of cells each."""
        tally = self.tally
        if sparse.issparse(self.membership):
            return self.rows(tally.leaf, tally.atom, self.tree.n_leaves, tally.n, tally.w)
        total = np.zeros((self.tree.n_leaves, 4 * self.n_cells))
        for chunk in chunks(tally.leaf.size, 4 * self.n_cells):
            pairs = (tally.leaf[chunk], tally.atom[chunk])
            total = total + self.rows(*pairs, self.tree.n_leaves, tally.n[chunk], tally.w[chunk])
        return total

    @cached_property
    def spread(self) -> LinearizedSpread:
        """Spread under the design."""
        parts: list[Part] = []
        for depth in range(len(self.tree.n_children)):
            parts += self._clusters_inside(depth)
            parts += self._records_inside(depth)
        return _stacked(parts, self.tree.n_children[0])

    @cached_property
    def unstratified(self) -> LinearizedSpread:
        """Spread if the first-stage units were drawn with replacement from one stratum."""
        rows = [self._node_totals(1)] if self.tree.parent else []
        pools = self._pools(0)
        if pools.size:
            rows.append(self._records_of(pools)[0])
        return about_mean(rows, self.totals, int(self.tree.n_children[0].sum()))

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
        tree = self.tree
        parts: list[Part] = []
        scale, stratum = self._scale(depth), self._stratum_of(depth)
        if depth == 0 and tree.centre_on_all.any():
            lone = tree.centre_on_all[tree.leaf_node[pools]]
            parts.append(
                self._about_all_units(self.leaves[pools[lone]], tree.leaf_node[pools[lone]])
            )
            pools = pools[~lone]
        rows, node = self._records_of(pools)
        parts.append((rows, scale[node], stratum[node]))
        nodes = tree.leaf_node[pools]
        m = tree.n_children[depth][nodes].astype(np.float64)
        parts.append((scaled(1.0 / np.sqrt(m), self.leaves[pools]), -scale[nodes], stratum[nodes]))
        return parts

    def _records_of(self, pools: IntArray) -> tuple[Any, IntArray]:
        """Rows whose squares are the second moments of the records of pools, and their nodes."""
        tally = self.tally
        mine = np.isin(tally.leaf, pools)
        pairs = (tally.atom[mine], tally.n[mine], tally.w[mine], tally.ww[mine])
        return self.moments(pairs, self.tree.leaf_node[tally.leaf[mine]])


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
