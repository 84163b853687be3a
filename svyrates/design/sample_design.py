"""`SampleDesign`: the survey's weights, strata and stages, declared once and checked once."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from svyrates.design.columns import (
    Codes,
    ColumnFault,
    Frame,
    code_column,
    fault_or,
    numbers,
    open_frame,
)
from svyrates.design.hierarchy import (
    Hierarchy,
    Stages,
    build_hierarchy,
    compress,
    effective_stages,
)
from svyrates.design.lone import LonePolicy, centre_on_all, collapse, lone_strata, refuse
from svyrates.design.summary import DesignSummary
from svyrates.errors import DesignError, all_faults, some

__all__ = ["SampleDesign"]

FloatArray = NDArray[np.float64]
SingleClusterStrata = (
    Literal["error", "collapse", "grand-mean", "self-representing"] | Mapping[Any, Any]
)
_POLICIES = ("error", "collapse", "grand-mean", "self-representing")
_RELATIVE = 0.01


class SampleDesign:
    """A survey's microdata with its weights, strata, clusters and population sizes.

    The design is checked when it is built, and every fault is reported together. The frame is
    neither copied nor changed; it is the *full* sample, and a subpopulation is named later with
    ``where=``, so that no sampling unit is lost from the variance.

    Parameters
    ----------
    data : data frame
        One row per respondent: pandas, polars, pyarrow, or another frame that narwhals reads. A
        lazy frame is collected once.
    weight : str, optional
        Column of sampling weights, non-negative and finite. Without it every record has weight 1.
    strata : str or list of str, optional
        Stratum column; several columns are crossed. Without it the sample is one stratum.
    clusters : str or list of str, optional
        Sampling-unit column, or one column per stage from the first to the last. Codes are read
        within strata (and within the unit above), so they may repeat. Without it the records
        themselves are the sampling units.
    population : str or list of str, optional
        Columns with the number of units in the population, per stage: first-stage units in the
        stratum, then second-stage units in the first-stage unit, and so on. There may be one
        column more than `clusters`: records in the last unit. A stage after the first counts only
        when every stage before it states its population.
    single_cluster_strata : {"error", "collapse", "grand-mean", "self-representing"} or mapping
        What to do about strata with a single sampling unit: refuse (the default); join them in
        sorted pairs, or as a mapping {stratum: partner} says; compare the unit with the mean over
        all units; or let the units of the next stage take its place.

    Raises
    ------
    DesignError
        Lists every fault found in the columns and options.

    Notes
    -----
    With replacement at the first stage unless `population` is given; formulas on the methods page
    (Wolter 2007, chapter 6; Särndal, Swensson & Wretman 1992, chapters 4 and 5).

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> design.n_strata
    24

    A design of 24 strata; print it to see what was found in the columns.
    """

    def __init__(
        self,
        data: Any,
        *,
        weight: str | None = None,
        strata: str | Sequence[str] | None = None,
        clusters: str | Sequence[str] | None = None,
        population: str | Sequence[str] | None = None,
        single_cluster_strata: SingleClusterStrata = "error",
    ) -> None:
        frame = open_frame(data)
        faults: list[str] = []
        self._frame = frame
        self._columns = {
            "weight": weight,
            "strata": _names(strata),
            "clusters": _names(clusters),
            "population": _names(population),
        }
        if (
            not isinstance(single_cluster_strata, Mapping)
            and single_cluster_strata not in _POLICIES
        ):
            faults.append(
                f"single_cluster_strata must be one of {some(_POLICIES)} or a mapping of stratum "
                f"to partner; got {single_cluster_strata!r}."
            )
        self._weights = _read_weights(frame, weight, faults)
        self._tree, self._strata_labels, self._lone, self._repeated = _read_tree(
            frame, self._columns, single_cluster_strata, faults
        )
        all_faults(DesignError, "The design has", faults)

    @property
    def frame(self) -> Frame:
        """The user's frame, wrapped by narwhals and otherwise untouched."""
        return self._frame

    @property
    def weights(self) -> FloatArray:
        """Sampling weight of every record, shape (records,)."""
        return self._weights

    @property
    def tree(self) -> Hierarchy:
        """The sampling units and who was drawn inside whom."""
        return self._tree

    @property
    def n_records(self) -> int:
        """Number of records."""
        return int(self._weights.size)

    @property
    def n_strata(self) -> int:
        """Number of strata in the variance."""
        return self._tree.n_strata

    @property
    def n_units(self) -> int:
        """Number of first-stage sampling units."""
        return int(self._tree.n_children[0].sum())

    @property
    def df(self) -> int:
        """Degrees of freedom of the design: first-stage units minus strata."""
        return self.n_units - self.n_strata

    @property
    def sum_of_weights(self) -> float:
        """Sum of the weights: the estimated population size."""
        return float(self._weights.sum())

    @property
    def weights_are_relative(self) -> bool:
        """Whether the weights sum to the number of records within 1%."""
        positive = int(np.count_nonzero(self._weights))
        return abs(self.sum_of_weights / positive - 1.0) <= _RELATIVE

    def summary(self) -> DesignSummary:
        """Describe what was found in the columns.

        Returns
        -------
        DesignSummary
            Prints as text, and as HTML in a notebook.
        """
        return DesignSummary.of(
            self._columns, self._weights, self._tree, self._lone, self._repeated
        )

    def __repr__(self) -> str:
        return self.summary().text()

    def _repr_html_(self) -> str:
        return self.summary().to_html()


