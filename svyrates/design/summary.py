"""What a design found in its columns, as a small table a statistician can check at a glance."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from svyrates.design.hierarchy import Hierarchy
from svyrates.design.lone import LonePolicy
from svyrates.design.replicates import ReplicateSet
from svyrates.words import Column, Table, Tabular, count, fixed, plural, significant

__all__ = ["DesignSummary"]


@dataclass(frozen=True, repr=False)
class DesignSummary(Tabular):
    """What a design found in its columns; prints as a small table.

    Attributes
    ----------
    facts : pairs of a label and its value, in reading order
    remarks : what deserves a look

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> dict(design.summary().facts)["degrees of freedom"]
    '88'

    112 blocks less 24 districts leave 88 degrees of freedom.
    """

    facts: tuple[tuple[str, str], ...]
    remarks: tuple[str, ...]

    @classmethod
    def of(
        cls,
        columns: Mapping[str, Any],
        weights: NDArray[np.float64],
        tree: Hierarchy,
        lone: LonePolicy | None,
        repeated: bool,
        replicates: ReplicateSet | None,
    ) -> DesignSummary:
        """Collect the facts of a checked design."""
        total = float(weights.sum())
        positive = int(np.count_nonzero(weights))
        zero = weights.size - positive
        per_stratum = tree.n_children[0]
        units = int(per_stratum.sum())
        spread = f"{per_stratum.min()} / {int(np.median(per_stratum))} / {per_stratum.max()}"
        relative = abs(total / positive - 1.0) <= 0.01
        facts = [
            ("records", count(weights.size) + (f" ({count(zero)} of weight zero)" if zero else "")),
            ("weight", _weight(columns)),
            ("sum of weights", count(total) + (" (relative weights)" if relative else "")),
            ("unequal-weighting factor (Kish)", fixed(_kish(weights, positive), 2)),
        ]
        if replicates is None or columns["strata"] or columns["clusters"]:
            facts += [
                ("strata", _strata(columns["strata"], tree.n_strata)),
                ("first-stage units", f"{count(units)} ({_unit_name(columns, tree)})"),
                ("units per stratum: least / median / most", spread),
            ]
        if replicates is None:
            facts += [
                ("stages in the variance", _stages(tree)),
                ("degrees of freedom", count(units - tree.n_strata)),
            ]
        else:
            facts += _replicated(replicates)
        remarks = []
        if repeated and replicates is None:
            remarks.append("Unit codes repeat across strata; they are read within strata.")
        if lone is not None:
            listed = plural(len(lone.strata), "stratum", "strata")
            remarks.append(f"{listed} with a single sampling unit: {lone.done}.")
        deeper = [tree.n_children[level] for level in range(1, len(tree.n_children))]
        alone = sum(int(np.count_nonzero(children == 1)) for children in deeper)
        if alone and replicates is None:
            remarks.append(
                f"{plural(alone, 'unit')} of a later stage drawn alone: no variance is counted "
                "inside them."
            )
        if relative:
            remarks.append("The weights sum to the sample size, so population sizes are unknown.")
        return cls(tuple(facts), tuple(remarks))

    def table(self, *, percent: bool = False, every_column: bool = False) -> Table:  # noqa: ARG002
        """The facts as a two-column table."""
        names = Column("item", "", [name for name, _ in self.facts], key=True)
        values = Column("value", "", [value for _, value in self.facts])
        return Table("Sample design", (names, values), self.remarks)


def _replicated(replicates: ReplicateSet) -> list[tuple[str, str]]:
    """Scheme, coefficients and centring, always shown: a wrong one is the commonest mistake."""
    c = replicates.coefficients
    shown = significant(c[0], 6)
    if np.ptp(c) > 0:
        shown = f"{significant(c.min(), 6)} to {significant(c.max(), 6)}"
    centre = "the replicate mean" if replicates.centre_on_mean else "the full-sample estimate"
    facts = [
        (
            "replicates",
            f"{count(replicates.count)} ({replicates.names[0]} … {replicates.names[-1]})",
        ),
        ("scheme", replicates.scheme),
        ("variance", f"Σ c (replicate − centre)², c = {shown}"),
        ("centre", centre),
        ("degrees of freedom", significant(replicates.df, 6)),
    ]
    if replicates.n_negative:
        facts.append(("negative replicate weights", f"{count(replicates.n_negative)}, kept"))
    return facts


def _kish(weights: NDArray[np.float64], positive: int) -> float:
    total = float(weights.sum())
    return positive * float(np.dot(weights, weights)) / total**2


def _weight(columns: Mapping[str, Any]) -> str:
    if columns["weight"] is None:
        return "none: every record has weight 1"
    decimals = columns["weight_decimals"]
    return f"{columns['weight']}, {decimals} implied decimals" if decimals else columns["weight"]


def _strata(names: tuple[str, ...], n_strata: int) -> str:
    return f"{count(n_strata)} ({' × '.join(names)})" if names else "none: one stratum"


def _unit_name(columns: Mapping[str, Any], tree: Hierarchy) -> str:
    return str(columns["clusters"][0]) if tree.parent and columns["clusters"] else "the records"


def _stages(tree: Hierarchy) -> str:
    depth = len(tree.n_children) - (0 if bool(tree.n_children[-1].any()) else 1)
    corrected = [bool(np.any(fraction > 0)) for fraction in tree.fraction[:depth]]
    words = [
        "with finite population correction" if flag else "with replacement" for flag in corrected
    ]
    return "; ".join(f"{stage}: {word}" for stage, word in enumerate(words, start=1))
