"""Whether designs can be the waves of one stack, and what becomes of their policies."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from itertools import pairwise
from typing import Any

from svyrates.design.sample_design import SampleDesign
from svyrates.errors import DesignError, all_faults, some

__all__ = ["ROLES", "check_waves", "kind_faults", "lone_policy"]

ROLES = ("strata", "clusters", "population")


def check_waves(waves: object, name: object) -> None:
    """Check what everything else takes for granted."""
    if not isinstance(waves, Mapping):
        raise DesignError(
            f"`waves` must be a mapping of label to SampleDesign; got {type(waves).__name__}."
        )
    faults = [
        f"wave {label!r} must be a SampleDesign; got {type(design).__name__}."
        for label, design in waves.items()
        if not isinstance(design, SampleDesign)
    ]
    odd = [label for label in waves if not isinstance(label, str)]
    if odd:
        faults.append(f"the labels of waves must be text; got {some(odd)}. Put them in quotes.")
    if len(waves) < 2:
        faults.append(f"`waves` holds {len(waves)} waves; it takes at least two.")
    if not isinstance(name, str):
        faults.append(f"name must be the name of a column; got {name!r}.")
    if not faults:
        libraries = {
            label: design.frame.implementation.value.lower() for label, design in waves.items()
        }
        if len(set(libraries.values())) > 1:
            listed = ", ".join(f"{label!r} of {library}" for label, library in libraries.items())
            faults.append(f"the frames are of different libraries: {listed}. Convert to one.")
    all_faults(DesignError, "The waves have", faults)


def kind_faults(designs: list[SampleDesign], labels: list[str], shared: bool) -> list[str]:
    """Check that the designs name the same kinds of columns."""
    faults = []
    for role in ROLES:
        counts = [len(design.declared[role]) for design in designs]
        if len(set(counts)) > 1:
            listed = _by_wave(labels, counts)
            faults.append(f"the waves name different numbers of `{role}` columns: {listed}.")
    weighted = [design.declared["weight"] is not None for design in designs]
    if len(set(weighted)) > 1:
        without = [label for label, has in zip(labels, weighted, strict=True) if not has]
        faults.append(
            f"waves {some(without)} have no weight, the others have. If every record there counts "
            "once, give it a column of ones."
        )
    linearized = all(design.replicates is None for design in designs)
    if shared and linearized and not any(design.declared["clusters"] for design in designs):
        faults.append(
            "shared_clusters=True, but the waves have no clusters: there is nothing to share. If "
            "the same people were asked, name the column that identifies them as `clusters`."
        )
    return faults


def _by_wave(labels: Sequence[str], values: Sequence[object]) -> str:
    return ", ".join(f"{value} in {label!r}" for label, value in zip(labels, values, strict=True))


def lone_policy(
    designs: list[SampleDesign], labels: list[str], name: str, shared: bool, faults: list[str]
) -> Any:
    """What the waves did about single-cluster strata, said in the strata of the stack."""
    if any(design.replicates is not None for design in designs):
        return "error"
    asked = [design.declared["single_cluster_strata"] for design in designs]
    if not shared and all(isinstance(one, Mapping) or one == "collapse" for one in asked):
        # Pairs are formed within waves: a stratum joined across waves would tie them together.
        crossed = name not in designs[0].declared["strata"]
        partners = {}
        for label, design in zip(labels, designs, strict=True):
            before = f"{label} / " if crossed else ""
            for group in design.joined_strata:
                for one, other in pairwise(group):
                    partners[before + one] = before + other
        return partners or "collapse"
    if any(one != asked[0] for one in asked):
        faults.append(
            "the waves were built with different single_cluster_strata "
            f"({_by_wave(labels, [_policy_name(one) for one in asked])}), and the stack has one "
            "policy for all its strata. Build the waves with the same one"
            + (": a mapping must be the same in all, since they share strata." if shared else ".")
        )
    return asked[0]


def _policy_name(policy: object) -> str:
    return "a mapping" if isinstance(policy, Mapping) else repr(policy)
