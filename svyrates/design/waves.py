"""`combine_waves`: several samples in one design, so that change over time has its covariance."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import narwhals.stable.v2 as nw
import numpy as np
import pandas as pd
from numpy.typing import NDArray

from svyrates.design.columns import Frame
from svyrates.design.replicates import ReplicateSet, ReplicateWeights
from svyrates.design.sample_design import SampleDesign
from svyrates.errors import DesignError, DesignWarning, all_faults, some, warn

__all__ = ["combine_waves"]

FloatArray = NDArray[np.float64]
ROLES = ("strata", "clusters", "population")


def combine_waves(
    waves: Mapping[str, SampleDesign],
    *,
    shared_clusters: bool = False,
    name: str = "wave",
    average_weights: bool = False,
) -> SampleDesign:
    """Put waves of a survey into one design, with a column that tells them apart.

    Parameters
    ----------
    waves : dict of str -> SampleDesign
        Label -> design, in the order of time. Their frames are of one library.
    shared_clusters : bool
        Whether the waves were drawn in the same sampling units, so that equal codes of strata and
        clusters (or equal replicates) are the same units. Independent samples by default.
    name : str
        Column that holds the label of the wave.
    average_weights : bool
        Divide the weights by the number of waves, so that all records together stand for an average
        population; rates of a wave do not change.

    Returns
    -------
    SampleDesign
        Group by `name` to compare the waves; leave it out for their pooled rate.

    Raises
    ------
    DesignError
        Lists everything in which the designs do not fit together.

    Warns
    -----
    DesignWarning
        When columns that only some waves have are left out.

    Notes
    -----
    Independent samples: strata are crossed with the wave, so that nothing is shared; replicate sets
    stand side by side, each with the other waves at their full weight. Shared units: a unit's total
    holds the records of all waves, and replicates of the same index belong together, so that
    `V(p_2 - p_1)` keeps its covariance (Kish 1965, section 12.4, from memory).

    Examples
    --------
    >>> import svyrates as sr
    >>> designs = {
    ...     wave: sr.SampleDesign(
    ...         sr.demo_survey(wave), weight="wt", strata="district", clusters="block"
    ...     )
    ...     for wave in ("2021", "2024")
    ... }
    >>> both = sr.combine_waves(designs, shared_clusters=True)
    >>> both.n_units
    112

    The blocks of the two waves are the same 112 blocks.
    """
    designs = _checked(waves, name, shared_clusters)
    first = next(iter(designs.values()))
    columns, renamed, faults = _columns(designs, name)
    all_faults(DesignError, "The waves do not fit together:", faults)
    share = 1.0 / len(designs) if average_weights else 1.0
    weight = first.columns["weight"] or _free("weight", [*columns, name])
    parts = {
        label: _part(design, columns, renamed[label], weight, share)
        for label, design in designs.items()
    }
    replicates = None
    if first.replicates is not None:
        build = _shared_replicates if shared_clusters else _side_by_side
        parts, replicates = build(designs, parts, share, [*columns, name, weight])
    stacked = _stacked(parts, name)
    strata = first.columns["strata"]
    if not shared_clusters:
        strata = (name, *strata)
    # Independent replicate sets carry degrees of freedom of their own.
    apart = replicates is not None and not shared_clusters
    return SampleDesign(
        stacked,
        weight=weight,
        strata=None if apart else strata or None,
        clusters=None if apart else first.columns["clusters"] or None,
        population=None if replicates is not None else first.columns["population"] or None,
        single_cluster_strata=first.columns["single_cluster_strata"],
        replicates=replicates,
    )


def _checked(waves: object, name: object, shared: bool) -> dict[str, SampleDesign]:
    """The waves by label, after the faults that need no look into their columns."""
    if not isinstance(waves, Mapping) or len(waves) < 2:
        raise DesignError("`waves` must be a dict of label -> SampleDesign with two waves or more.")
    strange = [label for label, each in waves.items() if not isinstance(each, SampleDesign)]
    if strange:
        raise DesignError(f"waves {some(strange)} are no SampleDesign.")
    designs = {str(label): design for label, design in waves.items()}
    faults = []
    if len(designs) < len(waves):
        faults.append(f"labels repeat: {some([str(label) for label in waves])}.")
    if not isinstance(name, str) or not name:
        faults.append(f"name must be the name of a column; got {name!r}.")
    faults += _kind_faults(list(designs.values()), shared)
    all_faults(DesignError, "The waves do not fit together:", faults)
    return designs


def _kind_faults(designs: list[SampleDesign], shared: bool) -> list[str]:
    """In what the designs differ in kind."""
    faults = []
    libraries = {str(design.frame.implementation) for design in designs}
    if len(libraries) > 1:
        faults.append(f"the frames are of {len(libraries)} libraries; convert them to one.")
    for role in ROLES:
        counts = sorted({len(design.columns[role]) for design in designs})
        if len(counts) > 1:
            faults.append(f"they name different numbers of {role} columns ({some(counts)}).")
    policies = [design.columns["single_cluster_strata"] for design in designs]
    if any(policy != policies[0] for policy in policies):
        faults.append("single_cluster_strata differs between them.")
    elif isinstance(policies[0], Mapping) and not shared:
        faults.append(
            "single_cluster_strata is a mapping of strata, which are crossed with the wave here: "
            "use 'collapse' or 'grand-mean'."
        )
    sets = [design.replicates for design in designs if design.replicates is not None]
    if sets and len(sets) < len(designs):
        faults.append("some waves have replicate weights and others do not.")
    elif sets:
        faults += _replicate_faults(sets, shared)
    elif shared and not all(design.columns["clusters"] for design in designs):
        faults.append("shared_clusters=True needs clusters: without them nothing is shared.")
    return faults


def _replicate_faults(known: list[ReplicateSet], shared: bool) -> list[str]:
    one = known[0]
    if not shared:
        on_mean = any(each.centre_on_mean for each in known)
        return ["replicates centred on their mean cannot stand side by side."] if on_mean else []
    faults = []
    if {each.count for each in known} != {one.count}:
        faults.append(f"they have {some([each.count for each in known])} replicates.")
    elif any(
        each.scheme != one.scheme
        or each.centre_on_mean != one.centre_on_mean
        or not np.allclose(each.coefficients, one.coefficients)
        for each in known
    ):
        faults.append("their replicates differ in scheme, coefficients or centre.")
    return faults


def _columns(
    designs: Mapping[str, SampleDesign], name: str
) -> tuple[list[str], dict[str, dict[str, str]], list[str]]:
    """Columns that all waves have, and under which name of its own each wave has them."""
    first = next(iter(designs.values()))
    wanted = [column for role in ROLES for column in first.columns[role]]
    faults, renamed, present = [], {}, []
    for label, design in designs.items():
        frame = design.frame
        own = {
            mine: theirs
            for role in ROLES
            for mine, theirs in zip(first.columns[role], design.columns[role], strict=True)
        }
        hidden = {*own.values(), design.columns["weight"], *_replicate_names(design), name}
        taken = [mine for mine, theirs in own.items() if mine != theirs and mine in frame.columns]
        if taken:
            faults.append(
                f"wave {label!r} has columns {some(taken)} of another meaning; drop them."
            )
        if name in frame.columns and set(map(str, frame.get_column(name).unique())) != {label}:
            faults.append(
                f"wave {label!r} has a column {name!r} that holds other values than its label; "
                "choose another name=."
            )
        renamed[label] = own
        present.append([column for column in frame.columns if column not in hidden])
    common = [column for column in present[0] if all(column in each for each in present)]
    dropped = sorted({column for each in present for column in each} - set(common))
    if dropped and not faults:
        warn(f"Columns that not all waves have are left out: {some(dropped, 12)}.", DesignWarning)
    return [*dict.fromkeys([*wanted, *common])], renamed, faults


def _replicate_names(design: SampleDesign) -> tuple[str, ...]:
    return () if design.replicates is None else design.replicates.names


def _free(name: str, taken: list[str]) -> str:
    while name in taken:
        name += "_"
    return name


def _part(
    design: SampleDesign, columns: list[str], renamed: dict[str, str], weight: str, share: float
) -> Frame:
    """One wave's columns under the common names, with finished weights."""
    frame = design.frame.select(
        [nw.col(renamed.get(column, column)).alias(column) for column in columns]
    )
    return frame.with_columns(_series(frame, weight, design.weights * share))


