"""A question put to a design: its columns read, its records tallied."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from svyrates.design import SampleDesign
from svyrates.errors import QuestionError, all_faults
from svyrates.rates.crude import CrudeRates
from svyrates.rates.question import (
    Grouping,
    Outcome,
    read_grouping,
    read_outcomes,
    read_where,
)
from svyrates.rates.table import Coverage
from svyrates.tally import tally_records, tally_replicates
from svyrates.totals import CellTotals, ReplicateTotals, UnitTotals
from svyrates.words import progress_bar

__all__ = ["Tallied", "TalliedBlock", "check_design", "tally_question"]

# Where reading a column copies it, so many are held at a time.
_FEW_COLUMNS = 6
# Some 200 million weights are summed in a second.
_WORTH_PROGRESS = 300_000_000


@dataclass(frozen=True, slots=True)
class TalliedBlock:
    """Outcomes tallied together: their positions, and their rates."""

    outcomes: tuple[int, ...]
    source: CrudeRates


@dataclass(frozen=True, slots=True)
class Tallied:
    """What was asked, who is spoken of, and the tallies."""

    outcomes: list[Outcome]
    grouping: Grouping
    coverage: Coverage
    blocks: list[TalliedBlock]


def check_design(design: object) -> None:
    """Refuse what is no design."""
    if not isinstance(design, SampleDesign):
        raise QuestionError(
            f"`design` must be a SampleDesign; got {type(design).__name__}. Build one with "
            "SampleDesign(data, weight=..., strata=..., clusters=...)."
        )


def tally_question(
    design: SampleDesign,
    outcome: Any,
    success: Any,
    by: Any,
    where: Any,
    faults: list[str],
    *,
    joint: bool = False,
    merge: Mapping[str, Mapping[object, object]] | None = None,
) -> Tallied:
    """Read the question's columns, raise all faults found so far, and tally the records.

    Parameters
    ----------
    outcome, success, by, where, joint : as in `estimate_rates`
    faults : those that the caller has found
    merge : column -> {level: the level it joins}, for the columns of `by`
    """
    outcomes = read_outcomes(design.frame, outcome, success, faults)
    inside, n_where_unknown = read_where(design.frame, where, faults)
    grouping = read_grouping(design.frame, by, faults, merge)
    all_faults(QuestionError, "The question has", faults)
    pattern, coverage = _in_scope(design, grouping, inside, n_where_unknown)
    together = [tuple(range(len(outcomes)))] if joint else [(i,) for i in range(len(outcomes))]
    blocks = []
    for positions in together:
        levels = [outcomes[position].level for position in positions]
        totals = _totals(design, grouping, pattern, levels)
        blocks.append(TalliedBlock(positions, CrudeRates.of(totals, design.df)))
    return Tallied(outcomes, grouping, coverage, blocks)


def _totals(
    design: SampleDesign,
    grouping: Grouping,
    pattern: NDArray[np.int32],
    levels: list[NDArray[np.int8]],
) -> CellTotals:
    """Tally the records by sampling unit, or by replicate."""
    membership = grouping.membership
    n_patterns = membership.shape[0]
    if design.replicates is None:
        tree = design.tree
        tally = tally_records(tree.leaf, tree.n_leaves, design.weights, pattern, n_patterns, levels)
        return UnitTotals(tally, membership, design.n_records, tree)
    replicates = design.replicates
    cells = design.n_records * replicates.count
    with progress_bar("Replicates", cells, worth=cells > _WORTH_PROGRESS) as progress:
        sums = tally_replicates(
            design.replicate_column,
            replicates.names,
            design.weights,
            pattern,
            n_patterns,
            levels,
            factors=replicates.factors,
            scale=replicates.scale,
            together=replicates.count if design.reads_in_place else _FEW_COLUMNS,
            progress=progress,
        )
    return ReplicateTotals(sums.tally, membership, design.n_records, sums, replicates)


def _in_scope(
    design: SampleDesign,
    grouping: Grouping,
    inside: NDArray[np.bool_] | None,
    n_where_unknown: int,
) -> tuple[NDArray[np.int32], Coverage]:
    pattern = grouping.pattern
    n_zero = int(design.n_records - np.count_nonzero(design.weights))
    unknown = pattern < 0
    if inside is None:
        n_unknown, n_outside = int(np.count_nonzero(unknown)), 0
    else:
        n_unknown = int(np.count_nonzero(unknown & inside))
        n_outside = int(np.count_nonzero(~inside))
        pattern = np.where(inside, pattern, np.int32(-1))
    return pattern, Coverage(design.n_records, n_zero, n_outside, n_where_unknown, n_unknown)
