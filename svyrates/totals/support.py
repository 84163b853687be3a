"""Degrees of freedom: in which sampling units and strata the members of a group sit."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from svyrates.totals.matrices import lighter
from svyrates.totals.unit_totals import UnitTotals

__all__ = ["ReplicateSupport", "UnitSupport"]

IntArray = NDArray[np.intp]


@dataclass(frozen=True, slots=True)
class ReplicateSupport:
    """With replicate weights nothing is known about units; every member stands for itself.

    Attributes
    ----------
    n : (cells,) members of each cell
    """

    n: NDArray[np.float64]

    def domain(self, sides: Any) -> tuple[IntArray, IntArray]:
        """Members, and no strata, for each row of `sides` (sides, cells)."""
        members = np.rint(np.asarray(sides @ self.n)).astype(np.intp)
        return members, np.zeros_like(members)


@dataclass(frozen=True, slots=True)
class UnitSupport:
    """Members per first-stage unit.

    Attributes
    ----------
    members : (rows, cells) sparse; members of each cell in each first-stage unit, or in each
        stratum whose records are the units
    stratum : (rows,) stratum of each row
    is_pool : (rows,) whether every member counts as a unit of its own
    """

    members: Any
    stratum: IntArray
    is_pool: NDArray[np.bool_]

    @classmethod
    def of(cls, totals: UnitTotals) -> UnitSupport:
        """Read the members off the leaves' unweighted counts."""
        tree = totals.tree
        n_cells = totals.leaves.shape[1] // 4
        counts = totals.leaves[:, :n_cells]
        strata = np.arange(tree.n_strata)
        if not tree.parent:
            return cls(lighter(counts), tree.leaf_node, np.ones(tree.n_leaves, dtype=bool))
        # A leaf of depth 0 is a stratum of records; all others belong to a first-stage unit.
        unit = tree.ancestor(1)
        n_units = tree.parent[0].size
        row = np.where(unit >= 0, unit, n_units + tree.leaf_node)
        gather = sparse.csr_array(
            (np.ones(row.size), (row, np.arange(row.size))),
            shape=(n_units + tree.n_strata, row.size),
        )
        stratum = np.concatenate((tree.parent[0], strata))
        is_pool = np.arange(n_units + tree.n_strata) >= n_units
        return cls(lighter(gather @ counts), stratum, is_pool)

    def domain(self, sides: Any) -> tuple[IntArray, IntArray]:
        """Units and strata with at least one member, for each row of `sides` (sides, cells).

        A row of `sides` adds up disjoint cells, or takes a cell away from one that holds it.
        """
        members = self.members @ sides.T
        present = sparse.coo_array(members > 0.5)
        row, side = present.coords
        found = members[row, side] if sparse.issparse(members) else members[present.coords]
        n_sides, n_strata = sides.shape[0], int(self.stratum.max()) + 1
        each = np.where(self.is_pool[row], np.rint(np.asarray(found).ravel()), 1.0)
        units = np.bincount(side, weights=each, minlength=n_sides)
        seen = np.zeros((n_sides, n_strata), dtype=bool)
        seen[side, self.stratum[row]] = True
        return units.astype(np.intp), seen.sum(axis=1)
