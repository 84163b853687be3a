"""`combine_waves`: several samples over time as one design, with the covariance they share."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from svyrates.design.columns import ColumnFault, Frame, code_column
from svyrates.design.sample_design import SampleDesign
from svyrates.design.stacking import apart, missing_somewhere, stack
from svyrates.design.wave_checks import ROLES, check_waves, kind_faults, lone_policy
from svyrates.design.wave_replicates import (
    needs_finished,
    replicate_faults,
    shared_columns,
    shared_set,
    side_by_side_columns,
    side_by_side_set,
)
from svyrates.errors import DesignError, DesignWarning, all_faults, some, warn

__all__ = ["combine_waves"]


def combine_waves(
    waves: Mapping[str, SampleDesign],
    *,
    shared_clusters: bool = False,
    name: str = "wave",
    average_weights: bool = False,
) -> SampleDesign:
    """Stack the samples of several waves into one design, to compare or average over time.

    Parameters
    ----------
    waves : mapping of str to SampleDesign
        The waves by label, in the order in which tables shall show them. Their frames are of one
        library; columns that not all of them have are left out, with a warning. Design columns may
        differ in name between waves: those of the first wave are kept.
    shared_clusters : bool
        Whether the same stratum and cluster codes (or the same number of a replicate) mean the same
        units in every wave. Otherwise the waves are independent samples.
    name : str
        The new column with the label of the wave: an ordered category, or text where the library
        has none.
    average_weights : bool
        Whether to divide the weights by the number of waves, so that they sum to the average
        population. The rates of each wave do not change.

    Returns
    -------
    SampleDesign
        Of the stacked frame. No wave is changed.

    Raises
    ------
    DesignError
        Lists every reason for which the waves do not fit together.

    Warns
    -----
    DesignWarning
        When columns are left out, or no cluster is in two waves although they share clusters.

    Notes
    -----
    *Independent* are waves whose first-stage units were drawn anew and separately: every stratum is
    crossed with the wave, and `V(p_2 - p_1) = V(p_1) + V(p_2)`. Waves *share clusters* when they
    interview in the same first-stage units, also with other households, and all the more when they
    interview the same people, as panels and rotating samples do. Neighbours are alike in both
    waves, so `V(p_2 - p_1) = V(p_1) + V(p_2) - 2 Cov(p_1, p_2)`, as a rule with a positive
    covariance (Kish 1965, chapter 12; Wolter 2007, chapter 6; from memory). What is shared is what
    the codes say at every stage that counts: where the waves share blocks, but dwellings are
    numbered anew, name the blocks alone. The variance treats the units of all waves in a stratum as
    one sample of units, so a unit outside a wave counts there with a total of zero.

    Replicate weights of waves that share clusters were made from the same units under the same
    number, and are put under one another; the degrees of freedom are the least of the waves'.
    Those of independent waves are set side by side, `V = Σ_waves Σ_r c_r (θ_r - θ)²`: in the
    replicates of one wave, the others keep their full weight. The degrees of freedom add up.

    Examples
    --------
    >>> import svyrates as sr
    >>> waves = {
    ...     wave: sr.SampleDesign(
    ...         sr.demo_survey(wave), weight="wt", strata="district", clusters="block"
    ...     )
    ...     for wave in ("2021", "2024")
    ... }
    >>> design = sr.combine_waves(waves, shared_clusters=True)
    >>> rates = sr.estimate_rates(design, "damp", by="wave")
    >>> rates.groups
    (('2021',), ('2024',))
    >>> bool(rates.covariance.iloc[0, 1] > 0)
    True

    The survey went back to its blocks, so the two rates are correlated, and their difference is
    known better than the rates themselves would suggest.
    """
    check_waves(waves, name)
    labels, designs = list(waves), list(waves.values())
    faults = kind_faults(designs, labels, shared_clusters)
    faults += replicate_faults(designs, labels, shared=shared_clusters)
    single = lone_policy(designs, labels, name, shared_clusters, faults)
    frames = [
        _prepared(design, label, designs[0], name, shared_clusters, faults)
        for label, design in zip(labels, designs, strict=True)
    ]
    plan = _Plan.of(designs, name, shared_clusters, average_weights)
    left_out = missing_somewhere(frames)
    names = [column for column in frames[0].columns if column not in {*left_out, *plan.replaced}]
    unlike = {column: kinds for column in names if (kinds := apart(frames, column))}
    faults += [
        f"column {column!r} holds {' and '.join(dict.fromkeys(kinds))} values in different waves. "
        "Convert it to one type in all of them."
        for column, kinds in unlike.items()
        if column in plan.needed
    ]
    all_faults(DesignError, "The waves have", faults)
    _tell_left_out([column for column in left_out if column not in plan.replaced], list(unlike))
    names = [column for column in names if column not in unlike]
    added, replicates = plan.computed({*names, name})
    weight = plan.weight_name({*names, name, *added})
    if plan.finish_weights and weight is not None:
        added = {weight: np.concatenate([d.weights / plan.over for d in designs]), **added}
    combined = SampleDesign(
        stack(frames, names, name, labels, added),
        weight=weight,
        weight_decimals=0 if plan.finish_weights else plan.first["weight_decimals"],
        strata=plan.strata,
        clusters=plan.first["clusters"] or None,
        population=plan.first["population"] or None,
        single_cluster_strata=single,
        replicates=replicates,
    )
    if shared_clusters:
        _question_sharing(combined, [design.n_records for design in designs])
    return combined


@dataclass(frozen=True)
class _Plan:
    """What the stack will hold beside the columns that are kept as they are."""

    designs: list[SampleDesign]
    name: str
    shared: bool
    average: bool
    first: dict[str, Any]
    finish_weights: bool
    finish_replicates: bool

    @classmethod
    def of(cls, designs: list[SampleDesign], name: str, shared: bool, average: bool) -> _Plan:
        decimals = {design.declared["weight_decimals"] for design in designs}
        return cls(
            designs,
            name,
            shared,
            average,
            designs[0].declared,
            average or len(decimals) > 1,
            needs_finished(designs, shared=shared, average=average),
        )

    @property
    def over(self) -> int:
        """What the weights are divided by."""
        return len(self.designs) if self.average else 1

    @property
    def replicate_names(self) -> tuple[str, ...]:
        """Names of the first wave's replicates."""
        found = self.designs[0].replicates
        return () if found is None else found.names

    @property
    def replaced(self) -> set[str]:
        """Columns of the waves that are computed anew."""
        found = {self.first["weight"]} if self.finish_weights and self.first["weight"] else set()
        return found | {*(self.replicate_names if self.finish_replicates else ())}

    @property
    def needed(self) -> set[str]:
        """Columns that are kept and must be of one type."""
        found = {column for role in ROLES for column in self.first[role]}
        found |= {*self.replicate_names, self.first["weight"]}
        return found - self.replaced

    @property
    def strata(self) -> list[str] | None:
        """Stratum columns of the stack."""
        strata = list(self.first["strata"])
        without_units = self.replicate_names and not strata and not self.first["clusters"]
        if not self.shared and not without_units and self.name not in strata:
            strata = [self.name, *strata]
        return strata or None

    def weight_name(self, taken: set[str]) -> str | None:
        """Column of weights; averages of waves without weights get a new one."""
        declared: str | None = self.first["weight"]
        return _free("weight", taken) if declared is None and self.average else declared

    def computed(self, taken: set[str]) -> tuple[dict[str, Any], Any]:
        """Columns of replicates to add, and the set they make with those that are kept."""
        if self.designs[0].replicates is None:
            return {}, None
        taken = {*taken, self.first["weight"]}
        if not self.shared:
            columns = side_by_side_columns(self.designs, taken, self.over)
            return columns, side_by_side_set(self.designs, tuple(columns))
        columns = shared_columns(self.designs, self.over) if self.finish_replicates else {}
        return columns, shared_set(self.designs, finished=self.finish_replicates)


