"""Random surveys for property tests: small, ugly, and known both as records and as a frame."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from hypothesis import strategies as st

from tests.reference import Record, Survey

__all__ = ["frame_of", "surveys"]


@st.composite
def surveys(
    draw: st.DrawFn,
    *,
    n_outcomes: int = 1,
    overlapping: bool = False,
    kinds: tuple[str, ...] = ("clusters", "records", "two-stage", "records-last", "no-strata"),
) -> Survey:
    """A survey with zero weights, missing answers and unknown groups, of one kind of design."""
    kind = draw(st.sampled_from(kinds))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    n_groups = draw(st.integers(1, 3))
    n_strata = 1 if kind == "no-strata" else draw(st.integers(1, 3))
    finite = draw(st.booleans())
    equal_weights = draw(st.booleans())
    records: list[Record] = []
    for stratum in range(n_strata):
        if kind == "records":
            size = draw(st.integers(2, 12))
            room = (float(size + rng.integers(0, 30)),) if finite else ()
            units: list[tuple[Any, ...]] = [(stratum,)] * size
            populations = [room] * size
        else:
            units, populations = _clustered(rng, stratum, kind, finite, draw)
        for chain, population in zip(units, populations, strict=True):
            records.append(
                _record(rng, chain, population, n_outcomes, n_groups, overlapping, equal_weights)
            )
    n_stages = {"records": 0, "two-stage": 2}.get(kind, 1)
    n_populations = len(records[0].population)
    return Survey(
        records,
        n_cluster_stages=n_stages if n_populations or n_stages < 2 else 1,
        records_last=kind == "records" or n_populations > n_stages,
        n_populations=n_populations,
    )


def _clustered(
    rng: np.random.Generator, stratum: int, kind: str, finite: bool, draw: st.DrawFn
) -> tuple[list[tuple[Any, ...]], list[tuple[float, ...]]]:
    n_clusters = draw(st.integers(2, 4))
    finite = finite or kind == "records-last"
    in_stratum = float(n_clusters + rng.integers(0, 10))
    units: list[tuple[Any, ...]] = []
    populations: list[tuple[float, ...]] = []
    for cluster in range(n_clusters):
        size = int(rng.integers(1, 7))
        dwellings = rng.integers(0, 3, size)
        n_dwellings = len(set(dwellings.tolist()))
        in_cluster = float(n_dwellings + rng.integers(0, 5))
        for dwelling in dwellings.tolist():
            units.append(
                (stratum, cluster, dwelling) if kind == "two-stage" else (stratum, cluster)
            )
            if kind == "records-last":
                populations.append((in_stratum, float(size + 3)))
            elif not finite:
                populations.append(())
            else:
                populations.append(
                    (in_stratum, in_cluster) if kind == "two-stage" else (in_stratum,)
                )
    return units, populations


def _record(
    rng: np.random.Generator,
    chain: tuple[Any, ...],
    population: tuple[float, ...],
    n_outcomes: int,
    n_groups: int,
    overlapping: bool,
    equal_weights: bool,
) -> Record:
    weight = 0.0 if rng.random() < 0.08 else 2.0 if equal_weights else float(rng.uniform(0.1, 9.0))
    outcomes = tuple(
        None if rng.random() < 0.1 else int(rng.random() < 0.4) for _ in range(n_outcomes)
    )
    groups: tuple[bool, ...] | None
    if rng.random() < 0.07:
        groups = None
    elif overlapping:
        groups = tuple(bool(rng.random() < 0.5) for _ in range(n_groups))
    else:
        chosen = int(rng.integers(0, n_groups))
        groups = tuple(group == chosen for group in range(n_groups))
    return Record(weight, outcomes, groups, chain, population, bool(rng.random() < 0.9))


def frame_of(survey: Survey) -> tuple[pd.DataFrame, dict[str, Any]]:
    """The survey as a frame, and the arguments of SampleDesign for it."""
    records = survey.records
    columns: dict[str, Any] = {"w": [record.weight for record in records]}
    depth = len(records[0].units) - 1
    columns["stratum"] = [record.units[0] for record in records]
    for stage in range(depth):
        columns[f"unit{stage + 1}"] = [record.units[stage + 1] for record in records]
    n_populations = len(records[0].population)
    for stage in range(n_populations):
        columns[f"population{stage + 1}"] = [record.population[stage] for record in records]
    for outcome in range(len(records[0].outcomes)):
        columns[f"y{outcome}"] = pd.array(
            [record.outcomes[outcome] for record in records], dtype="Int64"
        )
    known = [record.groups for record in records if record.groups is not None]
    n_groups = len(known[0]) if known else 1
    for group in range(n_groups):
        columns[f"in{group}"] = pd.array(
            [None if record.groups is None else record.groups[group] for record in records],
            dtype="boolean",
        )
    columns["group"] = pd.array(
        [None if r.groups is None or not any(r.groups) else r.groups.index(True) for r in records],
        dtype="Int64",
    )
    columns["inside"] = [record.inside for record in records]
    arguments = {
        "weight": "w",
        "strata": "stratum",
        "clusters": [f"unit{stage + 1}" for stage in range(depth)] or None,
        "population": [f"population{stage + 1}" for stage in range(n_populations)] or None,
    }
    return pd.DataFrame(columns), arguments
