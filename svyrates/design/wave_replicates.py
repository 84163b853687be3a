"""Replicate weights of several waves: under one another, or side by side."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from svyrates.design.replicates import ReplicateSet
from svyrates.design.sample_design import SampleDesign

__all__ = [
    "needs_finished",
    "replicate_faults",
    "shared_columns",
    "shared_set",
    "side_by_side_columns",
    "side_by_side_set",
]

Column = NDArray[Any]


def replicate_faults(
    designs: Sequence[SampleDesign], labels: Sequence[str], *, shared: bool
) -> list[str]:
    """Check that the replicates of the waves can be combined."""
    have = [design.replicates is not None for design in designs]
    if not any(have):
        return []
    if not all(have):
        without = ", ".join(repr(label) for label, has in zip(labels, have, strict=True) if not has)
        return [f"some waves have replicate weights, but not {without}: give all waves, or none."]
    sets = _sets(designs)
    if not shared:
        on_mean = [label for label, one in zip(labels, sets, strict=True) if one.centre_on_mean]
        if on_mean:
            named = ", ".join(map(repr, on_mean))
            fault = (
                f"the replicates of {named} are centred on their mean, which sets side by side "
                "cannot be. Declare the waves with centre='full-sample'."
            )
            return [fault]
        return []
    agreed = {
        "count": [str(one.count) for one in sets],
        "scheme": [one.scheme for one in sets],
        "centre": ["replicate-mean" if one.centre_on_mean else "full-sample" for one in sets],
    }
    faults = [
        f"waves that share clusters have replicates of one {what}; here "
        + ", ".join(f"{value} in {label!r}" for label, value in zip(labels, values, strict=True))
        + "."
        for what, values in agreed.items()
        if len(set(values)) > 1
    ]
    return faults or _coefficient_faults(sets, labels)


def _coefficient_faults(sets: Sequence[ReplicateSet], labels: Sequence[str]) -> list[str]:
    first = sets[0]
    differ = [
        repr(label)
        for label, one in zip(labels, sets, strict=True)
        if not np.allclose(one.coefficients, first.coefficients, rtol=1e-9, atol=0.0)
        or one.sets != first.sets
    ]
    if not differ:
        return []
    fault = (
        f"the coefficients of the replicates of {', '.join(differ)} differ from those of "
        f"{labels[0]!r}, so the same number is not the same replicate."
    )
    return [fault]


def _sets(designs: Sequence[SampleDesign]) -> list[ReplicateSet]:
    return [design.replicates for design in designs if design.replicates is not None]


def needs_finished(designs: Sequence[SampleDesign], *, shared: bool, average: bool) -> bool:
    """Whether replicates under one another must be computed, not kept as they lie in the frames."""
    kinds = {(one.factors, one.scale) for one in _sets(designs)}
    # Factors multiply the weight, so an averaged weight averages them too.
    finished = any(not factors for factors, _ in kinds)
    return shared and (len(kinds) > 1 or (average and finished))


def _finished(design: SampleDesign, place: int, over: int) -> Column:
    """Finished weights of one replicate, divided by `over`, shape (records,)."""
    (own,) = _sets([design])
    values = design.replicate_column(own.names[place])
    if own.factors:
        return np.asarray(values * (design.weights * (own.scale / over)))
    factor = own.scale / over
    return np.asarray(values if factor == 1.0 else values * factor)


def shared_columns(designs: Sequence[SampleDesign], over: int) -> dict[str, Column]:
    """Finished replicate weights of all waves under one another, by the first wave's names."""
    first = _sets(designs)[0]
    return {
        name: np.concatenate([_finished(design, place, over) for design in designs])
        for place, name in enumerate(first.names)
    }


def shared_set(designs: Sequence[SampleDesign], *, finished: bool) -> ReplicateSet:
    """The replicates of waves that share clusters: one set, with the least df of the waves'."""
    sets = _sets(designs)
    return replace(
        sets[0],
        factors=sets[0].factors and not finished,
        scale=1.0 if finished else sets[0].scale,
        df=min(one.df for one in sets),
        n_negative=sum(one.n_negative for one in sets),
    )


def side_by_side_columns(
    designs: Sequence[SampleDesign], taken: set[str], over: int
) -> dict[str, Column]:
    """Finished weights of every wave's replicates, the other waves at their full weight."""
    sets = _sets(designs)
    count = sum(one.count for one in sets)
    prefix = "replicate_"
    while any(f"{prefix}{number}" in taken for number in range(1, count + 1)):
        prefix = f"combined_{prefix}"
    full = [design.weights / over for design in designs]
    starts = np.cumsum([0, *(weights.size for weights in full)])
    everyone = np.concatenate(full)
    columns: dict[str, Column] = {}
    for wave, (design, own) in enumerate(zip(designs, sets, strict=True)):
        rows = slice(starts[wave], starts[wave + 1])
        others = np.concatenate([everyone[: rows.start], everyone[rows.stop :]])
        single = bool((others.astype(np.float32) == others).all())
        for place in range(own.count):
            values = _finished(design, place, over)
            # Single precision may hold the others only where it leaves their weights as they are:
            # they must not move at all in this wave's replicates.
            narrow = single and values.dtype == np.float32
            column = everyone.astype(np.float32 if narrow else np.float64)
            column[rows] = values
            columns[f"{prefix}{len(columns) + 1}"] = column
    return columns


def side_by_side_set(designs: Sequence[SampleDesign], names: tuple[str, ...]) -> ReplicateSet:
    """The replicates of independent waves: sets side by side, whose variances add up."""
    parts = tuple(one for own in _sets(designs) for one in own.side_by_side or (own,))
    stratum, units = _strata(parts)
    return ReplicateSet(
        names=names,
        scheme="coefficients",
        coefficients=np.concatenate([one.coefficients for one in parts]),
        centre_on_mean=False,
        factors=False,
        scale=1.0,
        df=sum(one.df for one in parts),
        stratum=stratum,
        units=units,
        n_negative=sum(one.n_negative for one in parts),
        side_by_side=parts,
    )


def _strata(
    parts: Sequence[ReplicateSet],
) -> tuple[NDArray[np.intp] | None, NDArray[np.intp] | None]:
    """Strata of the replicates, those of each set apart, where all sets have them."""
    strata, units = [], []
    start = 0
    for one in parts:
        if one.stratum is None or one.units is None:
            return None, None
        strata.append(one.stratum + start)
        units.append(one.units)
        start = int(strata[-1].max()) + 1
    return np.concatenate(strata), np.concatenate(units)