def _free(name: str, taken: set[str]) -> str:
    while name in taken:
        name += "_"
    return name


def _roles(design: SampleDesign, shared: bool) -> list[str]:
    """Design columns in a fixed order, so that those of two waves can be paired."""
    declared = design.declared
    found = [declared["weight"]] if declared["weight"] is not None else []
    found += [column for role in ROLES for column in declared[role]]
    if shared and design.replicates is not None:
        found += design.replicates.names
    return found


def _prepared(
    design: SampleDesign,
    label: str,
    first: SampleDesign,
    name: str,
    shared: bool,
    faults: list[str],
) -> Frame:
    """One wave's frame under the first wave's names, without what the stack makes anew."""
    frame = design.frame
    theirs, ours = _roles(design, shared), _roles(first, shared)
    if design.replicates is not None and not shared:
        frame = frame.drop([column for column in design.replicates.names if column not in theirs])
    if len(theirs) == len(ours):
        frame = _renamed(frame, label, theirs, ours, faults)
    if name not in frame.columns:
        return frame
    declared = first.declared
    if name in {declared["weight"], *declared["clusters"], *declared["population"]}:
        if design is first:
            faults.append(f"{name!r} is a column of the design: choose another name=.")
        return frame
    try:
        coded = code_column(frame, name, "name")
        found = {str(coded.levels[code]) if code >= 0 else None for code in np.unique(coded.codes)}
    except ColumnFault:
        found = {None}
    if found != {label}:
        faults.append(
            f"wave {label!r} has a column {name!r} already, which says something else than "
            f"{label!r}: choose another name=, or another label."
        )
    return frame.drop(name)


