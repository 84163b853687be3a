"""Small samples of two waves from the same clusters, and what independent waves must fulfil."""

from __future__ import annotations

import warnings
from typing import Any

import numpy as np
import pandas as pd

import svyrates as sr

__all__ = [
    "EXACT",
    "LABELS",
    "assert_independent",
    "change_of",
    "each_alone",
    "one_design",
    "one_frame",
    "two_waves",
]

LABELS = ("2021", "2024")
EXACT = {"rtol": 1e-10, "atol": 1e-18}


def one_frame(seed: int, *, clusters: int = 4, strata: str = "abc") -> pd.DataFrame:
    """Cluster effects last from wave to wave; the people in them do not."""
    lasting = np.random.default_rng(99).uniform(0.05, 0.75, (26, 40))
    rng = np.random.default_rng(seed)
    rows = [
        (s, c, rng.uniform(1, 9), rng.choice(["x", "y"]), rng.random() < lasting[ord(s) - 97, c])
        for s in strata
        for c in range(clusters)
        for _ in range(int(rng.integers(6, 14)))
    ]
    data = pd.DataFrame(rows, columns=["s", "c", "w", "g", "y"])
    return data.astype({"y": int, "w": float})


def one_design(data: Any, **options: Any) -> sr.SampleDesign:
    return sr.SampleDesign(data, **{"weight": "w", "strata": "s", "clusters": "c"} | options)


def two_waves(*, first: int = 1, **options: Any) -> dict[str, sr.SampleDesign]:
    return {label: one_design(one_frame(first + i), **options) for i, label in enumerate(LABELS)}


def change_of(rates: sr.RateTable, **options: Any) -> sr.ComparisonTable:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
        return sr.compare_rates(rates, **options)


def each_alone(waves: dict[str, sr.SampleDesign], by: Any = None) -> list[sr.RateTable]:
    return [sr.estimate_rates(design, "y", by=by) for design in waves.values()]


def assert_independent(waves: dict[str, sr.SampleDesign]) -> None:
    """Every rate as estimated alone, nothing shared, and the variances add up."""
    combined = sr.combine_waves(waves)
    rates = sr.estimate_rates(combined, "y", by=["wave", "g"])
    alone = each_alone(waves, "g")
    for column in ("rate", "se", "df", "low", "high"):
        expected = np.concatenate([getattr(table, column) for table in alone])
        if column in ("df", "low", "high") and combined.replicates is not None:
            continue
        np.testing.assert_allclose(getattr(rates, column), expected, **EXACT, err_msg=column)
    half = rates.rate.size // 2
    np.testing.assert_allclose(rates.covariance.to_numpy()[:half, half:], 0.0, atol=1e-18)
    change = change_of(sr.estimate_rates(combined, "y", by="wave"))
    one, other = (table.se[0] ** 2 for table in each_alone(waves))
    np.testing.assert_allclose(change.se[0] ** 2, one + other, **EXACT)
