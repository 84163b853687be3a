"""`make_replicates`: replicate weights for a design of strata and clusters."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, Literal

import narwhals.stable.v2 as nw
import numpy as np
import pandas as pd
from numpy.typing import NDArray

from svyrates.design.columns import Frame
from svyrates.design.hadamard import hadamard
from svyrates.design.hierarchy import Hierarchy
from svyrates.design.replicates import ReplicateWeights
from svyrates.design.sample_design import SampleDesign
from svyrates.errors import DesignError, all_faults, some

__all__ = ["make_replicates"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
MadeScheme = Literal[
    "stratified-jackknife", "paired-jackknife", "balanced-repeated-replication", "fay", "bootstrap"
]


def make_replicates(
    design: SampleDesign,
    scheme: MadeScheme,
    *,
    count: int | None = None,
    seed: int | None = None,
    fay: float | None = None,
    both_halves: bool = False,
    finite_population: bool = False,
    prefix: str = "replicate_",
) -> SampleDesign:
    """Make replicate weights from the strata and first-stage units of a design.

    Parameters
    ----------
    design : SampleDesign
        With strata and clusters, or records as units.
    scheme : str
        ``"stratified-jackknife"`` (leaves out each unit in turn; with one stratum the delete-one
        jackknife), ``"paired-jackknife"``, ``"balanced-repeated-replication"`` and ``"fay"`` (two
        units in every stratum), or ``"bootstrap"`` (Rao & Wu's rescaling, n - 1 draws a stratum).
    count : int, optional
        Replicates of the bootstrap.
    seed : int, optional
        Seed of the bootstrap, so that it can be repeated.
    fay : float, optional
        Fay's factor in [0, 1).
    both_halves : bool
        For the paired jackknife: two replicates a pair, each dropping one half.
    finite_population : bool
        For the bootstrap: shrink the draws by the design's sampling fractions (Rao & Wu 1988).
    prefix : str
        Names of the new columns: prefix and number.

    Returns
    -------
    SampleDesign
        Of the frame with the new columns, ready to be written out (``design.frame.to_native()``).

    Raises
    ------
    DesignError
        When the scheme does not fit the design.

    Notes
    -----
    With two units a stratum, full balance gives a linear statistic its linearized variance exactly.
    Sources: Wolter (2007), chapters 3 to 5; Rao & Wu (1988); Rao, Wu & Yue (1992); Judkins (1990).

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> sr.make_replicates(design, scheme="stratified-jackknife").replicates.count
    112

    One replicate for each of the 112 blocks.
    """
    tree = design.tree
    faults = _faults(design, scheme, count, fay, both_halves, finite_population)
    all_faults(DesignError, "The replicates have", faults)
    unit, stratum = _units(tree)
    n_units = np.bincount(stratum, minlength=tree.n_strata)
    makers: dict[str, Callable[[], FloatArray]] = {
        "stratified-jackknife": lambda: _left_out(stratum, n_units),
        "paired-jackknife": lambda: _pairs(stratum, both_halves),
        "balanced-repeated-replication": lambda: _half_samples(stratum, tree.n_strata, 0.0),
        "fay": lambda: _half_samples(stratum, tree.n_strata, float(fay or 0.0)),
        "bootstrap": lambda: _rescaled(
            stratum, n_units, tree.fraction[0], int(count or 0), seed, finite_population
        ),
    }
    factors = makers[scheme]()
    names = [f"{prefix}{number}" for number in range(1, factors.shape[1] + 1)]
    clash = [name for name in names if name in design.frame.columns]
    if clash:
        raise DesignError(f"`data` has columns {some(clash)} already: choose another prefix.")
    units = n_units[stratum] if scheme == "stratified-jackknife" else None
    weights = {
        name: design.weights * factors[unit, position] for position, name in enumerate(names)
    }
    declared = ReplicateWeights(
        names,
        scheme,
        fay=fay,
        both_halves=both_halves,
        units_per_stratum=None if units is None else units.tolist(),
    )
    return design.with_replicates(_with_columns(design.frame, weights), declared)


def _with_columns(frame: Frame, columns: dict[str, FloatArray]) -> Any:
    native = frame.to_native()
    if isinstance(native, pd.DataFrame):
        return pd.concat([native, pd.DataFrame(columns, index=native.index)], axis=1)
    added = nw.from_dict(columns, backend=frame.implementation)
    return nw.concat([frame, added], how="horizontal").to_native()


def _faults(
    design: SampleDesign,
    scheme: str,
    count: int | None,
    fay: float | None,
    both_halves: bool,
    finite_population: bool,
) -> list[str]:
    tree = design.tree
    made = ("stratified-jackknife", "paired-jackknife", "balanced-repeated-replication", "fay")
    if scheme not in (*made, "bootstrap"):
        return [f"scheme must be one of {some((*made, 'bootstrap'))}; got {scheme!r}."]
    faults = []
    if design.replicates is not None:
        faults.append("the design has replicate weights already.")
    sizes = tree.n_children[0]
    if tree.centre_on_all.any() or sizes.min() < 2:
        lone = int(np.count_nonzero(sizes < 2))
        faults.append(
            f"{lone} strata hold a single unit, which no replicate can leave out. Build the design "
            "with single_cluster_strata='collapse' or 'self-representing'."
        )
    if scheme in made[1:] and (sizes != 2).any():
        faults.append(
            f"scheme={scheme!r} needs two units in every stratum; {int((sizes != 2).sum())} of "
            f"{sizes.size} strata have another number."
        )
    return faults + _option_faults(scheme, count, fay, both_halves, finite_population)


def _option_faults(
    scheme: str, count: int | None, fay: float | None, both_halves: bool, finite_population: bool
) -> list[str]:
    faults = []
    if (scheme == "bootstrap") != (count is not None):
        faults.append("count goes with scheme='bootstrap', and it is needed there.")
    elif count is not None and count < 2:
        faults.append(f"count must be at least 2; got {count!r}.")
    if (scheme == "fay") != (fay is not None):
        faults.append("fay goes with scheme='fay', and it is needed there.")
    elif fay is not None and not 0.0 <= fay < 1.0:
        faults.append(f"fay must be at least 0 and below 1; got {fay!r}.")
    if both_halves and scheme != "paired-jackknife":
        faults.append("both_halves goes with scheme='paired-jackknife'.")
    if finite_population and scheme != "bootstrap":
        faults.append("finite_population goes with scheme='bootstrap'.")
    return faults


def _units(tree: Hierarchy) -> tuple[IntArray, IntArray]:
    """First-stage unit of each record, and stratum of each unit, strata in order."""
    node = tree.ancestor(1)[tree.leaf] if tree.parent else np.full(tree.leaf.size, -1)
    # Records that are units themselves are numbered after the clusters.
    single = np.flatnonzero(node < 0)
    n_clusters = tree.parent[0].size if tree.parent else 0
    node[single] = n_clusters + np.arange(single.size)
    of_record = tree.ancestor(0)[tree.leaf[single]]
    stratum = np.concatenate((tree.parent[0] if tree.parent else of_record[:0], of_record))
    order = np.argsort(stratum, kind="stable")
    rank = np.empty_like(order)
    rank[order] = np.arange(order.size)
    return rank[node], stratum[order]


def _left_out(stratum: IntArray, n_units: IntArray) -> FloatArray:
    """Each unit out in turn, its stratum's others weighted up; (units, units)."""
    size = n_units[stratum].astype(np.float64)
    same = stratum[:, None] == stratum[None, :]
    factors = np.where(same, (size / (size - 1.0))[:, None], 1.0)
    np.fill_diagonal(factors, 0.0)
    return factors


def _pairs(stratum: IntArray, both_halves: bool) -> FloatArray:
    """The second unit of a pair out and the first doubled; with both halves also the reverse."""
    n_strata = int(stratum.max()) + 1
    first = np.flatnonzero(np.diff(stratum, prepend=-1))
    factors = np.ones((stratum.size, n_strata))
    pair = np.arange(n_strata)
    factors[first, pair], factors[first + 1, pair] = 2.0, 0.0
    if not both_halves:
        return factors
    other = np.ones_like(factors)
    other[first, pair], other[first + 1, pair] = 0.0, 2.0
    return np.stack((factors, other), axis=2).reshape(stratum.size, 2 * n_strata)


def _half_samples(stratum: IntArray, n_strata: int, keep: float) -> FloatArray:
    """Balanced half-samples by the columns of a Hadamard matrix; (units, order)."""
    # The column of ones is left out, so that every stratum is balanced against the full sample.
    signs = hadamard(n_strata + 1)[:, 1 : n_strata + 1].astype(np.float64)
    first = np.diff(stratum, prepend=-1) != 0
    side = np.where(first, 1.0, -1.0)[:, None] * signs.T[stratum]
    return np.asarray(1.0 + (1.0 - keep) * side)


def _rescaled(
    stratum: IntArray,
    n_units: IntArray,
    fraction: FloatArray,
    count: int,
    seed: int | None,
    finite_population: bool,
) -> FloatArray:
    """Rao & Wu's bootstrap with `n_h - 1` draws: `1 - λ + λ n_h/(n_h - 1) draws`, λ = √(1 - f)."""
    random = np.random.default_rng(seed)
    draws = np.zeros((stratum.size, count))
    start = 0
    for size in n_units.tolist():
        chosen = random.integers(0, size, (size - 1, count)) + start
        np.add.at(draws, (chosen, np.arange(count)[None, :]), 1.0)
        start += size
    inflate = (n_units / (n_units - 1.0))[stratum, None]
    shrink = np.sqrt(1.0 - fraction)[stratum, None] if finite_population else 1.0
    return np.asarray(1.0 - shrink + shrink * inflate * draws)
