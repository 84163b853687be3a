"""Spread of statistics whose influence is known record by record, such as those of a model.

A statistic has the variance of the total of its influence values (Binder 1983; Demnati & Rao 2004).
They are summed by sampling unit, and where records are the units their second moments are kept as a
triangle with the same squares; the rest is as for totals of cells.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from svyrates.design.hierarchy import Hierarchy
from svyrates.totals.cells import about_mean
from svyrates.totals.linearized import LinearizedSpread
from svyrates.totals.unit_totals import UnitTotals

__all__ = ["InfluenceTotals"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
_AT_A_TIME = 100_000


@dataclass(frozen=True)
class InfluenceTotals(UnitTotals):
    """Influence values summed by leaf; of the tally only the tree is used.

    Attributes
    ----------
    record : (rows,) leaf of each record that has an influence
    values : fetches the influence (some rows, k) of a slice of the rows
    """

    record: IntArray
    values: Callable[[slice], FloatArray]

    @classmethod
    def of(
        cls,
        tree: Hierarchy,
        n_records: int,
        leaf: IntArray,
        values: Callable[[slice], FloatArray],
    ) -> InfluenceTotals:
        """Prepare the totals of the records that lie in the leaves `leaf`."""
        return cls(
            tally=None,  # type: ignore[arg-type]
            membership=None,
            n_records=n_records,
            tree=tree,
            record=leaf,
            values=values,
        )

    @cached_property
    def leaves(self) -> FloatArray:
        """Influence summed by leaf, (leaves, k)."""
        total: Any = None
        for rows in self._pieces():
            part = self.values(rows)
            if total is None:
                total = np.zeros((self.tree.n_leaves, part.shape[1]))
            for column in range(part.shape[1]):
                total[:, column] += np.bincount(
                    self.record[rows], weights=part[:, column], minlength=self.tree.n_leaves
                )
        return np.asarray(total)

    @cached_property
    def totals(self) -> FloatArray:
        """Sum over all records; zero but for rounding, as influences are."""
        return np.asarray(self.leaves.sum(axis=0))

    @cached_property
    def independent_records(self) -> LinearizedSpread:
        """Spread if the records were an independent sample with replacement."""
        rows = self._triangles(np.zeros(self.tree.n_leaves, dtype=np.intp), 1)[0]
        return about_mean([rows], self.totals, self.n_records)

    def _records_of(self, pools: IntArray) -> tuple[Any, IntArray]:
        node_of_leaf = np.full(self.tree.n_leaves, -1, dtype=np.intp)
        node_of_leaf[pools] = self.tree.leaf_node[pools]
        nodes = np.unique(node_of_leaf[pools])
        number = np.full(node_of_leaf.max() + 2, -1, dtype=np.intp)
        number[nodes] = np.arange(nodes.size)
        rows, group = self._triangles(number[node_of_leaf], nodes.size)
        return rows, nodes[group]

    def _triangles(self, group_of_leaf: IntArray, n_groups: int) -> tuple[FloatArray, IntArray]:
        """For each group of leaves a triangle whose squares are those of its records."""
        k = self.leaves.shape[1]
        grams = np.zeros((n_groups, k, k))
        for rows in self._pieces():
            part, group = self.values(rows), group_of_leaf[self.record[rows]]
            order = np.argsort(group, kind="stable")
            bounds = np.flatnonzero(np.diff(group[order], prepend=-2))
            for start, stop in zip(bounds, [*bounds[1:], order.size], strict=True):
                here = group[order[start]]
                if here >= 0:
                    chosen = part[order[start:stop]]
                    grams[here] += chosen.T @ chosen
        values, vectors = np.linalg.eigh(grams)
        roots = np.sqrt(np.maximum(values, 0.0))[:, :, None] * vectors.transpose(0, 2, 1)
        return roots.reshape(n_groups * k, k), np.repeat(np.arange(n_groups), k)

    def _pieces(self) -> list[slice]:
        return [
            slice(start, min(start + _AT_A_TIME, self.record.size))
            for start in range(0, self.record.size, _AT_A_TIME)
        ]