def _names(given: str | Sequence[str] | None) -> tuple[str, ...]:
    """Column names as a tuple; what is no name is left for the reader of columns to refuse."""
    if given is None:
        return ()
    return tuple(given) if isinstance(given, Sequence) and not isinstance(given, str) else (given,)


def _read_weights(frame: Frame, name: str | None, faults: list[str]) -> FloatArray:
    if name is None:
        return np.ones(len(frame))
    values = fault_or(faults, numbers, frame, name, "weight")
    if values is None:
        return np.ones(len(frame))
    weights = np.asarray(values, dtype=np.float64)
    # One sum finds NaN and infinity, one minimum finds negatives: the usual file is clean.
    with np.errstate(over="ignore", invalid="ignore"):
        clean = bool(np.isfinite(weights.sum()) and weights.min() >= 0.0)
    if clean:
        if weights.max() == 0.0:
            faults.append(f"weight {name!r} is zero in all {weights.size} rows.")
        return weights
    for bad, what in (
        (np.isnan(weights), "missing"),
        (np.isinf(weights), "infinite"),
        (weights < 0, "negative"),
    ):
        rows = np.flatnonzero(bad)
        if rows.size:
            faults.append(
                f"weight {name!r} is {what} in {rows.size} of {weights.size} rows (first: row "
                f"{rows[0]}, value {weights[rows[0]]:g}; rows count from 0). Drop or recode these "
                "rows before building the design; a respondent outside the weighted sample has "
                "weight 0."
            )
    if not faults:
        faults.append(f"weight {name!r} sums to more than a double can hold. Rescale it.")
    return weights


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


def _read_tree(
    frame: Frame,
    columns: Mapping[str, Any],
    single: SingleClusterStrata,
    faults: list[str],
) -> tuple[Hierarchy, tuple[str, ...], LonePolicy | None, bool]:
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
        return empty, ("all",), None, False
    stratum, labels = _cross(strata, len(frame))
    codes = tuple((coded.codes, len(coded.levels)) for coded in clusters)
    usual = effective_stages(codes, tuple(population))
    tree = build_hierarchy(stratum, len(labels), usual)
    repeated = bool(codes) and tree.parent[0].size > codes[0][1]
    _check_population(tree, usual, columns["population"], labels, faults)
    lone = lone_strata(tree)
    if not lone.size or len(faults) > before:
        return tree, labels, None, repeated
    try:
        tree, policy = _settle(tree, lone, labels, single, stratum, codes, tuple(population))
    except ColumnFault as fault:
        faults.append(str(fault))
        return empty, labels, None, repeated
    return tree, labels, policy, repeated


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
