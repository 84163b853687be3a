"""`ComparisonTable`: design-adjusted comparisons with the simple formula and its verdict."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from svyrates.compare.layout import comparison_layout
from svyrates.compare.pairs import PairBlock
from svyrates.errors import ComparisonError, some
from svyrates.rates.table import RateTable
from svyrates.words import Table, Tabular, for_terminal

__all__ = ["ComparisonTable"]

FloatArray = NDArray[np.float64]

_NUMBERS = (
    "se", "low", "high", "statistic", "df", "p", "p_adjusted", "simultaneous_low",
    "simultaneous_high", "correlation", "simple_estimate", "simple_se", "simple_low",
    "simple_high", "simple_p", "shift", "shift_p", "variance_ratio", "simple_error_rate",
    "simple_coverage",
)  # fmt: skip


@dataclass(frozen=True, repr=False)
class ComparisonTable(Tabular):
    """Comparisons of rates, one row per pair; all arrays have shape (pairs,).

    Attributes
    ----------
    held, levels : names of the columns held fixed, and their labels in each row
    group, versus : what is compared with what
    rate, versus_rate : the two weighted rates
    estimate : difference (proportion), ratio, odds ratio or relative difference (proportion)
    se : standard error; on the log scale for all but the difference
    low, high : confidence limits of the measure
    statistic, df, p : t statistic, its degrees of freedom and p-value
    p_adjusted : p-value adjusted for the family of comparisons; `p` itself without adjustment
    simultaneous_low, simultaneous_high : limits that hold together, where the method has any
    correlation : of the two rates; NaN against a fixed number
    simple_estimate, simple_se, simple_low, simple_high, simple_p : what the simple formula says
    shift, shift_p : simple minus weighted estimate, on the scale of `se`, and its p-value
    variance_ratio : design-based variance over the simple one
    simple_error_rate : how often the simple test rejects where the population rates are equal
    simple_coverage : how often the simple interval holds the weighted difference
    verdict : see the page "Read the verdict"
    conclusion : what the adjusted test comes to, in a few words
    note : what a reader must know about a row, or ""
    measure, alternative, null, margin, limits, multiplicity, family, variant, level, fixed : the
        question

    Examples
    --------
    >>> import warnings
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.estimate_rates(
    ...     design, outcome="cold_home", success=["often", "always"], by="tenure"
    ... )
    >>> with warnings.catch_warnings():
    ...     warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
    ...     gaps = sr.compare_rates(rates, versus=sr.EVERYONE_ELSE)
    >>> gaps.measure
    'difference'

    Each row compares a tenure group with everyone else; ``print(gaps)`` shows them.
    """

    held: tuple[str, ...]
    levels: tuple[tuple[object, ...], ...]
    group: tuple[str, ...]
    versus: tuple[str, ...]
    rate: FloatArray
    versus_rate: FloatArray
    estimate: FloatArray
    se: FloatArray
    low: FloatArray
    high: FloatArray
    statistic: FloatArray
    df: FloatArray
    p: FloatArray
    p_adjusted: FloatArray
    simultaneous_low: FloatArray
    simultaneous_high: FloatArray
    correlation: FloatArray
    simple_estimate: FloatArray
    simple_se: FloatArray
    simple_low: FloatArray
    simple_high: FloatArray
    simple_p: FloatArray
    shift: FloatArray
    shift_p: FloatArray
    variance_ratio: FloatArray
    simple_error_rate: FloatArray
    simple_coverage: FloatArray
    verdict: NDArray[np.object_]
    conclusion: NDArray[np.object_]
    note: NDArray[np.object_]
    measure: str
    alternative: str
    null: float
    margin: tuple[float, float] | None
    limits: str
    multiplicity: str
    family: str
    variant: str
    level: float
    fixed: float | None
    rates: RateTable
    blocks: tuple[PairBlock, ...]

    def __len__(self) -> int:
        return len(self.group)

    @property
    def family_sizes(self) -> list[int]:
        """Comparisons within each level of the columns held fixed."""
        return list(Counter(self.levels).values())

    @property
    def limits_level(self) -> float:
        """Level of the limits: 1 - 2α for equivalence, `level` for all else."""
        level = 2.0 * self.level - 1.0 if self.alternative == "equivalent" else self.level
        return round(level, 12)

    def label_columns(self) -> tuple[list[str], list[tuple[object, ...]]]:
        """Names and values of the columns held fixed; the outcome only if there are several."""
        shown = self._shown()
        names = [self.held[position] for position in shown]
        return names, [tuple(level[position] for position in shown) for level in self.levels]

    def _shown(self) -> list[int]:
        """Positions of the columns held fixed that a reader needs to see."""
        several = len(self.rates.outcomes) > 1
        return [i for i, name in enumerate(self.held) if name != "outcome" or several]

    def to_frame(self) -> pd.DataFrame:
        """All columns of the table as a pandas frame, one row per comparison.

        Returns
        -------
        pandas.DataFrame
            The columns held fixed, `group`, `versus`, `rate`, `versus_rate`, the measure under its
            own name (such as `difference` or `odds_ratio`), then the rest in the order of the
            attributes.
        """
        names, rows = self.label_columns()
        data: dict[str, Any] = {
            name: [row[position] for row in rows] for position, name in enumerate(names)
        }
        data |= {
            "group": list(self.group),
            "versus": list(self.versus),
            "rate": self.rate,
            "versus_rate": self.versus_rate,
            self.measure: self.estimate,
        }
        data |= {name: getattr(self, name) for name in _NUMBERS}
        for name in ("verdict", "conclusion", "note"):
            data[name] = list(getattr(self, name))
        return pd.DataFrame(data)

    def find(self, group: object = None, versus: object = None, **held: object) -> int:
        """Position of one comparison; both orders of a pair are found.

        Parameters
        ----------
        group, versus : labels, optional
            May be left out where the table has one comparison that fits.
        **held : labels of the columns held fixed

        Raises
        ------
        ComparisonError
            When no comparison fits, or more than one.
        """
        strange = [name for name in held if name not in self.held]
        if strange:
            raise ComparisonError(
                f"{some(strange)} is not a column held fixed; these are {some(self.held)}."
            )
        fits = [
            row
            for row in range(len(self))
            if self._fits(row, group, versus)
            and all(
                _is(self.levels[row][self.held.index(name)], wanted)
                for name, wanted in held.items()
            )
        ]
        if len(fits) == 1:
            return fits[0]
        if not fits:
            known = list(dict.fromkeys(self.group + self.versus))
            raise ComparisonError(
                f"There is no comparison of {group!r} with {versus!r}. The table compares "
                f"{some(known, 10)}."
            )
        fixed = ", ".join(name for name in self.held if name not in held)
        raise ComparisonError(
            f"{len(fits)} comparisons fit. Name the group, what it is compared with"
            + (f", and a level of {fixed}." if fixed else ".")
        )

    def _fits(self, row: int, group: object, versus: object) -> bool:
        one, other = self.group[row], self.versus[row]
        if versus is None:
            return group is None or _is(one, group) or _is(other, group)
        return ((group is None or _is(one, group)) and _is(other, versus)) or (
            _is(one, versus) and _is(other, group)
        )

    def only(self, rows: Sequence[int]) -> ComparisonTable:
        """A table of some of the comparisons, in their order here."""
        kept = np.asarray(rows, dtype=np.intp)
        starts = np.cumsum([0, *(len(block.group) for block in self.blocks)])
        blocks = []
        for block, start, stop in zip(self.blocks, starts[:-1], starts[1:], strict=True):
            inside = kept[(kept >= start) & (kept < stop)] - start
            if inside.size:
                blocks.append(block.only(inside))
        labels: dict[str, Any] = {
            name: tuple(getattr(self, name)[row] for row in kept)
            for name in ("levels", "group", "versus")
        }
        arrays: dict[str, Any] = {
            each.name: getattr(self, each.name)[kept]
            for each in fields(self)
            if isinstance(getattr(self, each.name), np.ndarray)
        }
        return replace(self, blocks=tuple(blocks), **labels, **arrays)

    def explain(self, group: object = None, versus: object = None, **held: object) -> str:
        """Put one comparison into a paragraph: the answer, the simple formula, and the verdict.

        Parameters
        ----------
        group, versus : labels, optional
            May be left out where the table has one comparison that fits.
        **held : labels of the columns held fixed, such as ``region="North"``

        Returns
        -------
        str
        """
        return self.explain_row(self.find(group, versus, **held))

    def explain_row(self, row: int) -> str:
        """`explain` for the comparison at a position."""
        from svyrates.compare.explain import paragraph

        return paragraph(self, row)

    def sentences(self, *, cautions: bool = True) -> list[str]:
        """Put the comparisons into plain sentences, one each.

        Parameters
        ----------
        cautions : bool
            Add how many comparisons there were, what must be said of the rates, and that a
            difference is not its cause.

        Returns
        -------
        list of str
            Direction, size with limits, evidence, adjustment, and what the simple formula would
            have claimed where it misleads. Differences are in percentage points, relative ones in
            percent; numbers are rounded half away from zero.
        """
        from svyrates.compare.sentences import sentences

        return sentences(self, cautions=cautions)

    def title_of(self, row: int) -> str:
        """Short name of a comparison, such as "owner versus rent-free (region North)"."""
        level = ", ".join(
            f"{self.held[position]} {self.levels[row][position]}" for position in self._shown()
        )
        title = f"{self.group[row]} versus {self.versus[row]}"
        # It goes into sentences and warnings, which a terminal prints as they are.
        return for_terminal(f"{title} ({level})" if level else title)

    def variance_sources(self) -> pd.DataFrame:
        """Why the two variances differ: ratios whose product is `variance_ratio`.

        Returns
        -------
        pandas.DataFrame
            One row per comparison: `group`, `versus`, `weights` (independent records with weights
            over the simple formula), `clusters` (sampling units, strata ignored and no covariance
            between the groups, over that), `covariance` (with it, over without) and `strata`
            (strata and any finite population correction, over that). With replicate weights
            clusters and strata cannot be told apart: `clusters` holds both, `strata` is NaN.
        """
        from svyrates.compare.sources import variance_sources

        return variance_sources(self)

    def table(self, *, percent: bool = False, every_column: bool = False) -> Table:
        """The table laid out for reading."""
        return comparison_layout(self, percent=percent, every_column=every_column)

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, ComparisonTable):
            return NotImplemented
        names = [each.name for each in fields(self) if each.name != "blocks"]
        return all(_same(getattr(self, name), getattr(other, name)) for name in names)

    __hash__ = None  # type: ignore[assignment]


def _is(label: object, wanted: object) -> bool:
    value = getattr(wanted, "value", wanted)
    return label == value or str(label) == str(value)


def _same(one: Any, other: Any) -> bool:
    if isinstance(one, np.ndarray):
        if one.dtype == object:
            return bool(np.array_equal(one, other))
        return bool(np.array_equal(one, other, equal_nan=True))
    return bool(one == other)
