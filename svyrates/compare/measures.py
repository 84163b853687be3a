"""The three measures and the scale on which each is compared."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy import special

__all__ = ["MEASURES", "Measure", "Scale"]

FloatArray = NDArray[np.float64]
Measure = Literal["difference", "ratio", "odds_ratio"]


@dataclass(frozen=True, slots=True)
class Scale:
    """A measure is a difference on the scale `forward`; `back` brings its limits home.

    Attributes
    ----------
    forward, slope : the scale and its derivative, as functions of a rate
    back : from a difference on the scale to the measure
    unity : value of the measure when the rates are equal
    """

    forward: Callable[[FloatArray], FloatArray]
    slope: Callable[[FloatArray], FloatArray]
    back: Callable[[FloatArray], FloatArray]
    unity: float


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


MEASURES: dict[str, Scale] = {
    "difference": Scale(_same, np.ones_like, _same, 0.0),
    "ratio": Scale(_log, _inverse, np.exp, 1.0),
    "odds_ratio": Scale(special.logit, _inverse_variance, np.exp, 1.0),
}