def _renamed(
    frame: Frame, label: str, theirs: list[str], ours: list[str], faults: list[str]
) -> Frame:
    new_name = dict(zip(theirs, ours, strict=True))
    pairs = set(zip(theirs, ours, strict=True))
    if len(pairs) > len(new_name) or len(pairs) > len(set(ours)):
        faults.append(
            f"wave {label!r} uses one column in two roles of the design where the first wave uses "
            "two, or the reverse. Give each role a column of its own."
        )
        return frame
    changed = {old: new for old, new in new_name.items() if old != new}
    clash = [new for new in changed.values() if new in frame.columns and new not in changed]
    if clash:
        faults.append(
            f"wave {label!r} has columns {some(clash)}, but these are names of the first wave's "
            "design columns, and other columns take these roles here. Rename or drop them."
        )
        return frame
    return frame.rename(changed) if changed else frame


def _tell_left_out(missing: list[str], unlike: list[str]) -> None:
    parts = []
    if missing:
        parts.append(
            f"{len(missing)} columns are not in every wave and are left out of the stack: "
            f"{some(missing)}."
        )
    if unlike:
        parts.append(
            f"{len(unlike)} columns are of different types in the waves and are left out of the "
            f"stack: {some(unlike)}. Convert them first if they are wanted."
        )
    if parts:
        warn(" ".join(parts), DesignWarning)


def _question_sharing(combined: SampleDesign, sizes: list[int]) -> None:
    """Warn where no sampling unit is in two waves: the codes may not mean what was said."""
    tree = combined.tree
    if not tree.parent or combined.replicates is not None:
        return
    unit = tree.ancestor(1)[tree.leaf]
    n_waves = np.zeros(tree.parent[0].size, dtype=np.intp)
    for rows in np.split(unit, np.cumsum(sizes)[:-1]):
        n_waves[np.unique(rows[rows >= 0])] += 1
    if n_waves.size and n_waves.max() < 2:
        warn(
            f"shared_clusters=True, but none of the {n_waves.size} clusters is in two waves. Are "
            "the codes of strata and clusters written alike in all waves?",
            DesignWarning,
        )
