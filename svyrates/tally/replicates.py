"""The tally under replicate weights: `Σw_r` and `Σw_r/w` of every atom, in one pass.

The unweighted counts are recomputed under every replicate with the factor `w_r/w` on each record:
without it the unweighted rates would seem to have no variance.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from svyrates.tally.memory import Tally, number_atoms

__all__ = ["ReplicateTally", "tally_replicates"]

FloatArray = NDArray[np.float64]
CodeArray = NDArray[np.int32]
LevelArray = NDArray[np.int8]

# A chunk of the columns by so many records stays in the processor's cache.
_CHUNK_RECORDS = 4_096
# With more atoms than this, scanning the records once a replicate beats products with indicators.
_PRODUCT_ATOMS = 4_096


@dataclass(frozen=True, slots=True)
class ReplicateTally:
    """Sums by atom.

    Attributes
    ----------
    tally : Tally of the full sample, with all records in one leaf
    n, w : (replicates, atoms) sums of `w_r/w` and of `w_r`
    """

    tally: Tally
    n: FloatArray
    w: FloatArray


def tally_replicates(
    read: Callable[[str], FloatArray],
    names: Sequence[str],
    weights: FloatArray,
    pattern: CodeArray,
    n_patterns: int,
    levels: list[LevelArray],
    *,
    factors: bool,
    scale: float,
    together: int,
    progress: Callable[[int], None] = lambda _: None,
) -> ReplicateTally:
    """Sum the replicates into atoms.

    Parameters
    ----------
    read : fetches one column by name, shape (records,)
    names : columns of the replicates
    weights, pattern, n_patterns, levels : as in `tally_records`
    factors, scale : finished weight = column × scale, × weight for factors
    together : columns to read at a time; all of them, where reading copies nothing
    progress : told how many more cells of the weight matrix are done
    """
    code, n_atoms, (of_pattern, level) = number_atoms(pattern, n_patterns, levels)
    atom = code.astype(np.int32)
    counted = (pattern >= 0) & (weights > 0.0)
    if not counted.all():
        # Records that answer nothing here fall into one atom more, which is cut off afterwards.
        atom[~counted] = n_atoms
    present = np.bincount(atom, minlength=n_atoms + 1)[:n_atoms]
    found = np.flatnonzero(present)
    place = np.full(n_atoms + 1, found.size, dtype=np.int32)
    place[found] = np.arange(found.size, dtype=np.int32)
    atom = place[atom]
    full = Tally(
        leaf=np.zeros(found.size, dtype=np.intp),
        atom=np.arange(found.size),
        n=present[found].astype(np.float64),
        w=np.asarray(np.bincount(atom, weights, found.size + 1)[: found.size], dtype=np.float64),
        ww=np.asarray(
            np.bincount(atom, weights * weights, found.size + 1)[: found.size], dtype=np.float64
        ),
        pattern=of_pattern[found],
        level=level[found],
    )
    ones = np.broadcast_to(1.0, weights.shape)
    if factors:
        sums = _Sums(atom, found.size, for_w=weights, for_n=ones, scale=scale)
    else:
        inverse = np.divide(1.0, weights, out=np.zeros(weights.size), where=counted)
        sums = _Sums(atom, found.size, for_w=ones, for_n=inverse, scale=scale)
    n, w = np.empty((len(names), found.size)), np.empty((len(names), found.size))
    for start in range(0, len(names), together):
        chosen = slice(start, start + together)
        n[chosen], w[chosen] = sums.of([read(name) for name in names[chosen]], progress)
    return ReplicateTally(full, n, w)


@dataclass(frozen=True, slots=True)
class _Sums:
    """Sums of some columns by atom: each value times `for_w` makes `w_r`, times `for_n` `w_r/w`."""

    atom: CodeArray
    n_atoms: int
    for_w: FloatArray
    for_n: FloatArray
    scale: float

    def of(
        self, columns: list[FloatArray], progress: Callable[[int], None]
    ) -> tuple[FloatArray, FloatArray]:
        """Sums of `w_r/w` and of `w_r`, each (columns, atoms)."""
        scan = self._scanned if self.n_atoms > _PRODUCT_ATOMS else self._multiplied
        n, w = scan(columns, progress)
        return n * self.scale, w * self.scale

    def _multiplied(
        self, columns: list[FloatArray], progress: Callable[[int], None]
    ) -> tuple[FloatArray, FloatArray]:
        """Products with a sparse chunk of atom indicators, one in weights and one in counts.

        The product runs through the chunk record by record, and adds two multiples of a record's
        replicates where its atom is. No other kernel tried was as fast, and it takes one thread.
        """
        # One more place on either side takes the records that answer nothing.
        half = self.n_atoms + 1
        out = np.zeros((2 * half, len(columns)))
        matrix = one_matrix(columns)
        block = np.empty((_CHUNK_RECORDS if matrix is None else 0, len(columns)))
        for start in range(0, self.atom.size, _CHUNK_RECORDS):
            rows = slice(start, min(start + _CHUNK_RECORDS, self.atom.size))
            size = rows.stop - start
            factor = np.stack((self.for_w[rows], self.for_n[rows]), axis=1).reshape(-1)
            place = np.stack((self.atom[rows], self.atom[rows] + half), axis=1)
            ends = np.arange(0, 2 * size + 1, 2, dtype=np.int32)
            indicator = sparse.csc_array((factor, place.reshape(-1), ends), shape=(2 * half, size))
            if matrix is not None:
                out += indicator @ matrix[:, rows].T
            else:
                for position, column in enumerate(columns):
                    block[:size, position] = column[rows]
                out += indicator @ block[:size]
            progress(size * len(columns))
        return out[half : half + self.n_atoms].T, out[: self.n_atoms].T

    def _scanned(
        self, columns: list[FloatArray], progress: Callable[[int], None]
    ) -> tuple[FloatArray, FloatArray]:
        """One scan of the records for every column and sum."""
        n: list[FloatArray] = []
        w: list[FloatArray] = []
        atom = self.atom.astype(np.intp)
        for column in columns:
            for factor, sums in ((self.for_w, w), (self.for_n, n)):
                values = np.bincount(
                    atom, np.asarray(column, dtype=np.float64) * factor, self.n_atoms + 1
                )
                sums.append(np.asarray(values[: self.n_atoms], dtype=np.float64))
            progress(self.atom.size)
        return np.stack(n), np.stack(w)


def one_matrix(columns: list[FloatArray]) -> FloatArray | None:
    """The columns as rows of one array without a copy, where they lie evenly in memory.

    Frames keep columns of one type in one block as a rule, and products can then read them where
    they are.
    """
    first = columns[0]
    places = np.array([column.__array_interface__["data"][0] for column in columns])
    steps = np.diff(places)
    alike = all(
        column.dtype == np.float64 and column.strides == first.strides for column in columns
    )
    if not alike or not steps.size or steps[0] <= 0 or (steps != steps[0]).any():
        return None
    shape, strides = (len(columns), first.size), (int(steps[0]), first.strides[0])
    return np.lib.stride_tricks.as_strided(first, shape, strides, writeable=False)
