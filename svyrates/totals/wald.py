"""Joint tests of several estimates by their covariance."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

__all__ = ["WaldTest", "joint_wald"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class WaldTest:
    """Joint test of several contrasts: F with `df1` and `df2` degrees of freedom.

    `F = (df - q + 1)/(df q) · d'V⁻¹d` on `q` and `df - q + 1` (Korn & Graubard 1990); NaN with too
    few degrees of freedom or a contrast without variance.
    """

    f: float
    df1: float
    df2: float
    p: float


def joint_wald(estimate: FloatArray, covariance: FloatArray, df: float) -> WaldTest:
    """Whether several contrasts are all zero; contrasts that repeat others do not count."""
    nothing = WaldTest(*[float("nan")] * 4)
    if not np.isfinite(covariance).all() or not np.isfinite(estimate).all():
        return nothing
    if (covariance.diagonal() <= 0.0).any():
        return nothing
    scale = np.sqrt(covariance.diagonal())
    values, vectors = np.linalg.eigh(covariance / np.outer(scale, scale))
    kept = values > 1e-9 * values[-1]
    q = float(kept.sum())
    df2 = df - q + 1.0
    if not df2 > 0:
        return WaldTest(float("nan"), q, df2, float("nan"))
    along = vectors[:, kept].T @ (estimate / scale)
    square = float((along**2 / values[kept]).sum())
    if np.isinf(df):
        return WaldTest(square / q, q, df2, float(special.chdtrc(q, square)))
    f = square * df2 / (df * q)
    return WaldTest(f, q, df2, float(special.fdtrc(q, df2, f)))
