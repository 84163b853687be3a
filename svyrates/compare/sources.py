"""Why the design-based variance differs from the simple one, step by step."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from svyrates.compare.measures import MEASURES
from svyrates.compare.pairs import PairBlock

if TYPE_CHECKING:
    from svyrates.compare.table import ComparisonTable

__all__ = ["STEPS", "step_ratios", "variance_sources"]

FloatArray = NDArray[np.float64]
STEPS = ("weights", "clusters", "covariance", "strata")


def variance_sources(table: ComparisonTable) -> pd.DataFrame:
    """One row per comparison; see `ComparisonTable.variance_sources`."""
    ratios = step_ratios(table)
    names, rows = table.label_columns()
    data: dict[str, object] = {
        name: [row[position] for row in rows] for position, name in enumerate(names)
    }
    data |= {"group": list(table.group), "versus": list(table.versus)}
    data |= dict(zip(STEPS, ratios, strict=True))
    return pd.DataFrame(data)


def step_ratios(table: ComparisonTable) -> FloatArray:
    """Successive variance ratios, shape (4, pairs), whose product is `variance_ratio`.

    With replicates the last is NaN: what they know of strata is in the step of the clusters.
    """
    middle = np.concatenate([_steps(table.measure, block) for block in table.blocks], axis=1)
    chain = np.vstack((table.simple_se**2, middle, table.se**2))
    with np.errstate(invalid="ignore", divide="ignore"):
        ratios = chain[1:] / chain[:-1]
    apart = np.repeat(
        [block.source.tells_strata_apart for block in table.blocks],
        [len(block.group) for block in table.blocks],
    )
    # Replicates show clusters and strata together; their step holds both.
    ratios[-1] = np.where(apart, ratios[-1], np.nan)
    return np.where(np.isnan(table.variance_ratio), np.nan, ratios)


def _steps(measure: str, block: PairBlock) -> FloatArray:
    """Variance of each difference for independent records, units apart, and units together."""
    if not block.source.knows_records:
        return np.full((3, block.plus.size), np.nan)
    records = block.source.estimates(block.sides, "independent-records")
    units = block.source.estimates(block.sides, "unstratified")
    m = block.sides.shape[0]
    slope = np.nan_to_num(MEASURES[measure].slope(records.values[:m]), posinf=0.0)
    is_group = block.minus >= 0
    other = np.where(is_group, block.minus, 0)

    def apart(variance: FloatArray) -> FloatArray:
        scaled = slope**2 * variance
        return np.asarray(scaled[block.plus] + is_group * scaled[other])

    together = units.covariance()[block.plus, other]
    shared = is_group * slope[block.plus] * slope[other] * together
    of_records, of_units = apart(records.variance()[:m]), apart(units.variance()[:m])
    return np.stack((of_records, of_units, of_units - 2.0 * shared))
