"""A survey's files and its design, as the command line names them."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass
from fnmatch import fnmatchcase
from pathlib import Path

import pandas as pd

from svyrates.command.files import read_columns
from svyrates.design import ReplicateWeights, SampleDesign, merge_replicates
from svyrates.design.replicate_checks import natural_order
from svyrates.errors import DesignError

__all__ = ["SurveyFile"]


@dataclass(frozen=True, slots=True)
class SurveyFile:
    """What was said about a survey on the command line; `read` makes a design of it.

    Attributes
    ----------
    file, separator, encoding : the data, and how a text file is written
    weight, weight_decimals, strata, clusters, population, single_cluster_strata : see
        `SampleDesign`
    replicates : names or patterns of the replicate weights
    scheme, fay, units_per_stratum, both_halves, mean_size, coefficient, centre, factors,
        replicate_decimals : see `ReplicateWeights`
    replicate_file, key : another file that holds the replicates, and what it is merged on
    """

    file: Path
    separator: str | None
    encoding: str
    weight: str | None
    weight_decimals: int
    strata: list[str] | None
    clusters: list[str] | None
    population: list[str] | None
    single_cluster_strata: str
    replicates: list[str] | None
    scheme: str | None
    fay: float | None
    units_per_stratum: list[int] | None
    both_halves: bool
    mean_size: int
    coefficient: list[float] | None
    centre: str
    factors: bool
    replicate_decimals: int
    replicate_file: Path | None
    key: list[str] | None

    def read(
        self, columns: list[str], *, may_lack: bool = False
    ) -> tuple[pd.DataFrame, SampleDesign]:
        """Read the design's columns and those that the questions need, and build the design.

        With `may_lack` a question's column that is not there is left for the question to miss.
        """
        self._check()
        keys, replicates = self.key or [], self.replicates or []
        own = [*(self.strata or ()), *(self.clusters or ()), *(self.population or ()), *keys]
        own += [self.weight] if self.weight else []
        own += [] if self.replicate_file else replicates
        lacking = set(columns) - set(own) if may_lack else set()
        data = self._columns(self.file, [*columns, *own], lacking)
        if self.replicate_file is not None:
            weights = self._columns(self.replicate_file, [*keys, *replicates])
            data = merge_replicates(data, weights, on=keys)
        design = SampleDesign(
            data,
            weight=self.weight,
            weight_decimals=self.weight_decimals,
            strata=self.strata,
            clusters=self.clusters,
            population=self.population,
            single_cluster_strata=self.single_cluster_strata,  # type: ignore[arg-type]
            replicates=self._declared(data) if replicates else None,
        )
        return data, design

    def _columns(
        self, file: Path, columns: list[str], may_lack: Collection[str] = ()
    ) -> pd.DataFrame:
        return read_columns(
            file, columns, may_lack=may_lack, separator=self.separator, encoding=self.encoding
        )

    def _check(self) -> None:
        if bool(self.replicates) != (self.scheme is not None):
            raise DesignError("--replicates and --scheme go together: which weights, made how?")
        if (self.replicate_file is not None) != bool(self.key):
            raise DesignError("--replicate-file and --key go together: which file, merged on what?")
        if self.replicate_file is not None and not self.replicates:
            raise DesignError("--replicate-file needs --replicates: which of its columns?")

    def _declared(self, data: pd.DataFrame) -> ReplicateWeights:
        names = [str(name) for name in data.columns]
        columns: list[str] = []
        for asked in self.replicates or ():
            fits = [asked] if asked in names else [x for x in names if fnmatchcase(x, asked)]
            columns += sorted(fits, key=natural_order)
        coefficient, units = self.coefficient or [], self.units_per_stratum or []
        return ReplicateWeights(
            columns,
            self.scheme,  # type: ignore[arg-type]
            fay=self.fay,
            units_per_stratum=units[0] if len(units) == 1 else units or None,
            both_halves=self.both_halves,
            mean_size=self.mean_size,
            coefficients=coefficient[0] if len(coefficient) == 1 else coefficient or None,
            centre=self.centre,  # type: ignore[arg-type]
            factors=self.factors,
            decimals=self.replicate_decimals,
        )
