"""How far an axis reaches, and its ticks."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

__all__ = ["extent_of_rates", "plain_ticks", "ratio_ticks", "spread_of"]

FloatArray = NDArray[np.float64]

# Round numbers of a ratio, coarse to fine.
_RATIOS = (
    np.array([10.0**power for power in range(-12, 13, 2)]),
    np.array([10.0**power for power in range(-12, 13)]),
    np.array([step * 10.0**power for power in range(-6, 7) for step in (1, 2, 5)]),
    np.array([0.2, 0.25, 0.33, 0.5, 0.67, 0.8, 1.0, 1.25, 1.5, 2.0, 3.0, 4.0, 5.0]),
)


def extent_of_rates(low: FloatArray, high: FloatArray) -> tuple[float, float]:
    """Ends of an axis of rates: zero is in it unless that would waste most of the room."""
    if not low.size:
        return 0.0, 1.0
    least, most = float(low.min()), float(high.max())
    pad = 0.04 * max(most - least, 0.01)
    start = 0.0 if least < 0.6 * most else max(least - pad, 0.0)
    return start, min(most + pad, 1.0)


def spread_of(
    shown: Sequence[FloatArray], must: Sequence[float], *, ratio: bool
) -> tuple[float, float]:
    """Ends of an axis that holds every finite value shown, and those that must be in it."""
    values = np.concatenate([*shown, np.asarray(must, dtype=np.float64)])
    values = values[np.isfinite(values) & ((values > 0) | (not ratio))]
    scaled = np.log(values) if ratio else values
    least, most = float(scaled.min()), float(scaled.max())
    pad = 0.05 * (most - least) or 0.1
    ends = np.array([least - pad, most + pad])
    low, high = (np.exp(ends) if ratio else ends).tolist()
    return low, high


def plain_ticks(
    ends: tuple[float, float], unit: str = "", *, signed: bool = False
) -> tuple[FloatArray, list[str]]:
    """Four to seven ticks at round proportions, written times 100 if signed or with a unit."""
    from matplotlib.ticker import MaxNLocator

    slack = 1e-9 * (ends[1] - ends[0])
    ticks = np.array([])
    for most in range(4, 9):
        found = np.asarray(MaxNLocator(nbins=most, steps=[1, 2, 2.5, 5, 10]).tick_values(*ends))
        ticks = np.round(found[(found >= ends[0] - slack) & (found <= ends[1] + slack)], 12)
        if ticks.size >= 4:
            break
    times = 100.0 if signed or unit else 1.0
    sign = "+" if signed else ""
    texts = [f"{times * tick:{sign if tick > 0 else ''}.6g}{unit}" for tick in ticks]
    return ticks, [text.replace("-", "−") for text in texts]


def ratio_ticks(ends: tuple[float, float]) -> tuple[FloatArray, list[str]]:
    """Three to seven ticks at round ratios."""
    low, high = ends
    for numbers in _RATIOS:
        ticks = numbers[(numbers >= low) & (numbers <= high)]
        if 4 <= ticks.size <= 7:
            return ticks, [f"{tick:g}" for tick in ticks]
    return plain_ticks(ends)
