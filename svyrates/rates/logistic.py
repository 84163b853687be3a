"""Logistic regression by weighted pseudo-maximum likelihood, fitted by Newton's method.

Source: Binder (1983), International Statistical Review 51, 279-292; Korn & Graubard (1999),
section 3.5.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

from svyrates.errors import QuestionError
from svyrates.rates.logistic_faults import Basis, check_separation

__all__ = ["LogisticFit", "fit_logistic", "refit"]

FloatArray = NDArray[np.float64]
_MOST_STEPS, _HALVINGS = 50, 30
# The Newton decrement, in units of the likelihood of one record, from which one step is enough.
_DONE = 1e-13


@dataclass(frozen=True, slots=True)
class LogisticFit:
    """A fit.

    Attributes
    ----------
    gamma : (k,) coefficients of the basis
    fitted : (rows,) probabilities
    weights : (rows,) as the fit used them, with mean 1
    information : (k, k) `B' diag(w μ(1 - μ)) B` of the basis B
    """

    gamma: FloatArray
    fitted: FloatArray
    weights: FloatArray
    information: FloatArray


def fit_logistic(
    basis: Basis, y: FloatArray, w: FloatArray, start: FloatArray | None = None
) -> LogisticFit:
    """Maximise `Σ w (y η - log(1 + e^η))`.

    Parameters
    ----------
    basis : of the model matrix, see `model_basis`
    y : (rows,) 0 or 1
    w : (rows,) weights; their scale does not matter, and replicate weights may be negative
    start : (k,) coefficients of the basis to start from

    Raises
    ------
    QuestionError
        For separation and for a likelihood without a maximum.
    """
    x = basis.matrix
    w = w / np.abs(w).mean()
    gamma = np.zeros(x.shape[1]) if start is None else start.copy()
    eta = x @ gamma
    value = _likelihood(eta, y, w)
    for _ in range(_MOST_STEPS):
        mu, information = _at(x, eta, w)
        score = x.T @ (w * (y - mu))
        try:
            step = np.asarray(np.linalg.solve(information, score), dtype=np.float64)
        except np.linalg.LinAlgError:
            break
        decrement = float(score @ step)
        if not np.isfinite(decrement) or decrement < 0:
            break
        moved = x @ step
        check_separation(basis, y, w, step, moved)
        if decrement <= _DONE * y.size:
            # Close to the maximum a full step squares the error: the last one is always taken.
            mu, information = _at(x, eta + moved, w)
            return LogisticFit(gamma + step, mu, w, information)
        size = 1.0
        for _halving in range(_HALVINGS):
            found = _likelihood(eta + size * moved, y, w)
            if found >= value - 1e-12 * abs(value):
                break
            size /= 2.0
        gamma, eta, value = gamma + size * step, eta + size * moved, found
    raise QuestionError(
        "The model's likelihood has no maximum that Newton's method finds. Leave terms out, or "
        "join levels with few records."
    )


def _at(x: FloatArray, eta: FloatArray, w: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Probabilities and information."""
    mu = special.expit(eta)
    return mu, (x * (w * mu * (1.0 - mu))[:, None]).T @ x


def _likelihood(eta: FloatArray, y: FloatArray, w: FloatArray) -> float:
    return float(w @ (y * eta - np.logaddexp(0.0, eta)))


def refit(
    basis: Basis,
    y: FloatArray,
    weights: Iterable[FloatArray],
    start: FloatArray,
    progress: Callable[[int], None] = lambda _: None,
) -> Iterable[LogisticFit | None]:
    """Fit again under each of many weights, each from the full-sample fit; None where it fails."""
    for w in weights:
        try:
            fit: LogisticFit | None = fit_logistic(basis, y, w, start)
        except QuestionError:
            fit = None
        progress(1)
        yield fit
