"""The tally in memory: `n`, `Σw` and `Σw²` of every occurring (leaf, atom) pair.

An *atom* is one joint pattern of all that was asked of a record: its groups and the level of every
outcome. The sums are additive, so they can be taken in any order and in any number of pieces.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

__all__ = ["Tally", "number_atoms", "tally_records"]

IntArray = NDArray[np.intp]
CodeArray = NDArray[np.int32]
FloatArray = NDArray[np.float64]

# Up to this many cells per record a dense table of all pairs is cheaper than hashing the pairs.
_DENSE_CELLS = 2
_FEW_ATOMS = 8192
NO, YES, MISSING = 0, 1, 2


@dataclass(frozen=True, slots=True)
class Tally:
    """Sums over the records of positive weight inside the subpopulation with a known group.

    Attributes
    ----------
    leaf, atom : (pairs,) the occurring pairs
    n, w, ww : (pairs,) records, sum of weights and sum of squared weights of each pair
    pattern : (atoms,) the grouping pattern of each atom
    level : (atoms, outcomes) 0 no, 1 yes, 2 missing
    """

    leaf: IntArray
    atom: IntArray
    n: FloatArray
    w: FloatArray
    ww: FloatArray
    pattern: IntArray
    level: NDArray[np.int8]


def tally_records(
    leaf: CodeArray,
    n_leaves: int,
    weights: FloatArray,
    pattern: CodeArray,
    n_patterns: int,
    levels: list[NDArray[np.int8]],
) -> Tally:
    """Sum the records into (leaf, atom) pairs.

    Parameters
    ----------
    leaf : (records,) leaf of each record
    n_leaves : int
    weights : (records,) non-negative
    pattern : (records,) grouping pattern, -1 outside the subpopulation or with an unknown group
    n_patterns : int
    levels : one array (records,) per outcome: 0 no, 1 yes, 2 missing

    Returns
    -------
    Tally
    """
    atom, n_atoms, decode = number_atoms(pattern, n_patterns, levels)
    size = n_leaves * n_atoms
    pair = leaf.astype(np.int64)
    pair *= n_atoms
    pair += atom
    # Records that answer nothing here fall into one cell more, which is cut off afterwards.
    everyone = bool(pattern.min() >= 0 and weights.min() > 0.0)
    if not everyone:
        pair[(pattern < 0) | (weights <= 0.0)] = size
    squares = weights * weights
    if size <= _DENSE_CELLS * pair.size + 1024:
        counts = np.bincount(pair, minlength=size + 1)[:size]
        pairs = np.flatnonzero(counts)
        n = counts[pairs].astype(np.float64)
        w = np.bincount(pair, weights=weights, minlength=size + 1)[pairs]
        ww = np.bincount(pair, weights=squares, minlength=size + 1)[pairs]
    else:
        number, found = pd.factorize(pair, sort=True)
        pairs = np.asarray(found)
        kept = slice(0, pairs.size - (not everyone))
        pairs = pairs[kept]
        n = np.bincount(number)[kept].astype(np.float64)
        w = np.bincount(number, weights=weights)[kept]
        ww = np.bincount(number, weights=squares)[kept]
    of_leaf, of_atom = np.divmod(pairs, n_atoms)
    of_pattern, level = decode
    return Tally(
        of_leaf, of_atom, n, np.asarray(w, float), np.asarray(ww, float), of_pattern, level
    )


def number_atoms(
    pattern: CodeArray, n_patterns: int, levels: list[NDArray[np.int8]]
) -> tuple[NDArray[Any], int, tuple[IntArray, NDArray[np.int8]]]:
    """Number the atoms: densely for few outcomes, else only the joint patterns that occur."""
    n_dense = n_patterns * 3 ** len(levels)
    if n_dense <= _FEW_ATOMS:
        # Small numbers in small integers: much of the time goes into moving them.
        small = pattern.astype(np.int16)
        for level in levels:
            small *= 3
            small += level
        return small, n_dense, _decode(np.arange(n_dense, dtype=np.intp), len(levels))
    code = np.maximum(pattern, 0).astype(np.int64)
    if len(levels) == 1 and n_dense <= code.size:
        code = code * 3 + levels[0]
        return code, n_dense, _decode(np.arange(n_dense, dtype=np.intp), 1)
    occurring = [np.arange(n_patterns)]
    level_parts: list[NDArray[np.intp]] = []
    for level in levels:
        code, uniques = pd.factorize(code * 3 + level)
        above, here = np.divmod(np.asarray(uniques), 3)
        occurring = [occurring[0][above]]
        level_parts = [part[above] for part in level_parts] + [here]
    joint = np.stack(level_parts, axis=1).astype(np.int8)
    return code, occurring[0].size, (occurring[0], joint)


def _decode(numbers: IntArray, n_outcomes: int) -> tuple[IntArray, NDArray[np.int8]]:
    level = np.empty((numbers.size, n_outcomes), dtype=np.int8)
    rest = numbers
    for outcome in range(n_outcomes - 1, -1, -1):
        rest, level[:, outcome] = np.divmod(rest, 3)
    return rest, level
