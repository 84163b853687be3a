"""`DecompositionTable`: the parts of gaps between groups."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from svyrates.rates.layout import machine_column
from svyrates.rates.table import Coverage
from svyrates.words import (
    Column,
    Table,
    Tabular,
    fixed,
    join_words,
    p_value,
    percent,
    points,
    rule_or_number,
)

__all__ = ["DecompositionTable"]

FloatArray = NDArray[np.float64]
_NUMBERS = ("estimate", "se", "low", "high", "statistic", "df", "p", "share")


@dataclass(frozen=True, repr=False)
class DecompositionTable(Tabular):
    """The parts of gaps; all arrays have shape (rows,).

    Attributes
    ----------
    group, versus : the pair whose gap is split
    part : "difference", or the part of it: "composition" or "rates"
    category : the category whose contribution a row is, "" for a whole part
    estimate, se, low, high : in proportions
    statistic, df, p : t statistic, its degrees of freedom and p-value
    share : of the difference; beyond 0 to 1 where parts have opposite signs
    subject, by, adjust_for, level, df_rule : the question
    coverage : which records it speaks of

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> parts = sr.gap_decomposition(design, "damp", by="sex", adjust_for="tenure")
    >>> frame = parts.to_frame()
    >>> whole = frame[frame["category"] == ""]["estimate"].tolist()
    >>> abs(whole[0] - whole[1] - whole[2]) < 1e-12
    True

    The two parts add up to the difference.
    """

    group: tuple[str, ...]
    versus: tuple[str, ...]
    part: tuple[str, ...]
    category: tuple[str, ...]
    estimate: FloatArray
    se: FloatArray
    low: FloatArray
    high: FloatArray
    statistic: FloatArray
    df: FloatArray
    p: FloatArray
    share: FloatArray
    subject: str
    by: str
    adjust_for: tuple[str, ...]
    level: float
    df_rule: str | float
    coverage: Coverage

    def to_frame(self) -> pd.DataFrame:
        """All columns as a pandas frame, in the order of the attributes."""
        names = ("group", "versus", "part", "category")
        data: dict[str, Any] = {name: list(getattr(self, name)) for name in names}
        return pd.DataFrame(data | {name: getattr(self, name) for name in _NUMBERS})

    def table(self, *, percent: bool = False, every_column: bool = False) -> Table:
        """The table laid out for reading."""
        frame = self.to_frame()
        labels = ["group", "versus", "part", "category"]
        if every_column:
            keys = [Column(name, name, frame[name].tolist(), key=True) for name in labels]
            rest = [machine_column(frame, name) for name in _NUMBERS]
            return Table(self._title(), (*keys, *rest), self._about())
        frame = frame[frame["category"] == ""]
        keys = [Column(name, name, frame[name].tolist(), key=True) for name in labels[:3]]

        def show(value: Any) -> str:
            return points(value).removesuffix(" points") if percent else fixed(value, 4)

        columns = [
            _number(frame, "estimate", "estimate (points)" if percent else "estimate", show),
            _number(frame, "low", "low", show),
            _number(frame, "high", "high", show),
            _number(frame, "p", "p", p_value),
            _number(frame, "share", "share", _share),
        ]
        return Table(self._title(), (*keys, *columns), self._about())

    def _title(self) -> str:
        return f"Gaps of {self.subject} by {self.by}: composition by {' × '.join(self.adjust_for)}"

    def _about(self) -> tuple[str, ...]:
        lines = [
            "composition: the groups differ in "
            + join_words(list(self.adjust_for))
            + "; rates: they differ within its categories (Kitagawa 1955).",
            f"{100 * self.level:g}% limits, t tests; df: {rule_or_number(self.df_rule)}.",
        ]
        if self.coverage.n_group_unknown:
            lines.append(
                f"{self.coverage.n_group_unknown:,} records with an unknown group or category are "
                "left out."
            )
        if np.isnan(self.se).any():
            lines.append("–: no variance, as a rate is undefined in some replicates.")
        lines.append("What each category adds to a part is in to_frame() and the files.")
        lines.append("A part of a gap is not its cause.")
        return tuple(lines)


def _number(frame: pd.DataFrame, name: str, heading: str, show: Any) -> Column:
    return Column(name, heading, frame[name].tolist(), "number", show)


def _share(value: Any) -> str:
    return percent(value, 0) if abs(value) < 10 else "–"