def _series(frame: Frame, name: str, values: Any) -> nw.Series[Any]:
    implementation = frame.implementation
    if implementation.is_pandas():
        native = frame.to_native()
        return nw.from_native(pd.Series(values, index=native.index, name=name), series_only=True)
    return nw.new_series(name, values, backend=implementation)


def _finished(design: SampleDesign, column: str, share: float) -> Any:
    """One replicate as a finished weight, in the type of its column."""
    replicates = design.replicates
    assert replicates is not None  # noqa: S101 - the caller has looked
    values = design.replicate_column(column)
    factor = replicates.scale * share
    if replicates.factors:
        return values * (design.weights * factor)
    if factor == 1.0:
        return values
    # Single precision stays single.
    return values * (values.dtype.type(factor) if values.dtype.kind == "f" else factor)


def _shared_replicates(
    designs: Mapping[str, SampleDesign], parts: dict[str, Frame], share: float, taken: list[str]
) -> tuple[dict[str, Frame], ReplicateWeights]:
    """The same index is the same replicate: columns below each other."""
    sets = {label: _set(design) for label, design in designs.items()}
    first = next(iter(sets.values()))
    names = list(first.names)
    if set(names) & set(taken):
        prefix = _prefix(taken)
        names = [f"{prefix}{number}" for number in range(1, first.count + 1)]
    added = {}
    for label, design in designs.items():
        frame = parts[label]
        columns = [
            _series(frame, name, _finished(design, own, share))
            for name, own in zip(names, sets[label].names, strict=True)
        ]
        added[label] = frame.with_columns(*columns)
    declared = ReplicateWeights(
        names,
        "coefficients",
        coefficients=first.coefficients.tolist(),
        centre="replicate-mean" if first.centre_on_mean else "full-sample",
        df=min(each.df for each in sets.values()),
        may_leave_out=first.may_leave_out,
    )
    return added, declared


