"""The tree of sampling units: strata, clusters by stage, and records as the last units of all.

A *node* is a stratum (depth 0) or a sampling unit of some stage (depth 1, 2, …). Its *children* are
the units drawn inside it: nodes one level deeper or, in a *pool*, the records themselves. A *leaf*
is a node whose inside is not looked into further: either a last-stage cluster, or a pool.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

__all__ = ["Hierarchy", "Stages", "build_hierarchy"]

IntArray = NDArray[np.intp]
CodeArray = NDArray[np.int32]
FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class Hierarchy:
    """Who was drawn inside whom.

    Attributes
    ----------
    leaf : (records,) the leaf of every record
    leaf_node, leaf_depth : (leaves,) the node that a leaf is, and its depth
    leaf_is_pool : (leaves,) whether the records of the leaf are sampling units
    parent : one array per depth from 1; `parent[d - 1][j]` is the node above unit j of depth d
    n_children : one array per depth; units drawn inside each node
    fraction : one array per depth; sampling fraction inside each node, 0 when not stated
    centre_on_all : (strata,) lone units that are centred on the mean over all first-stage units
    """

    leaf: CodeArray
    leaf_node: IntArray
    leaf_depth: Any
    leaf_is_pool: BoolArray
    parent: tuple[IntArray, ...]
    n_children: tuple[IntArray, ...]
    fraction: tuple[FloatArray, ...]
    centre_on_all: BoolArray

    @property
    def n_strata(self) -> int:
        """Number of (variance) strata."""
        return int(self.n_children[0].size)

    @property
    def n_leaves(self) -> int:
        """Number of leaves."""
        return int(self.leaf_node.size)

    def ancestor(self, depth: int) -> IntArray:
        """Node at `depth` above (or at) each leaf, shape (leaves,); -1 for shallower leaves."""
        node = self.leaf_node.copy()
        for level in range(len(self.parent), depth, -1):
            below = self.leaf_depth >= level
            node[below] = self.parent[level - 1][node[below]]
        node[self.leaf_depth < depth] = -1
        return node

    def inflation(self, depth: int) -> FloatArray:
        """Product of the sampling fractions above each node of `depth`, shape (nodes,).

        The within-node part of the variance enters with this factor
        (Särndal, Swensson & Wretman 1992, ch. 4 and 5; Wolter 2007, ch. 6).
        """
        product = np.ones(self.n_strata)
        for level in range(1, depth + 1):
            above = self.parent[level - 1]
            product = product[above] * self.fraction[level - 1][above]
        return product


@dataclass(frozen=True, slots=True)
class Stages:
    """The stages of one kind of stratum, first to last.

    `codes` holds one array (records,) per cluster stage and its number of codes; `pool` says that
    records are drawn after them; `population` one array (records,) per stage that states one.
    """

    codes: tuple[tuple[CodeArray, int], ...]
    pool: bool
    population: tuple[FloatArray, ...]

    @property
    def depth(self) -> int:
        """Depth of the leaves."""
        return len(self.codes)


def effective_stages(
    codes: tuple[tuple[CodeArray, int], ...], population: tuple[FloatArray, ...]
) -> Stages:
    """Keep the stages that count: one needs the population size of every stage before it."""
    records_last = not codes or len(population) > len(codes)
    n_stages = len(codes) + records_last
    counting = min(n_stages, len(population) + 1)
    kept = codes[:counting]
    return Stages(kept, counting > len(codes), population[:counting])


def compress(
    above: CodeArray, n_above: int, codes: CodeArray, n_codes: int
) -> tuple[CodeArray, IntArray]:
    """Number the occurring (node above, code) pairs in sorted order.

    Returns
    -------
    ids : (records,) number of each record's pair
    parent : (pairs,) the node above each pair
    """
    pair = above.astype(np.int64)
    pair *= n_codes
    pair += codes
    if n_above * n_codes <= max(8 * pair.size, 1 << 20):
        seen = np.zeros(n_above * n_codes, dtype=bool)
        seen[pair] = True
        number = (np.cumsum(seen) - 1).astype(np.int32)
        return number[pair], np.flatnonzero(seen) // n_codes
    ids, uniques = pd.factorize(pair, sort=True)
    return ids.astype(np.int32), np.asarray(uniques // n_codes, dtype=np.intp)


def build_hierarchy(
    stratum: CodeArray,
    n_strata: int,
    usual: Stages,
    shifted: Stages | None = None,
    is_shifted: BoolArray | None = None,
) -> Hierarchy:
    """Build the tree; the strata flagged in `is_shifted` (strata,) take the stages `shifted`."""
    moved = None if is_shifted is None or not is_shifted.any() else is_shifted[stratum]
    depth = usual.depth if moved is None or shifted is None else max(usual.depth, shifted.depth)
    node, n_nodes = stratum, n_strata
    leaf_node = stratum.copy()
    parents: list[IntArray] = []
    pools: list[IntArray] = []
    fractions: list[FloatArray] = []
    for level in range(depth + 1):
        inside = _stage_codes(level, usual, shifted, moved)
        pool_records = _pool_records(level, usual, shifted, moved)
        pools.append(
            np.bincount(node[pool_records], minlength=n_nodes)
            if pool_records is not None
            else np.zeros(n_nodes, dtype=np.intp)
        )
        fractions.append(_population_by_node(level, usual, shifted, moved, node, n_nodes))
        if inside is None:
            break
        codes, n_codes, applies = inside
        if applies is None:
            node, parent = compress(node, n_nodes, codes, n_codes)
            leaf_node = node
        else:
            deeper, parent = compress(node[applies], n_nodes, codes[applies], n_codes)
            node = np.full(node.size, -1, dtype=np.int32)
            node[applies] = deeper
            leaf_node = np.where(applies, node, leaf_node)
        parents.append(parent)
        n_nodes = parent.size
    return _assemble(leaf_node, parents, pools, fractions, usual, shifted, moved)


def _stage_codes(
    level: int, usual: Stages, shifted: Stages | None, moved: BoolArray | None
) -> tuple[CodeArray, int, BoolArray | None] | None:
    """Codes of the units one below `level`, and the records that have such a unit (None: all)."""
    mine = usual.codes[level] if level < usual.depth else None
    if moved is None or shifted is None:
        return None if mine is None else (*mine, None)
    theirs = shifted.codes[level] if level < shifted.depth else None
    if mine is None:
        return None if theirs is None else (*theirs, moved)
    if theirs is None:
        return (*mine, ~moved)
    return np.where(moved, theirs[0], mine[0]), max(mine[1], theirs[1]), None


def _pool_records(
    level: int, usual: Stages, shifted: Stages | None, moved: BoolArray | None
) -> BoolArray | slice | None:
    """Records that are sampling units inside their node of depth `level`."""
    mine = usual.pool and usual.depth == level
    if moved is None or shifted is None:
        return slice(None) if mine else None
    theirs = shifted.pool and shifted.depth == level
    if mine and theirs:
        return slice(None)
    return moved if theirs else ~moved if mine else None


def _population_by_node(
    level: int,
    usual: Stages,
    shifted: Stages | None,
    moved: BoolArray | None,
    node: CodeArray,
    n_nodes: int,
) -> FloatArray:
    """Units in the population inside each node, NaN where none is stated."""
    size = np.full(n_nodes, np.nan)
    for stages, applies in ((usual, None if moved is None else ~moved), (shifted, moved)):
        if stages is None or level >= len(stages.population):
            continue
        rows = slice(None) if applies is None else applies
        inside, value = node[rows], stages.population[level][rows]
        size[inside[inside >= 0]] = value[inside >= 0]
    return size


def _assemble(
    leaf_node: CodeArray,
    parents: list[IntArray],
    pools: list[IntArray],
    populations: list[FloatArray],
    usual: Stages,
    shifted: Stages | None,
    moved: BoolArray | None,
) -> Hierarchy:
    n_nodes = [pool.size for pool in pools]
    n_children, fraction = [], []
    for level, pool in enumerate(pools):
        below = parents[level] if level < len(parents) else np.empty(0, dtype=np.intp)
        children = np.bincount(below, minlength=n_nodes[level]) + pool
        n_children.append(children)
        share = children / populations[level]
        fraction.append(np.where(np.isnan(share), 0.0, share))
    leaf: CodeArray
    leaf_depth: Any
    if moved is None or shifted is None or shifted.depth == usual.depth:
        leaf = leaf_node
        leaf_depth = np.full(n_nodes[usual.depth], usual.depth, dtype=np.intp)
        nodes = np.arange(n_nodes[usual.depth], dtype=np.intp)
        is_pool = pools[usual.depth] > 0
    else:
        record_depth = np.where(moved, shifted.depth, usual.depth)
        start = np.concatenate(([0], np.cumsum(n_nodes)))
        wide = start[record_depth] + leaf_node
        used, position = np.unique(wide, return_inverse=True)
        leaf = position.astype(np.int32)
        leaf_depth = np.searchsorted(start, used, side="right") - 1
        nodes = used - start[leaf_depth]
        is_pool = np.concatenate(pools)[used] > 0
    return Hierarchy(
        leaf=leaf,
        leaf_node=nodes,
        leaf_depth=leaf_depth,
        leaf_is_pool=is_pool,
        parent=tuple(parents),
        n_children=tuple(n_children),
        fraction=tuple(fraction),
        centre_on_all=np.zeros(n_nodes[0], dtype=bool),
    )


def merge_strata(tree: Hierarchy, target: IntArray) -> Hierarchy:
    """Join strata: `target` (strata,) names the new stratum of each, with f = Σn / ΣN.

    Source: Wolter (2007), section 2.5, collapsed strata.
    """
    n_new = int(target.max()) + 1
    drawn = np.bincount(target, weights=tree.n_children[0], minlength=n_new)
    with np.errstate(divide="ignore", invalid="ignore"):
        population = np.where(tree.fraction[0] > 0, tree.n_children[0] / tree.fraction[0], np.inf)
    fraction = drawn / np.bincount(target, weights=population, minlength=n_new)
    n_children = (drawn.astype(np.intp), *tree.n_children[1:])
    merged = replace(
        tree,
        n_children=n_children,
        fraction=(fraction, *tree.fraction[1:]),
        centre_on_all=np.zeros(n_new, dtype=bool),
    )
    if tree.parent:
        return replace(merged, parent=(target[tree.parent[0]], *tree.parent[1:]))
    # Records are the units: a stratum is a leaf, and leaves join with their strata.
    nodes = np.arange(n_new, dtype=np.intp)
    return replace(
        merged,
        leaf=target[tree.leaf].astype(np.int32),
        leaf_node=nodes,
        leaf_depth=np.zeros(n_new, dtype=np.intp),
        leaf_is_pool=np.ones(n_new, dtype=bool),
    )
