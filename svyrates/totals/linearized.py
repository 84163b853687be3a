"""Linearized spread: rows of unit totals, centred within their strata and weighted.

Every stage of sampling adds rows to one matrix, so that `V = rowsᵀ diag(weight) rows`:

* clusters: `(1 - f) m/(m - 1)` times the squares of the unit totals about their mean;
* records as units: their squares need only `n`, `Σw` and `Σw²` of every (leaf, atom) pair, which
  two rows carry exactly: `(√n, Σw/√n)` and `(0, √(Σw² - (Σw)²/n))`;
* later stages: the same within each unit, times the sampling fractions above it.

Sources: Wolter (2007), chapter 6; Särndal, Swensson & Wretman (1992), chapters 4 and 5.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from svyrates.design.hierarchy import Hierarchy
from svyrates.tally import Tally
from svyrates.totals.estimates import ZERO, SmoothFunction

__all__ = ["LinearizedSpread", "UnitTotals", "blocks"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]

# Dense rows are exact to more digits (they are centred first) and faster while they are small.
_DENSE_ELEMENTS = 4_000_000
_DENSE_SHARE = 0.25


@dataclass(frozen=True, slots=True)
class LinearizedSpread:
    """`V = rowsᵀ diag(weight) rows`.

    Attributes
    ----------
    rows : (rows, k), dense or sparse
    weight : (rows,); negative for the rows that subtract a mean
    stratum : (rows,) stratum that each row belongs to
    n_units : (strata,) first-stage units; strata with fewer than two carry no degrees of freedom
    """

    rows: Any
    weight: FloatArray
    stratum: IntArray
    n_units: IntArray

    def apply(self, function: SmoothFunction, at: FloatArray) -> LinearizedSpread:
        """Carry every row through the derivatives of the function."""
        jacobian = function.jacobian(at)
        rows = (jacobian @ self.rows.T).T
        if sparse.issparse(rows):
            rows = _lighter(rows.tocsr())
        return LinearizedSpread(rows, self.weight, self.stratum, self.n_units)

    def covariance(self) -> FloatArray:
        """Covariance matrix, shape (k, k)."""
        if sparse.issparse(self.rows):
            weighted = sparse.diags_array(self.weight) @ self.rows
            matrix = (self.rows.T @ weighted).toarray()
        else:
            matrix = self.rows.T @ (self.weight[:, None] * self.rows)
        matrix = (matrix + matrix.T) / 2.0
        np.fill_diagonal(matrix, self.variance())
        return np.asarray(matrix)

    def variance(self) -> FloatArray:
        """Variances, shape (k,); what rounding leaves of zero is zero."""
        squares = self.rows.multiply(self.rows) if sparse.issparse(self.rows) else self.rows**2
        variance = np.asarray(squares.T @ self.weight).ravel()
        formed_from = np.asarray(squares.T @ np.abs(self.weight)).ravel()
        return np.where(variance < ZERO * formed_from, 0.0, variance)

    def satterthwaite(self, plus: IntArray, minus: IntArray) -> FloatArray:
        """`(ΣV_h)² / Σ(V_h²/(n_h - 1))` over the strata of the contrast `x[plus] - x[minus]`.

        Source: Satterthwaite (1946); biased low with two units a stratum.
        """
        order = np.argsort(self.stratum, kind="stable")
        bounds = np.flatnonzero(np.diff(self.stratum[order], prepend=-1, append=-1))
        total = np.zeros(plus.size)
        squares = np.zeros(plus.size)
        pair = minus >= 0
        for start, stop in pairwise(bounds.tolist()):
            members = order[start:stop]
            n_units = self.n_units[self.stratum[members[0]]]
            if n_units < 2:
                continue
            rows = self.rows[members]
            rows = rows.toarray() if sparse.issparse(rows) else rows
            here = rows.T @ (self.weight[members, None] * rows)
            variance = here[plus, plus].copy()
            variance[pair] += (here[minus, minus] - 2.0 * here[plus, minus])[pair]
            total += variance
            squares += variance**2 / (n_units - 1)
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.where(squares > 0, total**2 / squares, np.nan)


def _lighter(rows: Any) -> Any:
    """Turn a sparse matrix into a dense one where that is smaller or no matter."""
    size = rows.shape[0] * rows.shape[1]
    if size <= _DENSE_ELEMENTS or rows.nnz > _DENSE_SHARE * size:
        return rows.toarray()
    return rows


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
    def leaves(self) -> Any:
        """Totals `[n | y | N | Y]` of every leaf, one block of cells each; sparse."""
        tally = self.tally
        return self._laid_out(tally.leaf, self.tree.n_leaves, tally.n, tally.w)

    @cached_property
    def pair_rows(self) -> tuple[IntArray, Any]:
        """Two rows for each (leaf, atom) pair that hold its second moments, and their leaves."""
        tally = self.tally
        root = np.sqrt(tally.n)
        rest = np.maximum(tally.ww - tally.w**2 / tally.n, 0.0)
        # Equal weights leave rounding noise here, not spread.
        uneven = np.flatnonzero(rest > ZERO * tally.ww)
        pairs = np.arange(root.size)
        first = self._laid_out(pairs, root.size, root, tally.w / root)
        second = self._laid_out(pairs, root.size, np.zeros_like(root), np.sqrt(rest))[uneven]
        leaf = np.concatenate((tally.leaf, tally.leaf[uneven]))
        return leaf, sparse.vstack((first, second), format="csr")

    def _laid_out(self, row: IntArray, n_rows: int, n: FloatArray, w: FloatArray) -> Any:
        """Sum the pairs into rows, shape (rows, 4 outcomes × cells)."""
        tally = self.tally
        shape = (n_rows, tally.pattern.size)
        counts = sparse.csr_array((n, (row, tally.atom)), shape=shape)
        weights = sparse.csr_array((w, (row, tally.atom)), shape=shape)
        of_atom = self.membership[tally.pattern]
        answered = [_rows_where(of_atom, level < 2) for level in tally.level.T]
        success = [_rows_where(of_atom, level == 1) for level in tally.level.T]
        parts = [counts @ cells for cells in (*answered, *success)]
        parts += [weights @ cells for cells in (*answered, *success)]
        return sparse.hstack(parts, format="csr")

    @cached_property
    def totals(self) -> FloatArray:
        """Totals over the sample, shape (k,)."""
        return np.asarray(self.leaves.sum(axis=0)).ravel()

    @cached_property
    def spread(self) -> LinearizedSpread:
        """Spread under the design."""
        tree = self.tree
        parts = []
        for depth in range(len(tree.n_children)):
            parts += self._clusters_inside(depth)
            parts += self._records_inside(depth)
        return _stack(parts, tree.n_children[0])

    def independent_records(self) -> LinearizedSpread:
        """Spread if the records were an independent sample with replacement."""
        scale = self.n_records / max(self.n_records - 1, 1)
        mean = self.totals[None, :] / np.sqrt(self.n_records)
        rows = sparse.vstack((self.pair_rows[1], sparse.csr_array(mean)), format="csr")
        weight = np.full(rows.shape[0], scale)
        weight[-1] = -scale
        return _stack(
            [(_lighter(rows), weight, np.zeros(rows.shape[0], dtype=np.intp))],
            np.array([self.n_records]),
        )

    def unstratified(self) -> LinearizedSpread:
        """Spread if the first-stage units were drawn with replacement from one stratum."""
        tree = self.tree
        n_units = int(tree.n_children[0].sum())
        scale = n_units / max(n_units - 1, 1)
        rows: list[Any] = []
        if tree.parent:
            rows.append(self._node_totals(1))
        pools = self._pools(0)
        if pools.size:
            leaf, pair_rows = self.pair_rows
            rows.append(pair_rows[np.isin(leaf, pools)])
        squares = sparse.vstack(rows, format="csr")
        mean = sparse.csr_array(self.totals[None, :] / np.sqrt(n_units))
        weight = np.full(squares.shape[0] + 1, scale)
        weight[-1] = -scale
        stacked = _lighter(sparse.vstack((squares, mean), format="csr"))
        nowhere = np.zeros(weight.size, dtype=np.intp)
        return _stack([(stacked, weight, nowhere)], np.array([n_units]))

    def _pools(self, depth: int) -> IntArray:
        return np.flatnonzero(self.tree.leaf_is_pool & (self.tree.leaf_depth == depth))

    def _node_totals(self, depth: int) -> Any:
        """Totals of every node of a depth, shape (nodes, k), sparse."""
        node = self.tree.ancestor(depth)
        below = np.flatnonzero(node >= 0)
        n_nodes = self.tree.n_children[0].size if depth == 0 else self.tree.parent[depth - 1].size
        gather = sparse.csr_array(
            (np.ones(below.size), (node[below], below)), shape=(n_nodes, self.tree.n_leaves)
        )
        return gather @ self.leaves

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

    def _clusters_inside(self, depth: int) -> list[tuple[Any, FloatArray, IntArray]]:
        tree = self.tree
        if depth >= len(tree.parent):
            return []
        parent = tree.parent[depth]
        rows = self._node_totals(depth + 1)
        scale = self._scale(depth)
        stratum = self._stratum_of(depth)
        usual = np.ones(parent.size, dtype=bool)
        lone = tree.centre_on_all if depth == 0 else np.zeros(0, dtype=bool)
        parts: list[tuple[Any, FloatArray, IntArray]] = []
        if lone.any():
            usual = ~lone[parent]
            parts.append(self._about_all_units(rows[~usual], parent[~usual]))
        m = np.maximum(np.bincount(parent, minlength=scale.size), 1).astype(np.float64)
        sums = self._node_sums(rows, parent, scale.size)
        size = rows.shape[0] * rows.shape[1]
        if size <= _DENSE_ELEMENTS or rows.nnz > _DENSE_SHARE * size:
            centred = rows.toarray() - (sums.toarray() / m[:, None])[parent]
            parts.append((centred[usual], scale[parent[usual]], stratum[parent[usual]]))
            return parts
        means = sparse.diags_array(1.0 / np.sqrt(m)) @ sums
        parts.append((rows[usual], scale[parent[usual]], stratum[parent[usual]]))
        parts.append((means, -scale, stratum))
        return parts

    @staticmethod
    def _node_sums(rows: Any, parent: IntArray, n_nodes: int) -> Any:
        gather = sparse.csr_array(
            (np.ones(parent.size), (parent, np.arange(parent.size))), shape=(n_nodes, parent.size)
        )
        return gather @ rows

    def _about_all_units(self, rows: Any, stratum: IntArray) -> tuple[Any, FloatArray, IntArray]:
        """Lone units about the mean over all first-stage units: `(1 - f)(z - z̄)²`."""
        mean = self.totals / self.tree.n_children[0].sum()
        return rows.toarray() - mean, 1.0 - self.tree.fraction[0][stratum], stratum

    def _records_inside(self, depth: int) -> list[tuple[Any, FloatArray, IntArray]]:
        pools = self._pools(depth)
        if not pools.size:
            return []
        tree = self.tree
        node_of_leaf = tree.leaf_node
        scale = self._scale(depth)
        stratum = self._stratum_of(depth)
        if depth == 0 and tree.centre_on_all.any():
            return self._pools_with_lone_records(pools)
        leaf, pair_rows = self.pair_rows
        is_mine = np.isin(leaf, pools)
        mine = node_of_leaf[leaf[is_mine]]
        nodes = node_of_leaf[pools]
        m = tree.n_children[depth][nodes].astype(np.float64)
        means = sparse.diags_array(1.0 / np.sqrt(m)) @ self.leaves[pools]
        return [
            (pair_rows[is_mine], scale[mine], stratum[mine]),
            (means, -scale[nodes], stratum[nodes]),
        ]

    def _pools_with_lone_records(self, pools: IntArray) -> list[tuple[Any, FloatArray, IntArray]]:
        """Strata of records, some with one record that is centred on the mean over all."""
        tree = self.tree
        nodes = tree.leaf_node[pools]
        lone = tree.centre_on_all[nodes]
        scale = self._scale(0)
        leaf, pair_rows = self.pair_rows
        keep = np.isin(leaf, pools[~lone])
        mine = tree.leaf_node[leaf[keep]]
        m = tree.n_children[0][nodes[~lone]].astype(np.float64)
        means = sparse.diags_array(1.0 / np.sqrt(m)) @ self.leaves[pools[~lone]]
        return [
            (pair_rows[keep], scale[mine], mine),
            (means, -scale[nodes[~lone]], nodes[~lone]),
            self._about_all_units(self.leaves[pools[lone]], nodes[lone]),
        ]


def blocks(totals: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Split `[n | y | N | Y]` along the last axis."""
    n, y, weighted_n, weighted_y = np.split(totals, 4, axis=-1)
    return n, y, weighted_n, weighted_y


def _rows_where(matrix: Any, flags: NDArray[np.bool_]) -> Any:
    """Keep the flagged rows of a sparse matrix and empty the others."""
    return sparse.diags_array(flags.astype(np.float64)) @ matrix


def _stack(
    parts: list[tuple[Any, FloatArray, IntArray]], n_units: NDArray[np.intp]
) -> LinearizedSpread:
    size = sum(part[0].shape[0] * part[0].shape[1] for part in parts)
    filled = sum(part[0].nnz if sparse.issparse(part[0]) else part[0].size for part in parts)
    if size <= _DENSE_ELEMENTS or filled > _DENSE_SHARE * size:
        rows: Any = np.concatenate(
            [part[0].toarray() if sparse.issparse(part[0]) else part[0] for part in parts]
        )
    else:
        rows = sparse.vstack([sparse.csr_array(part[0]) for part in parts], format="csr")
    weight = np.concatenate([part[1] for part in parts])
    stratum = np.concatenate([part[2] for part in parts])
    used = weight != 0.0
    if not used.all():
        rows, weight, stratum = rows[used], weight[used], stratum[used]
    return LinearizedSpread(rows, weight, stratum, n_units)
