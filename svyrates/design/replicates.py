"""Replicate weights: how a file ships its variances, declared and checked.

`V = Σ c_r (θ_r - θ)²` over the replicates. The coefficients `c_r` belong to the scheme, and a wrong
scheme is the commonest mistake: they are printed with the design.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import KW_ONLY, dataclass
from fnmatch import fnmatchcase
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from svyrates.design.columns import Frame, column, fault_or, numbers
from svyrates.design.hierarchy import Hierarchy
from svyrates.design.replicate_checks import check_sums, natural_order, rank_of_deviations
from svyrates.design.schemes import JACKKNIVES, Scheme, check_options, plan
from svyrates.errors import some

__all__ = ["ReplicateSet", "ReplicateWeights", "read_replicates"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]


@dataclass(frozen=True, slots=True)
class ReplicateWeights:
    """Replicate weights of a file: their columns, and the scheme that made them.

    Parameters
    ----------
    columns : str or list of str
        A pattern such as ``"rw_*"`` (`*` any text, `?` any character; natural order, so `rw_2`
        comes before `rw_10`), or the columns in order.
    scheme : str
        ``"delete-one-jackknife"``, ``"stratified-jackknife"``, ``"paired-jackknife"``,
        ``"balanced-repeated-replication"``, ``"fay"``, ``"bootstrap"``,
        ``"successive-difference"``, or ``"coefficients"`` for a scheme of your own.
    units_per_stratum : int or list of int, optional
        For the stratified jackknife: units in the stratum of each replicate.
    both_halves : bool
        For the paired jackknife: whether each pair has two replicates, one for either half.
    fay : float, optional
        For Fay's variant: the factor k in [0, 1); half of the units keep k of their weight.
    mean_size : int
        For the mean bootstrap: replicates averaged in each column.
    coefficients : float or list of float, optional
        For ``"coefficients"``: one for all replicates, or one for each.
    centre : {"full-sample", "replicate-mean"}
        What the replicates are compared with.
    factors : bool
        Whether the columns hold factors that multiply the weight, not finished weights.
    decimals : int
        Implied decimals: the columns are divided by 10 to this power.
    df : float, optional
        Degrees of freedom, if the agency states them; the scheme's own otherwise.

    Notes
    -----
    Coefficients for R replicates: delete-one `(R - 1)/R`; stratified `(n_h - 1)/n_h`; paired 1, or
    1/2 with both halves; balanced `1/R`; Fay `1/(R (1 - k)²)`; bootstrap `1/R`, mean bootstrap of
    size b `b/R`; successive difference `4/R` (Wolter 2007, chapters 3 to 5; Fay & Train 1995).

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> replicated = sr.make_replicates(design, scheme="bootstrap", count=60, seed=1)
    >>> file = replicated.frame.to_native()
    >>> again = sr.SampleDesign(
    ...     file, weight="wt", replicates=sr.ReplicateWeights("replicate_*", scheme="bootstrap")
    ... )
    >>> again.replicates.count
    60

    A file with 60 bootstrap weights, declared as its user would.
    """

    columns: str | Sequence[str]
    scheme: Scheme
    _: KW_ONLY
    units_per_stratum: int | Sequence[int] | None = None
    both_halves: bool = False
    fay: float | None = None
    mean_size: int = 1
    coefficients: float | Sequence[float] | None = None
    centre: Literal["full-sample", "replicate-mean"] = "full-sample"
    factors: bool = False
    decimals: int = 0
    df: float | None = None


@dataclass(frozen=True)
class ReplicateSet:
    """Replicate weights that have been found and checked.

    Attributes
    ----------
    names : columns, one per replicate
    scheme : how they were made
    coefficients : (replicates,) `c_r`
    centre_on_mean : whether the replicates are compared with their mean
    factors, scale : finished weight = column × scale, × weight for factors
    df : degrees of freedom of the scheme
    stratum, units : (replicates,) stratum of each replicate and its units, for Satterthwaite's
        degrees of freedom; None where the scheme has none
    n_negative : negative replicate weights, which some schemes produce
    side_by_side : the independent sets that lie side by side in this one; empty for a set of one
    """

    names: tuple[str, ...]
    scheme: str
    coefficients: FloatArray
    centre_on_mean: bool
    factors: bool
    scale: float
    df: float
    stratum: IntArray | None
    units: IntArray | None
    n_negative: int
    side_by_side: tuple[ReplicateSet, ...] = ()

    @property
    def count(self) -> int:
        """Number of replicates."""
        return len(self.names)

    @property
    def may_leave_out(self) -> bool:
        """Whether a replicate may be left out where a rate is undefined in it."""
        return self.scheme not in JACKKNIVES

    @property
    def sets(self) -> tuple[tuple[slice, bool], ...]:
        """Where each independent set lies, and whether its replicates may be left out."""
        found = []
        start = 0
        for one in self.side_by_side or (self,):
            found.append((slice(start, start + one.count), one.may_leave_out))
            start += one.count
        return tuple(found)


def read_replicates(
    frame: Frame,
    asked: object,
    weight: str | None,
    weights: FloatArray,
    tree: Hierarchy,
    known_df: int | None,
    faults: list[str],
) -> ReplicateSet | None:
    """Find the columns, check them and the options, and work out coefficients and df."""
    if isinstance(asked, ReplicateSet):
        return asked
    if not isinstance(asked, ReplicateWeights):
        faults.append(f"replicates must be ReplicateWeights(...); got {type(asked).__name__}.")
        return None
    before = len(faults)
    names = _columns(frame, asked.columns, faults)
    if weight in names:
        faults.append(
            f"replicates take in the weight {weight!r} itself as one of {len(names)}; leave it out "
            "(a pattern such as 'rw_[1-9]*' begins at 1)."
        )
    check_options(asked, len(names), faults)
    if len(faults) > before:
        return None
    sums, n_negative = _sums(frame, names, weights if asked.factors else None, faults)
    if len(faults) > before:
        return None
    scale = 10.0**-asked.decimals
    check_sums(sums * scale, weights, asked.factors)
    strata = tree.n_strata if known_df is not None else None
    planned = plan(asked, len(names), strata, known_df)
    df = float(asked.df) if asked.df is not None else planned.df
    if asked.df is None:
        rank = rank_of_deviations(frame, names, weights, asked.factors, scale, int(df))
        df = min(df, float(rank))
    return ReplicateSet(
        names=names,
        scheme=asked.scheme,
        coefficients=planned.coefficients,
        centre_on_mean=asked.centre == "replicate-mean",
        factors=asked.factors,
        scale=scale,
        df=df,
        stratum=planned.stratum,
        units=planned.units,
        n_negative=n_negative,
    )


def _sums(
    frame: Frame, names: Sequence[str], weights: FloatArray | None, faults: list[str]
) -> tuple[FloatArray, int]:
    """Sum of every replicate, times the weight for factors, and how many cells are negative."""
    sums = np.zeros(len(names))
    n_negative = 0
    for position, name in enumerate(names):
        values = fault_or(faults, numbers, frame, name, "replicates")
        if values is None:
            continue
        # A column of a block by rows is spread over all of it: gathered once, then read twice.
        values = np.ascontiguousarray(values)
        sums[position] = values.sum() if weights is None else np.dot(values, weights)
        if not np.isfinite(sums[position]):
            rows = np.flatnonzero(~np.isfinite(values))
            faults.append(
                f"replicates {name!r} is missing or infinite in {rows.size} of {values.size} rows "
                f"(first: row {rows[0]}; rows count from 0). Every replicate needs every record."
            )
        if values.min() < 0:
            n_negative += int(np.count_nonzero(values < 0))
    return sums, n_negative


def _columns(frame: Frame, asked: str | Sequence[str], faults: list[str]) -> tuple[str, ...]:
    if isinstance(asked, str):
        found = [name for name in frame.columns if fnmatchcase(name, asked)]
        if len(found) < 2:
            faults.append(
                f"replicates: the pattern {asked!r} fits {len(found)} columns; it takes at least "
                f"two. The columns are {some(frame.columns, 12)}."
            )
        return tuple(sorted(found, key=natural_order))
    names = [str(name) for name in asked]
    if len(set(names)) < len(names):
        faults.append(f"replicates name a column twice: {some(names)}.")
    if len(names) < 2:
        faults.append(f"replicates name {len(names)} columns; it takes at least two.")
    for name in names:
        fault_or(faults, column, frame, name, "replicates")
    return tuple(names)
