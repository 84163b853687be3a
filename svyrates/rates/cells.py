"""Groups crossed with the categories that are adjusted for: one grid of totals."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from svyrates.design import SampleDesign
from svyrates.errors import QuestionError, some
from svyrates.rates.crude import CrudeRates
from svyrates.rates.estimate import check_options, check_rule, usual_rule
from svyrates.rates.question import Outcome
from svyrates.rates.table import Coverage
from svyrates.rates.tallied import check_design, tally_question

__all__ = ["CellGrid", "cell_name", "read_cells"]

FloatArray = NDArray[np.float64]
Labels = tuple[object, ...]


@dataclass(frozen=True, slots=True)
class CellGrid:
    """Totals of every group in every category.

    Attributes
    ----------
    outcome : what was asked
    by, factors : columns of the groups and of the categories
    groups, categories : their labels
    source : rates of the cells, groups slowest
    n : (groups, categories) members
    coverage : which records are in it
    rule : how degrees of freedom are counted
    """

    outcome: Outcome
    by: tuple[str, ...]
    factors: tuple[str, ...]
    groups: tuple[Labels, ...]
    categories: tuple[Labels, ...]
    source: CrudeRates
    n: FloatArray
    coverage: Coverage
    rule: str | float

    def unions(self) -> Any:
        """Sides that are whole groups, shape (groups, cells)."""
        return np.kron(np.eye(len(self.groups)), np.ones(len(self.categories)))

    def refuse_empty(self, empty: NDArray[np.bool_], groups: Sequence[int]) -> None:
        """Raise an error that names the cells without sample; `empty` is (groups, categories)."""
        cells = [
            f"{cell_name(self.groups[groups[i]])} in {cell_name(self.categories[j])}"
            for i, j in np.argwhere(empty)
        ]
        if cells:
            raise QuestionError(
                f"{len(cells)} cells of {' × '.join((*self.by, *self.factors))} have no sample "
                f"({some(cells, 5)}), so their rates are unknown. Join categories with "
                f"merge={{{self.factors[0]!r}: {{level: the level it joins}}}}, or adjust for less."
            )


def cell_name(labels: Labels) -> str:
    """Labels of a group or category in one text."""
    return " / ".join(map(str, labels)) or "all"


def read_cells(
    design: SampleDesign,
    outcome: Any,
    success: Any,
    by: str | Sequence[str] | None,
    factors: Sequence[str],
    where: Any,
    merge: Mapping[str, Mapping[object, object]] | None,
    level: float,
    df: str | float | None,
    interval: str = "korn-graubard",
) -> CellGrid:
    """Read and tally one outcome by group and category."""
    check_design(design)
    faults: list[str] = []
    check_options(interval, level, df, faults)
    check_rule(design, df, faults)
    columns = [] if by is None else [by] if isinstance(by, str) else list(by)
    if not factors:
        faults.append("adjust_for names no column.")
    shared = [name for name in factors if name in columns]
    if shared:
        faults.append(f"{some(shared)} is in both `by` and `adjust_for`.")
    if not isinstance(outcome, str | Mapping) or (
        isinstance(outcome, Mapping) and len(outcome) != 1
    ):
        faults.append("give one outcome: a column, or a dict with one entry.")
    tallied = tally_question(
        design, outcome, success, [*columns, *factors], where, faults, merge=merge
    )
    labels = tallied.grouping.labels
    split = len(columns)
    groups = tuple(dict.fromkeys(label[:split] for label in labels))
    categories = tuple(dict.fromkeys(label[split:] for label in labels))
    source = tallied.blocks[0].source
    n = np.split(source.units.totals, 4)[0].reshape(len(groups), len(categories))
    return CellGrid(
        outcome=tallied.outcomes[0],
        by=tuple(columns),
        factors=tuple(factors),
        groups=groups,
        categories=categories,
        source=source,
        n=n,
        coverage=tallied.coverage,
        rule=usual_rule(design, df),
    )
