"""Whether replicate columns look like what they are said to be."""

from __future__ import annotations

import re
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from svyrates.design.columns import Frame, numbers
from svyrates.errors import DesignWarning, warn

__all__ = ["check_sums", "natural_order", "rank_of_deviations"]

FloatArray = NDArray[np.float64]

# Weights of a replicate add up to about the population, however it was made.
_FAR = 0.1


def natural_order(name: str) -> list[tuple[int, int | str]]:
    """Sort key that reads digits as numbers: `rw_2` before `rw_10`."""
    parts = re.split(r"(\d+)", name)
    return [(0, int(part)) if part.isdigit() else (1, part) for part in parts]


def check_sums(sums: FloatArray, weights: FloatArray, factors: bool) -> None:
    """Question replicates whose weights do not add up to about the sum of the weights."""
    total, n = float(weights.sum()), float(weights.size)
    mean = float(sums.mean())
    if abs(mean / total - 1.0) <= _FAR:
        return
    if factors and abs(mean / float(weights @ weights) - 1.0) <= 0.5:
        advice = "They look like finished weights: leave `factors` out."
    elif not factors and (0.2 * n < mean < 5.0 * n or mean < 10.0):
        advice = "They look like factors that multiply the weight: say factors=True."
    else:
        advice = "Are these the right columns, the right weight, and the right implied decimals?"
    sums_to = f"the replicate weights sum to {mean:,.6g} on average, the weights to {total:,.6g}."
    warn(f"{sums_to} {advice}", DesignWarning)


def rank_of_deviations(
    frame: Frame,
    names: Sequence[str],
    weights: FloatArray,
    factors: bool,
    scale: float,
    enough: int,
) -> int:
    """Rank of the deviations of the replicates from the weight, at least up to `enough`.

    No variance estimate has more degrees of freedom than its replicates have directions. Some rows
    show enough of them as a rule; only where they do not are all rows looked at.
    """
    count = len(names)
    some_rows = np.linspace(0, weights.size - 1, min(weights.size, 4 * count)).astype(np.intp)
    sampled = np.unique(some_rows)
    if sampled.size < weights.size:
        found = _rank(_deviations(frame, names, weights, factors, scale, sampled))
        if found >= min(enough, count):
            return found
    gram = np.zeros((count, count))
    step = max(4_000_000 // count, 1)
    for start in range(0, weights.size, step):
        rows = np.arange(start, min(start + step, weights.size))
        part = _deviations(frame, names, weights, factors, scale, rows)
        gram += part.T @ part
    return _rank(gram)


def _deviations(
    frame: Frame,
    names: Sequence[str],
    weights: FloatArray,
    factors: bool,
    scale: float,
    rows: NDArray[np.intp],
) -> FloatArray:
    """`w_r - w` of some rows, shape (rows, replicates)."""
    block = np.empty((rows.size, len(names)))
    for position, name in enumerate(names):
        values = numbers(frame, name, "replicates")[rows] * scale
        block[:, position] = values * weights[rows] if factors else values
    return block - weights[rows, None]


def _rank(matrix: FloatArray) -> int:
    singular = np.linalg.svd(matrix, compute_uv=False)
    # Finished weights are printed with some digits; less than that is no direction of its own.
    return int(np.count_nonzero(singular > 1e-7 * singular[0])) if singular[0] > 0 else 0
