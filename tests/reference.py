"""A slow, plain reference: loops over records and units, written differently on purpose.

It shares no code and no idea with the package: no tally, no sparse matrices, no Jacobians. Every
record gets its linearized value by hand, and a recursion walks down the stages.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np


@dataclass
class Record:
    """One respondent: weight, outcomes (None is missing), groups (None is unknown) and units."""

    weight: float
    outcomes: tuple[int | None, ...]
    groups: tuple[bool, ...] | None
    units: tuple[object, ...]
    population: tuple[float, ...] = ()
    inside: bool = True


@dataclass
class Survey:
    """Records with their stages: `units` starts with the stratum."""

    records: list[Record]
    n_cluster_stages: int
    records_last: bool
    n_populations: int = 0
    lone: str = "error"
    joined: dict[object, object] = field(default_factory=dict)


def members(survey: Survey, outcome: int, group: int) -> list[int]:
    """Records of positive weight inside the subpopulation with known outcome in the group."""
    return [
        i
        for i, record in enumerate(survey.records)
        if record.weight > 0
        and record.inside
        and record.outcomes[outcome] is not None
        and record.groups is not None
        and record.groups[group]
    ]


def rate(survey: Survey, outcome: int, group: int, *, weighted: bool = True) -> float:
    """Weighted or plain rate of a group."""
    above = below = 0.0
    for i in members(survey, outcome, group):
        weight = survey.records[i].weight if weighted else 1.0
        above += weight * survey.records[i].outcomes[outcome]
        below += weight
    return above / below if below else float("nan")


def scores(survey: Survey, outcome: int, group: int, *, weighted: bool = True) -> list[float]:
    """Linearized value of the rate for every record, zero outside the domain."""
    p = rate(survey, outcome, group, weighted=weighted)
    inside = members(survey, outcome, group)
    size = sum(survey.records[i].weight if weighted else 1.0 for i in inside)
    values = [0.0] * len(survey.records)
    for i in inside:
        weight = survey.records[i].weight if weighted else 1.0
        values[i] = weight * (survey.records[i].outcomes[outcome] - p) / size
    return values


def covariance(survey: Survey, columns: Sequence[Sequence[float]]) -> np.ndarray:
    """Design-based covariance of the totals of several columns of record values."""
    z = np.array(columns, dtype=float).T
    strata: dict[object, list[int]] = {}
    for i, record in enumerate(survey.records):
        stratum = survey.joined.get(record.units[0], record.units[0])
        strata.setdefault(stratum, []).append(i)
    total = np.zeros((z.shape[1], z.shape[1]))
    n_units = sum(len(_split(survey, rows, 1)) for rows in strata.values())
    overall = z.sum(axis=0) / n_units
    for rows in strata.values():
        total += _inside(survey, z, rows, 1, overall)
    return total


def _split(survey: Survey, rows: list[int], depth: int) -> list[list[int]]:
    """Units of one stage inside a list of records."""
    if depth > survey.n_cluster_stages:
        return [[i] for i in rows]
    # A unit is known by the whole chain of codes above it, the original stratum included.
    units: dict[tuple[object, ...], list[int]] = {}
    for i in rows:
        units.setdefault(survey.records[i].units[: depth + 1], []).append(i)
    return list(units.values())


def _inside(
    survey: Survey, z: np.ndarray, rows: list[int], depth: int, overall: np.ndarray
) -> np.ndarray:
    """Variance from drawing the units of stage `depth` within `rows`, and from all below."""
    nothing = np.zeros((z.shape[1], z.shape[1]))
    last = survey.n_cluster_stages + (1 if survey.records_last else 0)
    if depth > last:
        return nothing
    units = _split(survey, rows, depth)
    m = len(units)
    fraction = 0.0
    if depth <= survey.n_populations:
        if depth == 1 and survey.joined:
            sizes = {survey.records[i].units[0]: survey.records[i].population[0] for i in rows}
            fraction = m / sum(sizes.values())
        else:
            fraction = m / survey.records[rows[0]].population[depth - 1]
    totals = [sum(z[i] for i in unit) for unit in units]
    between = nothing.copy()
    if m == 1 and depth == 1 and survey.lone == "grand-mean" and fraction < 1:
        away = totals[0] - overall
        between = (1.0 - fraction) * np.outer(away, away)
    elif m > 1:
        mean = sum(totals) / m
        for total in totals:
            between += np.outer(total - mean, total - mean)
        between *= (1.0 - fraction) * m / (m - 1)
    if depth <= survey.n_populations:
        for unit in units:
            between = between + fraction * _inside(survey, z, unit, depth + 1, overall)
    return between


def domain_df(survey: Survey, outcome: int, group: int) -> int:
    """First-stage units with a member minus strata with a member."""
    inside = set(members(survey, outcome, group))
    strata: dict[object, list[int]] = {}
    for i, record in enumerate(survey.records):
        stratum = survey.joined.get(record.units[0], record.units[0])
        strata.setdefault(stratum, []).append(i)
    units = n_strata = 0
    for rows in strata.values():
        held = [unit for unit in _split(survey, rows, 1) if inside & set(unit)]
        units += len(held)
        n_strata += bool(held)
    return units - n_strata
