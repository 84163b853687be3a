"""What a test asks: one side or two, which null value, or which margin.

Equivalence is two one-sided tests against the two ends of the margin, and its limits have level
1 - 2α (Schuirmann 1987); non-inferiority is one of them.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray
from scipy import special

from svyrates.compare.measures import MEASURES
from svyrates.errors import some
from svyrates.rates.limits import t_p_value, t_tail

__all__ = [
    "ALTERNATIVES",
    "Alternative",
    "Hypothesis",
    "normal_df",
    "read_hypothesis",
]

FloatArray = NDArray[np.float64]
Alternative = Literal["two-sided", "greater", "less", "equivalent", "not-lower", "not-higher"]
ALTERNATIVES = ("two-sided", "greater", "less", "equivalent", "not-lower", "not-higher")
NEED_MARGIN = ALTERNATIVES[3:]


@dataclass(frozen=True, slots=True)
class Hypothesis:
    """A test's question.

    Attributes
    ----------
    side : "two-sided", "greater", "less" or "equivalent"; the others are one of these
    low, high : null values on the measure's scale, equal but for "equivalent"
    level : confidence level; the test is at 1 - level
    """

    side: str
    low: float
    high: float
    level: float

    @property
    def null(self) -> float:
        """The null value, NaN for a margin with two ends."""
        return self.low if self.low == self.high else float("nan")

    @property
    def pointwise(self) -> float:
        """Level of the two-sided interval whose end, or ends, the test looks at."""
        return self.level if self.side == "two-sided" else 2.0 * self.level - 1.0

    @property
    def coverage(self) -> float:
        """Nominal coverage of the limits that are reported."""
        return self.pointwise if self.side == "equivalent" else self.level

    @property
    def z(self) -> float:
        """Normal quantile of the limits."""
        return float(special.ndtri(0.5 + self.pointwise / 2.0))

    @property
    def is_equality(self) -> bool:
        """Whether the null hypothesis says that the rates are equal."""
        return self.low == self.high == 0.0

    def test(
        self, estimate: FloatArray, se: FloatArray, df: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """T statistics and p-values; NaN where the standard error is zero or undefined."""
        with np.errstate(invalid="ignore", divide="ignore"):
            above = np.where(se > 0, (estimate - self.low) / se, np.nan)
            below = np.where(se > 0, (estimate - self.high) / se, np.nan)
        if self.side == "two-sided":
            return above, t_p_value(above, df)
        over, under = t_tail(above, df), t_tail(-below, df)
        if self.side == "greater":
            return above, over
        if self.side == "less":
            return below, under
        worse = over >= under
        return np.where(worse, above, below), np.where(np.isnan(over), np.nan, np.fmax(over, under))

    def p_of_ends(self, over: float, under: float) -> float:
        """p-value from those of "above `low`" and "below `high`", each one-sided."""
        if self.side == "two-sided":
            return min(2.0 * min(over, under), 1.0)
        return {"greater": over, "less": under, "equivalent": max(over, under)}[self.side]

    def limits(self, low: FloatArray, high: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Open the side that a one-sided question does not ask about."""
        defined = np.isfinite(low) & np.isfinite(high)
        if self.side == "greater":
            return low, np.where(defined, np.inf, np.nan)
        if self.side == "less":
            return np.where(defined, -np.inf, np.nan), high
        return low, high


def normal_df(like: FloatArray) -> FloatArray:
    """Infinite degrees of freedom, where Student's t is the normal."""
    return np.full(np.shape(like), np.inf)


def read_hypothesis(
    measure: str, alternative: str, null: Any, margin: Any, level: Any, faults: list[str]
) -> Hypothesis | None:
    """Check a test's question; faults go on the list."""
    before = len(faults)
    if measure not in MEASURES:
        faults.append(f"measure must be one of {some(tuple(MEASURES))}; got {measure!r}.")
    if alternative not in ALTERNATIVES:
        faults.append(f"alternative must be one of {some(ALTERNATIVES, 6)}; got {alternative!r}.")
    if isinstance(level, bool) or not isinstance(level, int | float) or not 0.0 < level < 1.0:
        faults.append(f"level must be a number between 0 and 1, such as 0.95; got {level!r}.")
    elif alternative != "two-sided" and level <= 0.5:
        faults.append(f"a one-sided question needs a level above 0.5; got {level!r}.")
    if len(faults) > before:
        return None
    if alternative in NEED_MARGIN:
        if null is not None:
            faults.append(f"alternative={alternative!r} takes a margin, not a null value.")
        ends = _margin(measure, margin, alternative, faults)
        side = {"not-lower": "greater", "not-higher": "less"}.get(alternative, alternative)
        low = ends[1] if alternative == "not-higher" else ends[0]
        high = ends[0] if alternative == "not-lower" else ends[1]
        return Hypothesis(side, low, high, float(level))
    if margin is not None:
        faults.append(f"margin goes with alternative {some(NEED_MARGIN)}, not {alternative!r}.")
    value = _null(measure, null, faults)
    return Hypothesis(alternative, value, value, float(level))


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float | np.number) and not isinstance(value, bool)


def _null(measure: str, null: Any, faults: list[str]) -> float:
    scale = MEASURES[measure]
    if null is None:
        return 0.0
    high = np.inf if scale.is_log else 1.0
    if not _is_number(null) or not scale.least < float(null) < high:
        faults.append(
            f"null must be a number between {scale.least:g} and {high:g} for the {measure}; got "
            f"{null!r}."
        )
        return 0.0
    return scale.onto(float(null))


def _margin(measure: str, margin: Any, alternative: str, faults: list[str]) -> tuple[float, float]:
    """Both ends of a margin on the measure's scale; one number is taken both ways."""
    scale = MEASURES[measure]
    example = {"difference": "0.05", "relative_difference": "0.1"}.get(measure, "1.25")
    if margin is None:
        faults.append(f"alternative={alternative!r} needs a margin, such as margin={example}.")
        return 0.0, 0.0
    if isinstance(margin, tuple | list) and len(margin) == 2:
        low, high = margin
    elif _is_number(margin) and float(margin) > scale.unity:
        high = margin
        # On a log scale the margin is the same factor both ways.
        low = float(scale.back(np.asarray(-scale.onto(float(margin)))))
    else:
        low = high = None
    numbers = _is_number(low) and _is_number(high)
    most = np.inf if scale.is_log else 1.0
    if not numbers or not scale.least < float(low) < scale.unity < float(high) < most:
        faults.append(
            f"margin must be a number above {scale.unity:g}, such as {example}, or a pair around "
            f"{scale.unity:g} for the {measure}; got {margin!r}."
        )
        return 0.0, 0.0
    return scale.onto(float(low)), scale.onto(float(high))
