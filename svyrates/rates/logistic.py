"""Logistic regression by weighted pseudo-maximum likelihood, fitted by Newton's method.

Source: Binder (1983), International Statistical Review 51, 279-292; Korn & Graubard (1999),
section 3.5.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import NoReturn

import numpy as np
from numpy.typing import NDArray
from scipy import special

from svyrates.errors import QuestionError, some

__all__ = ["LogisticFit", "check_matrix", "fit_logistic", "refit"]

FloatArray = NDArray[np.float64]
_MOST_STEPS, _HALVINGS = 50, 30
# The Newton decrement, in units of the likelihood of one record, from which one step is enough.
_DONE = 1e-13
# A fitted probability this close to 0 or 1 says that the likelihood has no maximum.
_SEPARATED = 1e-7


@dataclass(frozen=True, slots=True)
class LogisticFit:
    """A fit.

    Attributes
    ----------
    beta : (k,) coefficients
    fitted : (rows,) probabilities
    weights : (rows,) as the fit used them, with mean 1
    information : (k, k) `X' diag(w μ(1 - μ)) X`
    """

    beta: FloatArray
    fitted: FloatArray
    weights: FloatArray
    information: FloatArray

    def influence(self, x: FloatArray, y: FloatArray) -> FloatArray:
        """Influence of every record on the coefficients, (rows, k): `I⁻¹ w x (y - μ)`."""
        score = x * (self.weights * (y - self.fitted))[:, None]
        return np.asarray(np.linalg.solve(self.information, score.T).T)


def check_matrix(x: FloatArray, y: FloatArray, w: FloatArray, names: tuple[str, ...]) -> None:
    """Refuse what no regression can fit, and say why.

    Raises
    ------
    QuestionError
        For too few records, one outcome only, or columns that are sums of others.
    """
    positive = w > 0
    n, k = int(positive.sum()), x.shape[1]
    successes = float(y[positive].sum())
    if n <= k:
        raise QuestionError(f"The model has {k} coefficients for {n} records. Ask for less.")
    if successes in (0.0, float(n)):
        raise QuestionError(
            f"The outcome is {int(successes > 0)} in all {n} records of the model: there is "
            "nothing to explain."
        )
    gram = x.T @ (x * w[:, None])
    scale = np.sqrt(gram.diagonal())
    empty = [name for name, size in zip(names, scale, strict=True) if size == 0.0]
    if empty:
        raise QuestionError(f"The model's columns {some(empty, 5)} are zero in every record.")
    values, vectors = np.linalg.eigh(gram / np.outer(scale, scale))
    if values[0] < 1e-10 * values[-1]:
        involved = [
            name for name, part in zip(names, vectors[:, 0], strict=True) if abs(part) > 1e-4
        ]
        raise QuestionError(
            f"The model's columns {some(involved, 8)} are collinear: one of them is a sum of the "
            "others. Leave a term out, or join levels."
        )


def fit_logistic(
    x: FloatArray,
    y: FloatArray,
    w: FloatArray,
    names: tuple[str, ...],
    start: FloatArray | None = None,
) -> LogisticFit:
    """Maximise `Σ w (y η - log(1 + e^η))`.

    Parameters
    ----------
    x : (rows, k)
    y : (rows,) 0 or 1
    w : (rows,) weights; their scale does not matter, and replicate weights may be negative
    names : (k,) names of the columns, for messages
    start : (k,) coefficients to start from

    Raises
    ------
    QuestionError
        For separation and for a likelihood without a maximum.
    """
    w = w / np.abs(w).mean()
    beta = np.zeros(x.shape[1]) if start is None else start.copy()
    eta = x @ beta
    value = _likelihood(eta, y, w)
    for _ in range(_MOST_STEPS):
        mu = special.expit(eta)
        information = (x * (w * mu * (1.0 - mu))[:, None]).T @ x
        score = x.T @ (w * (y - mu))
        try:
            move = np.linalg.solve(information, score)
        except np.linalg.LinAlgError:
            _separated(x, eta, names)
        decrement = float(score @ move)
        if not np.isfinite(decrement) or decrement < 0:
            _separated(x, eta, names)
        if decrement <= _DONE * y.size:
            # Close to the maximum a full step squares the error: the last one is always taken.
            beta = beta + move
            eta = x @ beta
            break
        size = 1.0
        for _halving in range(_HALVINGS):
            tried = eta + size * (x @ move)
            found = _likelihood(tried, y, w)
            if found >= value - 1e-12 * abs(value):
                break
            size /= 2.0
        beta, eta, value = beta + size * move, tried, found
    else:
        _separated(x, eta, names)
    mu = special.expit(eta)
    _check_separation(x, mu, w, names)
    information = (x * (w * mu * (1.0 - mu))[:, None]).T @ x
    return LogisticFit(beta, mu, w, information)


def _likelihood(eta: FloatArray, y: FloatArray, w: FloatArray) -> float:
    return float(w @ (y * eta - np.logaddexp(0.0, eta)))


def _check_separation(x: FloatArray, mu: FloatArray, w: FloatArray, names: tuple[str, ...]) -> None:
    certain = (w > 0) & ((mu < _SEPARATED) | (mu > 1.0 - _SEPARATED))
    if certain.any():
        eta = special.logit(np.clip(mu, 1e-300, 1.0 - 1e-16))
        _separated(x, eta, names, int(certain.sum()))


def _separated(
    x: FloatArray, eta: FloatArray, names: tuple[str, ...], n_certain: int | None = None
) -> NoReturn:
    """Name the columns that tell success from failure without error."""
    extreme = np.abs(eta) > 12.0
    if not extreme.any():
        extreme = np.abs(eta) >= np.quantile(np.abs(eta), 0.95)
    inside = np.abs(x[extreme]).mean(axis=0) / np.maximum(np.abs(x).mean(axis=0), 1e-300)
    order = np.argsort(-inside)
    suspects = [names[i] for i in order[:3] if inside[i] > 1.5 and names[i] != "Intercept"]
    where = f", near {some(suspects)}" if suspects else ""
    count = "" if n_certain is None else f" for {n_certain} records"
    raise QuestionError(
        f"The model fits probabilities of 0 or 1{count}{where}: some level or combination has "
        "only successes or only failures, so that its coefficient has no finite estimate. Join "
        "levels or leave a term out."
    )


def refit(
    x: FloatArray,
    y: FloatArray,
    weights: Iterable[FloatArray],
    start: FloatArray,
    names: tuple[str, ...],
    progress: Callable[[int], None] = lambda _: None,
) -> Iterable[LogisticFit | None]:
    """Fit again under each of many weights, each from the full-sample fit; None where it fails."""
    for w in weights:
        try:
            fit: LogisticFit | None = fit_logistic(x, y, w, names, start)
        except QuestionError:
            fit = None
        progress(1)
        yield fit
