"""`SampleDesign`: the survey's weights, strata and stages, declared once and checked once."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from svyrates.design.columns import Frame, is_plain, numbers, open_frame
from svyrates.design.hierarchy import Hierarchy
from svyrates.design.replicates import ReplicateSet, ReplicateWeights, read_replicates
from svyrates.design.summary import DesignSummary
from svyrates.design.units import POLICIES, SingleClusterStrata, read_tree
from svyrates.design.weights import read_weights
from svyrates.errors import DesignError, all_faults, some

__all__ = ["SampleDesign"]

FloatArray = NDArray[np.float64]
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
    weight_decimals : int
        Implied decimals: the weights are the column divided by 10 to this power.
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
    replicates : ReplicateWeights, optional
        Replicate weights of the file. The variance is then theirs; `strata` and `clusters` may
        still be named, for the degrees of freedom.

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
        weight_decimals: int = 0,
        strata: str | Sequence[str] | None = None,
        clusters: str | Sequence[str] | None = None,
        population: str | Sequence[str] | None = None,
        single_cluster_strata: SingleClusterStrata = "error",
        replicates: ReplicateWeights | ReplicateSet | None = None,
    ) -> None:
        frame = open_frame(data)
        faults: list[str] = []
        self._frame = frame
        self._columns: dict[str, Any] = {
            "weight": weight,
            "weight_decimals": weight_decimals,
            "strata": _names(strata),
            "clusters": _names(clusters),
            "population": _names(population),
        }
        if not isinstance(single_cluster_strata, Mapping) and single_cluster_strata not in POLICIES:
            faults.append(
                f"single_cluster_strata must be one of {some(POLICIES)} or a mapping of stratum "
                f"to partner; got {single_cluster_strata!r}."
            )
        self._single = single_cluster_strata
        self._weights = read_weights(frame, weight, weight_decimals, faults)
        self._tree, self._lone, self._repeated = read_tree(
            frame, self._columns, single_cluster_strata if replicates is None else None, faults
        )
        self._replicates = None
        if replicates is not None:
            known = self.df if strata is not None or clusters is not None else None
            self._replicates = read_replicates(
                frame, replicates, weight, self._weights, self._tree, known, faults
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
    def replicates(self) -> ReplicateSet | None:
        """The replicate weights, if the design has them."""
        return self._replicates

    @property
    def declared(self) -> dict[str, Any]:
        """Arguments the design was declared with, its frame and replicates apart."""
        return {**self._columns, "single_cluster_strata": self._single}

    @property
    def joined_strata(self) -> tuple[tuple[str, ...], ...]:
        """Labels of the strata that were joined because one held a single sampling unit."""
        return () if self._lone is None else self._lone.joined

    def with_replicates(self, data: Any, replicates: ReplicateWeights) -> SampleDesign:
        """The same design of a frame that has replicate weights as well."""
        return SampleDesign(
            data,
            weight=self._columns["weight"],
            weight_decimals=self._columns["weight_decimals"],
            strata=self._columns["strata"] or None,
            clusters=self._columns["clusters"] or None,
            replicates=replicates,
        )

    def replicate_column(self, name: str) -> FloatArray:
        """One column of replicate weights as it lies in the frame, of any numeric type."""
        series = self._frame.get_column(name)
        whole = is_plain(series) or (series.dtype.is_numeric() and not series.is_null().any())
        return series.to_numpy() if whole else numbers(self._frame, name, "replicates")

    @property
    def reads_in_place(self) -> bool:
        """Whether columns of the frame can be read without copying them."""
        implementation = self._frame.implementation
        return implementation.is_pandas() or implementation.is_polars()

    @property
    def names_units(self) -> bool:
        """Whether strata or clusters were given."""
        return bool(self._columns["strata"] or self._columns["clusters"])

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
            self._columns,
            self._weights,
            self._tree,
            self._lone,
            self._repeated,
            self._replicates,
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
