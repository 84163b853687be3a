"""The measures and the scale on which each is compared."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy import special

from svyrates.words import fixed, percent, points

__all__ = ["MEASURES", "Measure", "Scale"]

FloatArray = NDArray[np.float64]
Measure = Literal["difference", "ratio", "odds_ratio", "relative_difference"]


@dataclass(frozen=True, slots=True)
class Scale:
    """A measure is a difference on the scale `forward`; `back` brings its limits home.

    Attributes
    ----------
    name : in words
    forward, slope : the scale and its derivative, as functions of a rate
    back, onto : from a difference on the scale to the measure, and the reverse
    unity : value of the measure when the rates are equal
    least : the measure is above this value
    show : the measure for a sentence
    """

    name: str
    forward: Callable[[FloatArray], FloatArray]
    slope: Callable[[FloatArray], FloatArray]
    back: Callable[[FloatArray], FloatArray]
    onto: Callable[[float], float]
    unity: float
    least: float
    show: Callable[[float], str]

    @property
    def is_log(self) -> bool:
        """Whether tests and limits are formed on a log scale."""
        return self.back is not _same


def _log(rate: FloatArray) -> FloatArray:
    with np.errstate(divide="ignore"):
        return np.log(rate)


def _inverse(rate: FloatArray) -> FloatArray:
    with np.errstate(divide="ignore"):
        return 1.0 / rate


def _inverse_variance(rate: FloatArray) -> FloatArray:
    with np.errstate(divide="ignore"):
        return 1.0 / (rate * (1.0 - rate))


def _same(value: FloatArray) -> FloatArray:
    return value


def _two_places(value: float) -> str:
    return fixed(value, 2)


def _signed_percent(value: float) -> str:
    text = percent(value)
    return f"+{text}" if value > 0 and text[:1].isdigit() else text


MEASURES: dict[str, Scale] = {
    "difference": Scale("difference", _same, np.ones_like, _same, float, 0.0, -1.0, points),
    "ratio": Scale(
        "ratio", _log, _inverse, np.exp, lambda m: float(np.log(m)), 1.0, 0.0, _two_places
    ),
    "odds_ratio": Scale(
        "odds ratio",
        special.logit,
        _inverse_variance,
        np.exp,
        lambda m: float(np.log(m)),
        1.0,
        0.0,
        _two_places,
    ),
    "relative_difference": Scale(
        "relative difference",
        _log,
        _inverse,
        np.expm1,
        lambda m: float(np.log1p(m)),
        0.0,
        -1.0,
        _signed_percent,
    ),
}
