"""Strata, clusters and population sizes: from columns to the tree of sampling units."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from svyrates.design.columns import Codes, ColumnFault, Frame, code_column, fault_or, numbers
from svyrates.design.hierarchy import (
    Hierarchy,
    Stages,
    build_hierarchy,
    compress,
    effective_stages,
)
from svyrates.design.lone import LonePolicy, centre_on_all, collapse, lone_strata, refuse
from svyrates.errors import some

__all__ = ["POLICIES", "SingleClusterStrata", "read_tree"]

FloatArray = NDArray[np.float64]
SingleClusterStrata = (
    Literal["error", "collapse", "grand-mean", "self-representing"] | Mapping[Any, Any]
)
POLICIES = ("error", "collapse", "grand-mean", "self-representing")


def _complete_codes(frame: Frame, name: str, role: str) -> Codes:
    coded = code_column(frame, name, role)
    if coded.codes.size and coded.codes.min() < 0:
        missing = int(np.count_nonzero(coded.codes < 0))
        first = int(np.argmax(coded.codes < 0))
        raise ColumnFault(
            f"{role} {name!r} is missing in {missing} of {len(frame)} rows (first: row {first}; "
            "rows count from 0). Every record needs its sampling units."
        )
    return coded


def read_tree(
    frame: Frame,
    columns: Mapping[str, Any],
    single: SingleClusterStrata | None,
    faults: list[str],
) -> tuple[Hierarchy, LonePolicy | None, bool]:
    """Build the tree; `single` None leaves single-unit strata alone (replicates do the variance).

    Returns
    -------
    tree, policy : the sampling units, and what was done about single-unit strata
    repeated : whether unit codes repeat across strata
    """
    before = len(faults)
    strata = [
        fault_or(faults, _complete_codes, frame, name, "strata") for name in columns["strata"]
    ]
    clusters = [
        fault_or(faults, _complete_codes, frame, name, "clusters") for name in columns["clusters"]
    ]
    population = [
        fault_or(faults, _population_column, frame, name) for name in columns["population"]
    ]
    if len(population) > len(clusters) + 1:
        faults.append(
            f"`population` names {len(population)} columns for {len(clusters)} cluster stages; "
            "there may be one per stage and one more for records."
        )
    empty = build_hierarchy(np.zeros(1, dtype=np.int32), 1, Stages((), True, ()))
    if len(faults) > before:
        return empty, None, False
    stratum, labels = _cross(strata, len(frame))
    codes = tuple((coded.codes, len(coded.levels)) for coded in clusters)
    usual = effective_stages(codes, tuple(population))
    tree = build_hierarchy(stratum, len(labels), usual)
    repeated = bool(codes) and tree.parent[0].size > codes[0][1]
    _check_population(tree, usual, columns["population"], labels, faults)
    lone = lone_strata(tree)
    if not lone.size or single is None or len(faults) > before:
        return tree, None, repeated
    try:
        tree, policy = _settle(tree, lone, labels, single, stratum, codes, tuple(population))
    except ColumnFault as fault:
        faults.append(str(fault))
        return empty, None, repeated
    return tree, policy, repeated


def _settle(
    tree: Hierarchy,
    lone: NDArray[np.intp],
    labels: tuple[str, ...],
    single: SingleClusterStrata,
    stratum: NDArray[np.int32],
    codes: tuple[tuple[NDArray[np.int32], int], ...],
    population: tuple[FloatArray, ...],
) -> tuple[Hierarchy, LonePolicy]:
    """Apply the user's policy to the single-unit strata."""
    unit = "cluster" if codes else "record"
    if isinstance(single, Mapping):
        return collapse(tree, lone, labels, single)
    if single == "collapse":
        return collapse(tree, lone, labels, None)
    if single == "grand-mean":
        return centre_on_all(tree, lone, labels)
    if single == "error":
        raise ColumnFault(refuse(lone, labels, unit))
    if not codes:
        raise ColumnFault(
            "single_cluster_strata='self-representing' needs a stage below the single unit, but "
            f"records are the units in strata {some([labels[h] for h in lone])}. Use 'collapse' or "
            "'grand-mean'."
        )
    flags = np.zeros(tree.n_strata, dtype=bool)
    flags[lone] = True
    usual = effective_stages(codes, population)
    shifted = effective_stages(codes[1:], population[1:])
    moved = build_hierarchy(stratum, len(labels), usual, shifted, flags)
    still = lone_strata(moved)
    if still.size:
        raise ColumnFault(
            "single_cluster_strata='self-representing': the single cluster of strata "
            f"{some([labels[h] for h in still])} holds a single next-stage unit too. Use "
            "'collapse' or 'grand-mean'."
        )
    kind = "records" if not shifted.codes else "next-stage units"
    policy = LonePolicy(
        tuple(labels[h] for h in lone), f"self-representing: their {kind} are the sampling units"
    )
    return moved, policy


def _population_column(frame: Frame, name: str) -> FloatArray:
    values = numbers(frame, name, "population")
    bad = ~(np.isfinite(values) & (values > 0))
    if bad.any():
        raise ColumnFault(
            f"population {name!r} is missing, infinite or not positive in {int(bad.sum())} of "
            f"{values.size} rows (first: row {int(np.argmax(bad))}; rows count from 0)."
        )
    return values


def _check_population(
    tree: Hierarchy,
    stages: Stages,
    names: Sequence[str],
    labels: tuple[str, ...],
    faults: list[str],
) -> None:
    for level, values in enumerate(stages.population):
        node = tree.ancestor(level)[tree.leaf]
        size = np.zeros(tree.n_children[level].size)
        size[node] = values
        varies = np.unique(node[size[node] != values])
        inside = "strata" if level == 0 else f"units of stage {level}"
        if varies.size:
            shown = [labels[node] for node in varies] if level == 0 else varies.tolist()
            faults.append(
                f"population {names[level]!r} varies within {varies.size} {inside}"
                f"{': ' + some(shown) if level == 0 else ''}. It must be one number in each."
            )
            continue
        small = np.flatnonzero(tree.n_children[level] > size)
        if small.size:
            first = small[0]
            named = f" in stratum {labels[first]!r}" if level == 0 else ""
            faults.append(
                f"population {names[level]!r} is smaller than the sample in {small.size} {inside}"
                f" (first: {tree.n_children[level][first]} units drawn of {size[first]:g}{named})."
            )


def _cross(strata: list[Codes], n_records: int) -> tuple[NDArray[np.int32], tuple[str, ...]]:
    """Cross the stratum columns and keep the combinations that occur."""
    if not strata:
        return np.zeros(n_records, dtype=np.int32), ("all",)
    if len(strata) == 1 and _all_occur(strata[0]):
        return strata[0].codes, tuple(map(str, strata[0].levels))
    stratum = np.zeros(n_records, dtype=np.int32)
    names: list[str] = [""]
    for position, coded in enumerate(strata):
        n_codes = len(coded.levels)
        combined, parent = compress(stratum, len(names), coded.codes, n_codes)
        pair_code = np.zeros(parent.size, dtype=np.int64)
        pair_code[combined] = coded.codes
        names = [
            f"{names[above]} / {coded.levels[code]}" if position else str(coded.levels[code])
            for above, code in zip(parent.tolist(), pair_code.tolist(), strict=True)
        ]
        stratum = combined
    return stratum, tuple(names)


def _all_occur(coded: Codes) -> bool:
    """Whether every level has a record; categories may be declared and stay empty."""
    seen = np.zeros(len(coded.levels), dtype=bool)
    seen[coded.codes] = True
    return bool(seen.all())