def _side_by_side(
    designs: Mapping[str, SampleDesign], parts: dict[str, Frame], share: float, taken: list[str]
) -> tuple[dict[str, Frame], ReplicateWeights]:
    """Independent sets: in the replicates of one wave the others keep their full weight."""
    sets = {label: _set(design) for label, design in designs.items()}
    prefix = _prefix(taken)
    owners = [(label, own) for label, each in sets.items() for own in each.names]
    names = [f"{prefix}{number}" for number in range(1, len(owners) + 1)]
    added = {}
    for label, design in designs.items():
        frame, full = parts[label], design.weights * share
        columns = [
            _series(frame, name, _finished(design, own, share) if owner == label else full)
            for name, (owner, own) in zip(names, owners, strict=True)
        ]
        added[label] = frame.with_columns(*columns)
    declared = ReplicateWeights(
        names,
        "coefficients",
        coefficients=np.concatenate([each.coefficients for each in sets.values()]).tolist(),
        df=sum(each.df for each in sets.values()),
        may_leave_out=all(each.may_leave_out for each in sets.values()),
    )
    return added, declared


def _set(design: SampleDesign) -> ReplicateSet:
    assert design.replicates is not None  # noqa: S101 - the caller has looked
    return design.replicates


def _prefix(taken: list[str]) -> str:
    prefix = "replicate_"
    while any(column.startswith(prefix) for column in taken):
        prefix += "_"
    return prefix


def _stacked(parts: Mapping[str, Frame], name: str) -> Any:
    """The waves below each other; the column of waves keeps their order where it can."""
    labels = list(parts)
    frames = [part.with_columns(nw.lit(label).alias(name)) for label, part in parts.items()]
    try:
        stacked = nw.concat(frames, how="vertical")
    except Exception as problem:
        reason = str(problem).splitlines()[0] if str(problem) else type(problem).__name__
        raise DesignError(
            f"The waves' columns cannot be put below each other: {reason}. Give them one type."
        ) from problem
    native = stacked.to_native()
    if isinstance(native, pd.DataFrame):
        native = native.reset_index(drop=True)
        native[name] = pd.Categorical(native[name], categories=labels, ordered=True)
        return native
    if stacked.implementation.is_polars():
        return stacked.with_columns(nw.col(name).cast(nw.Enum(labels))).to_native()
    return native
