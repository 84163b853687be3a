"""The verdict on the simple formula, comparison by comparison."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import special

from svyrates.compare.hypothesis import Hypothesis
from svyrates.compare.simple import SimpleFormula

__all__ = ["MEANINGS", "MISLEADING", "VERDICTS", "judge", "meaning"]

FloatArray = NDArray[np.float64]

MEANINGS: dict[str, str] = {
    "undetermined": "too little sample to judge",
    "opposite": "the simple formula points the wrong way",
    "false-alarm": "the simple formula finds {finding} that the design does not support",
    "missed": "the simple formula overlooks {finding} that the design supports",
    "shifted": "same decision, but without weights the difference is another one",
    "overconfident": "same decision, but the simple interval is too narrow",
    "underconfident": "same decision, but the simple interval is too wide",
    "agrees": "the simple formula serves here",
}
VERDICTS: tuple[str, ...] = tuple(MEANINGS)
MISLEADING: tuple[str, ...] = VERDICTS[1:-1]


def meaning(verdict: str, finding: str = "a difference") -> str:
    """A verdict in words; `finding` is what the test looks for."""
    return MEANINGS[verdict].format(finding=finding)


# Real coverage may part from the nominal one by this much before it is called wrong.
TOLERANCE = 0.025
LITTLE_POWER_DF = 12


def judge(
    design_estimate: FloatArray,
    design_variance: FloatArray,
    design_p: FloatArray,
    simple: SimpleFormula,
    df: FloatArray,
    asked: Hypothesis,
) -> NDArray[np.object_]:
    """Give every pair its verdict, the first that applies in the order of `VERDICTS`.

    Parameters
    ----------
    design_estimate, design_variance, design_p : (pairs,) on the measure's scale
    simple : the simple formula's answers
    df : (pairs,)
    asked : the test's question; equivalence has no opposite sides

    Notes
    -----
    A variance estimated on few degrees of freedom may not be blamed on the simple formula: the two
    last verdicts also ask that `df S_u²/S²` lie outside the central 1 - α range of χ² on df.
    """
    alpha = 1.0 - asked.level
    undetermined = (
        np.isnan(design_p) | np.isnan(simple.p) | np.isnan(simple.s_u) | np.isnan(design_variance)
    )
    with np.errstate(invalid="ignore", divide="ignore"):
        design_finds = design_p < alpha
        simple_finds = simple.p < alpha
        shifted = simple.shift_p < alpha
        across = (design_estimate - asked.null) * (simple.on_scale - asked.null) < 0
        ratio = (simple.s_u / simple.se) ** 2
        off = np.abs(simple.coverage - asked.coverage) > TOLERANCE
        blame = off & outside_chi_square(ratio, df, alpha)
        too_narrow = simple.coverage < asked.coverage
    conditions = [
        undetermined,
        across & (design_finds | simple_finds) & shifted,
        simple_finds & ~design_finds,
        design_finds & ~simple_finds,
        shifted,
        blame & too_narrow,
        blame & ~too_narrow,
    ]
    return np.select(conditions, VERDICTS[:-1], default=VERDICTS[-1]).astype(object)


def outside_chi_square(ratio: FloatArray, df: FloatArray, alpha: float) -> NDArray[np.bool_]:
    """Whether `df ratio` lies outside the central 1 - α range of χ² on df."""
    finite = np.where(np.isfinite(df), df, 1.0)
    below = special.chdtr(finite, finite * ratio)
    outside = (below < alpha / 2.0) | (below > 1.0 - alpha / 2.0)
    return np.asarray(np.where(np.isinf(df), ratio != 1.0, outside))
