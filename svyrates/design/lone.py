"""Strata with a single first-stage unit: what was found, and what the user decided about it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from svyrates.design.columns import ColumnFault
from svyrates.design.hierarchy import Hierarchy, merge_strata
from svyrates.errors import some

__all__ = ["LonePolicy", "collapse", "lone_strata"]

IntArray = NDArray[np.intp]

_SHOWN = 6


@dataclass(frozen=True, slots=True)
class LonePolicy:
    """What was done about the single-unit strata, kept for the summary and for later waves.

    Attributes
    ----------
    strata : the strata with a single unit
    done : what was done, in words
    joined : the strata joined with each other, where they were
    """

    strata: tuple[str, ...]
    done: str
    joined: tuple[tuple[str, ...], ...] = ()


def lone_strata(tree: Hierarchy) -> IntArray:
    """Strata with one sampling unit, certainty units (population of one) apart."""
    certain = tree.fraction[0] >= 1.0
    return np.flatnonzero((tree.n_children[0] == 1) & ~certain)


def refuse(lone: IntArray, labels: tuple[str, ...], unit: str) -> str:
    """Word the fault for `single_cluster_strata="error"`."""
    names = [labels[stratum] for stratum in lone]
    return (
        f"{len(names)} strata hold a single {unit}, so their variance cannot be estimated: "
        f"{some(names)}. If rows were filtered away before the design was built, give the full "
        "file and name the subpopulation with `where=`. Otherwise choose "
        "single_cluster_strata='collapse' (or a mapping of stratum to partner), 'grand-mean' or "
        "'self-representing'."
    )


def collapse(
    tree: Hierarchy, lone: IntArray, labels: tuple[str, ...], partners: Mapping[Any, Any] | None
) -> tuple[Hierarchy, LonePolicy]:
    """Join single strata in sorted pairs, or as the user's map says."""
    n_strata = tree.n_strata
    if n_strata == 1:
        raise ColumnFault("the only stratum holds a single unit: there is nothing to join it with.")
    groups = _sorted_pairs(lone, n_strata) if partners is None else _mapped(partners, labels)
    target = np.arange(n_strata)
    for group in groups:
        joined = np.isin(target, target[group])
        target[joined] = target[joined].min()
    target = np.unique(target, return_inverse=True)[1]
    merged = merge_strata(tree, target)
    left = [labels[stratum] for stratum in lone if merged.n_children[0][target[stratum]] == 1]
    if left:
        raise ColumnFault(
            f"the mapping in single_cluster_strata leaves {len(left)} strata with a single unit: "
            f"{some(left)}. Name a partner for each."
        )
    named = tuple(tuple(labels[stratum] for stratum in group) for group in groups)
    more = f"; and {len(named) - _SHOWN} more" if len(named) > _SHOWN else ""
    listed = "; ".join(" with ".join(group) for group in named[:_SHOWN])
    return merged, LonePolicy(
        tuple(labels[stratum] for stratum in lone), f"joined: {listed}{more}", named
    )


def _sorted_pairs(lone: IntArray, n_strata: int) -> list[list[int]]:
    order = lone.tolist()
    if len(order) == 1:
        only = order[0]
        return [[only, only + 1 if only + 1 < n_strata else only - 1]]
    groups = [order[start : start + 2] for start in range(0, len(order) - 1, 2)]
    if len(order) % 2:
        groups[-1].append(order[-1])
    return groups


def _mapped(partners: Mapping[Any, Any], labels: tuple[str, ...]) -> list[list[int]]:
    known = {label: position for position, label in enumerate(labels)}
    strange = [
        name for pair in partners.items() for name in pair if _stratum_name(name) not in known
    ]
    if strange:
        raise ColumnFault(
            f"single_cluster_strata names strata that do not exist: {some(strange)}. "
            f"The strata are {some(labels)}."
        )
    return [
        [known[_stratum_name(one)], known[_stratum_name(other)]] for one, other in partners.items()
    ]


def _stratum_name(name: Any) -> str:
    return " / ".join(map(str, name)) if isinstance(name, tuple) else str(name)


def centre_on_all(
    tree: Hierarchy, lone: IntArray, labels: tuple[str, ...]
) -> tuple[Hierarchy, LonePolicy]:
    """Flag single strata whose unit is compared with the mean over all first-stage units."""
    flags = np.zeros(tree.n_strata, dtype=bool)
    flags[lone] = True
    policy = LonePolicy(
        tuple(labels[stratum] for stratum in lone), "centred on the mean over all units"
    )
    return replace(tree, centre_on_all=flags), policy
