"""Sampling weights: read once, checked once."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from svyrates.design.columns import Frame, fault_or, numbers

__all__ = ["read_weights"]

FloatArray = NDArray[np.float64]


def read_weights(frame: Frame, name: str | None, decimals: int, faults: list[str]) -> FloatArray:
    """Read the weights, shape (records,); all ones without a column. Faults go on the list."""
    if name is None:
        return np.ones(len(frame))
    if isinstance(decimals, bool) or not isinstance(decimals, int) or decimals < 0:
        faults.append(f"weight_decimals must be a whole number from 0 on; got {decimals!r}.")
        return np.ones(len(frame))
    values = fault_or(faults, numbers, frame, name, "weight")
    if values is None:
        return np.ones(len(frame))
    weights = np.asarray(values, dtype=np.float64)
    if decimals:
        weights = weights / 10.0**decimals
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
