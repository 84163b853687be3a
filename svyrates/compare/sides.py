"""Arrays of both sides of every pair in a block, with their joint covariance."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from svyrates.compare.pairs import PairBlock
from svyrates.rates.source import SideRates, freedom_of
from svyrates.totals import ZERO, Linear

__all__ = ["Joint", "read_joint"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]


@dataclass(frozen=True)
class Joint:
    """Both sides of every pair: `[p_1, p_2, u_1, u_2]` and their covariance.

    Attributes
    ----------
    values : (4, pairs) weighted and unweighted rates of the two sides
    cov : (4, 4, pairs) their covariances; zero for a fixed number
    n, y, weighted_n, kish : (2, pairs) sizes of the two sides; NaN for a fixed number
    side_df : (2, pairs) degrees of freedom of each side's rate; infinite for a fixed number
    certain : (2, pairs) rate exactly 0 or 1
    undefined : (2, pairs) variance undefined for another reason, or side empty
    fixed : the number compared with, if any
    no_variance : why a variance may be missing, as part of a sentence
    found : rates of the sides, for what needs their spread
    """

    values: FloatArray
    cov: FloatArray
    n: FloatArray
    y: FloatArray
    weighted_n: FloatArray
    kish: FloatArray
    side_df: FloatArray
    certain: NDArray[np.bool_]
    undefined: NDArray[np.bool_]
    fixed: float | None
    no_variance: str
    found: SideRates
    plus: IntArray
    minus: IntArray

    def contrast_variance(self, weights: FloatArray) -> FloatArray:
        """Variance of `Σ weights·[p_1, p_2, u_1, u_2]`, weights (4, pairs).

        What rounding leaves of zero is zero; NaN where a side has no variance.
        """
        weighted = weights[:, None] * weights[None, :] * self.cov
        variance = weighted.sum(axis=(0, 1))
        formed_from = np.abs(np.einsum("iip->p", weighted))
        variance = np.where(variance < ZERO * formed_from, 0.0, variance)
        missing = (self.certain | self.undefined).any(axis=0)
        return np.where(missing, np.nan, variance)

    def satterthwaite(self, slope: FloatArray) -> FloatArray:
        """Satterthwaite df of the difference of the sides, each times its `slope` (sides,)."""
        m = self.found.rate.size
        scale = sparse.diags_array(np.where(np.isfinite(slope), slope, 0.0))
        nothing = sparse.csr_array((m, m))
        on_scale = Linear(sparse.block_array([[scale, nothing]], format="csr"))
        spread = self.found.stacked.apply(on_scale).spread
        return spread.satterthwaite(self.plus, self.minus)


def read_joint(block: PairBlock, fixed: float | None, df: str | float) -> Joint:
    """Fetch both sides of every pair in a block."""
    found = block.source.sides(block.sides)
    covariance = found.covariance()
    m = found.rate.size
    plus, minus = block.plus, block.minus
    there = np.where(minus >= 0, minus, 0)
    real = minus >= 0
    index = np.stack((plus, there, plus + m, there + m))
    cov = covariance[index[:, None], index[None, :]]
    if fixed is not None:
        cov[[1, 3]] = 0.0
        cov[:, [1, 3]] = 0.0
    number = np.nan if fixed is None else fixed
    values = np.stack(
        (
            found.rate[plus],
            np.where(real, found.rate[there], number),
            found.unweighted[plus],
            np.where(real, found.unweighted[there], number),
        )
    )
    side_df = freedom_of(found, block.source, df)
    no_spread = (covariance.diagonal()[:m] == 0.0) & (found.units < 2) & ~found.certain
    gaps = np.isnan(covariance.diagonal()[:m]) & ~found.certain
    undefined = (found.n == 0) | no_spread | gaps

    def both(of_side: FloatArray, otherwise: float) -> FloatArray:
        return np.stack((of_side[plus], np.where(real, of_side[there], otherwise)))

    return Joint(
        values=values,
        cov=cov,
        n=both(found.n, np.nan),
        y=both(found.y, np.nan),
        weighted_n=both(found.weighted_n, np.nan),
        kish=both(found.kish_factor, np.nan),
        side_df=both(side_df, np.inf),
        certain=both(found.certain.astype(float), 0.0) > 0,
        undefined=both(undefined.astype(float), 0.0) > 0,
        fixed=fixed,
        no_variance=block.source.no_variance,
        found=found,
        plus=plus,
        minus=minus,
    )
