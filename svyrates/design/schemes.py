"""The schemes of replication: their options, coefficients and degrees of freedom.

Sources: Wolter (2007), chapters 3 to 5; Fay & Train (1995) for successive differences; Judkins
(1990) for Fay's variant.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal, get_args

import numpy as np
from numpy.typing import NDArray

from svyrates.errors import DesignWarning, some, warn

if TYPE_CHECKING:
    from svyrates.design.replicates import ReplicateWeights

__all__ = ["JACKKNIVES", "SCHEMES", "Plan", "Scheme", "check_options", "plan"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
Scheme = Literal[
    "delete-one-jackknife",
    "stratified-jackknife",
    "paired-jackknife",
    "balanced-repeated-replication",
    "fay",
    "bootstrap",
    "successive-difference",
    "coefficients",
]
SCHEMES: tuple[str, ...] = get_args(Scheme)
JACKKNIVES = SCHEMES[:3]

# Which scheme an option belongs to, and whether the scheme cannot do without it.
_BELONGS = {
    "fay": ("fay", True),
    "units_per_stratum": ("stratified-jackknife", True),
    "both_halves": ("paired-jackknife", False),
    "mean_size": ("bootstrap", False),
    "coefficients": ("coefficients", True),
}


@dataclass(frozen=True, slots=True)
class Plan:
    """What a scheme makes of R replicates.

    Attributes
    ----------
    coefficients : (replicates,) `c_r`
    df : degrees of freedom, before the rank of the weights limits them
    stratum, units : (replicates,) stratum of each replicate and its units; None without strata
    """

    coefficients: FloatArray
    df: float
    stratum: IntArray | None = None
    units: IntArray | None = None


@dataclass(frozen=True, slots=True)
class _Known:
    """What is known beside the columns: replicates, and strata and df if the design has them."""

    count: int
    strata: int | None
    df: int | None


def check_options(asked: ReplicateWeights, count: int, faults: list[str]) -> None:
    """Check the scheme and that the options given are those it takes."""
    if asked.scheme not in SCHEMES:
        faults.append(f"scheme must be one of {some(SCHEMES, 8)}; got {asked.scheme!r}.")
        return
    for option, (scheme, needed) in _BELONGS.items():
        given = getattr(asked, option) not in (None, False, 1) or (
            option == "coefficients" and asked.coefficients is not None
        )
        if given and asked.scheme != scheme:
            faults.append(f"{option} goes with scheme={scheme!r}, not with {asked.scheme!r}.")
        elif needed and asked.scheme == scheme and not given:
            faults.append(f"scheme={scheme!r} needs `{option}`.")
    if asked.centre not in ("full-sample", "replicate-mean"):
        faults.append(f"centre must be 'full-sample' or 'replicate-mean'; got {asked.centre!r}.")
    if asked.df is not None and not asked.df > 0:
        faults.append(f"df must be positive; got {asked.df!r}.")
    faults += _ranges(asked) + _lengths(asked, count)
    if asked.scheme in ("balanced-repeated-replication", "fay") and count % 4 and count > 2:
        warn(
            f"{count} replicates for scheme={asked.scheme!r}: balanced sets have a multiple of 4. "
            "Check the scheme in the file's documentation.",
            DesignWarning,
        )


def _ranges(asked: ReplicateWeights) -> list[str]:
    faults = []
    if asked.fay is not None and not 0.0 <= asked.fay < 1.0:
        faults.append(f"fay must be at least 0 and below 1; got {asked.fay!r}.")
    if asked.mean_size < 1:
        faults.append(f"mean_size must be at least 1; got {asked.mean_size!r}.")
    if asked.units_per_stratum is not None and np.min(asked.units_per_stratum) < 2:
        least = np.min(asked.units_per_stratum)
        faults.append(f"units_per_stratum must be at least 2 everywhere; the least is {least}.")
    if asked.coefficients is not None and not np.all(np.asarray(asked.coefficients) >= 0):
        faults.append("coefficients must not be negative or missing.")
    return faults


def _lengths(asked: ReplicateWeights, count: int) -> list[str]:
    faults = []
    if asked.both_halves and count % 2:
        faults.append(f"both_halves needs an even number of replicates; there are {count}.")
    for option in ("units_per_stratum", "coefficients"):
        given = getattr(asked, option)
        if isinstance(given, Sequence | np.ndarray) and len(given) != count:
            faults.append(f"{option} has {len(given)} values for {count} replicates.")
    return faults


def plan(
    asked: ReplicateWeights, count: int, known_strata: int | None, known_df: int | None
) -> Plan:
    """Coefficients and degrees of freedom of a checked scheme."""
    return _PLANS[asked.scheme](asked, _Known(count, known_strata, known_df))


def _delete_one(_: ReplicateWeights, known: _Known) -> Plan:
    r = known.count
    stratum = np.zeros(r, dtype=np.intp)
    return Plan(np.full(r, (r - 1) / r), r - 1.0, stratum, np.full(r, r, dtype=np.intp))


def _stratified(asked: ReplicateWeights, known: _Known) -> Plan:
    r = known.count
    units = np.broadcast_to(np.asarray(asked.units_per_stratum), (r,)).astype(np.intp)
    # Replicates of one stratum follow each other, as many as it has units.
    stratum = np.zeros(r, dtype=np.intp)
    start = 0
    while start < r:
        stratum[start : start + units[start]] = start
        start += int(units[start])
    strata = float((1.0 / units).sum())
    return Plan((units - 1.0) / units, float(round(r - strata)), stratum, units)


def _paired(asked: ReplicateWeights, known: _Known) -> Plan:
    r = known.count
    pair = np.arange(r) // 2 if asked.both_halves else np.arange(r)
    c = np.full(r, 0.5 if asked.both_halves else 1.0)
    return Plan(c, float(pair[-1] + 1), pair.astype(np.intp), np.full(r, 2, dtype=np.intp))


def _balanced(_: ReplicateWeights, known: _Known) -> Plan:
    df = known.count - 1 if known.strata is None else known.strata
    return Plan(np.full(known.count, 1.0 / known.count), float(df))


def _fay(asked: ReplicateWeights, known: _Known) -> Plan:
    whole = _balanced(asked, known)
    return Plan(whole.coefficients / (1.0 - float(asked.fay or 0.0)) ** 2, whole.df)


def _bootstrap(asked: ReplicateWeights, known: _Known) -> Plan:
    df = known.count - 1 if known.df is None else known.df
    return Plan(np.full(known.count, asked.mean_size / known.count), float(df))


def _successive(_: ReplicateWeights, known: _Known) -> Plan:
    return Plan(np.full(known.count, 4.0 / known.count), known.count - 1.0)


def _given(asked: ReplicateWeights, known: _Known) -> Plan:
    c = np.broadcast_to(np.asarray(asked.coefficients, dtype=np.float64), (known.count,))
    return Plan(c.copy(), known.count - 1.0)


_PLANS: dict[str, Callable[[ReplicateWeights, _Known], Plan]] = {
    "delete-one-jackknife": _delete_one,
    "stratified-jackknife": _stratified,
    "paired-jackknife": _paired,
    "balanced-repeated-replication": _balanced,
    "fay": _fay,
    "bootstrap": _bootstrap,
    "successive-difference": _successive,
    "coefficients": _given,
}
