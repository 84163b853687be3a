"""What a reader must know about a comparison, as short notes."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from svyrates.compare.sides import Joint
from svyrates.compare.simple import ENOUGH_VARIANCE, SimpleFormula
from svyrates.compare.verdict import LITTLE_POWER_DF

__all__ = ["comparison_notes"]

FloatArray = NDArray[np.float64]

_FEW_DF = 8


def comparison_notes(
    joint: Joint,
    simple: SimpleFormula,
    df: FloatArray,
    se: FloatArray,
    measure: str,
    limits: str,
) -> NDArray[np.object_]:
    """One text per pair, parts joined by "; ", empty where there is nothing to say."""
    certain = joint.certain.any(axis=0)
    empty = (joint.n == 0).any(axis=0)
    one_unit = joint.undefined.any(axis=0) & ~empty
    gaps = one_unit & np.isnan(joint.cov[[0, 1], [0, 1]]).any(axis=0)
    no_df = ~(df > 0) & ~empty & ~one_unit
    rates = joint.values[:2]
    with np.errstate(invalid="ignore", divide="ignore"):
        variance = np.stack((joint.cov[0, 0], joint.cov[1, 1]))
        effective = np.minimum(rates * (1.0 - rates) / variance, joint.n) * rates * (1.0 - rates)
        thin = (effective < ENOUGH_VARIANCE).any(axis=0) & ~certain
    usable = ~(certain | empty | one_unit | no_df)
    recovered = "limits recovered from the groups' own, p where they touch the null"
    of_ratio = "a rate is exactly 0 or 1, so the ratio has no variance"
    large_share = (
        "a sample is 5% or more of its population, too much for the simple formula "
        "(common practice)"
    )
    one_each = "one sampling unit with members in each stratum"
    conditions = [
        (empty, "too little sample for this test: a group is empty"),
        (one_unit & ~gaps, "too little sample for this test: a group sits in one sampling unit"),
        (gaps, f"too little sample for this test: {joint.no_variance}"),
        (
            no_df,
            f"too little sample for this test: no degrees of freedom, {one_each}",
        ),
        (
            certain & ~empty,
            "too little sample to judge the simple formula: a rate is exactly 0 or 1"
            + (f"; {recovered}" if measure == "difference" else f"; {of_ratio}"),
        ),
        (
            np.isnan(joint.n[0]) | (np.isnan(joint.n[1]) & (joint.fixed is None)),
            "no sample size was published, so the simple formula cannot be computed",
        ),
        (usable & (se == 0.0), "the standard error is zero, so there is no test"),
        (
            usable & thin & (limits == "linear"),
            "rates near 0 or 1 or small groups: limits='recovered' is advised",
        ),
        (
            usable & (df < _FEW_DF),
            "fewer than 8 degrees of freedom: the standard error is itself uncertain",
        ),
        (
            usable & (df >= _FEW_DF) & (df < LITTLE_POWER_DF),
            "fewer than 12 degrees of freedom: the check of the simple interval has little power",
        ),
        (
            ~empty & simple.few,
            "the simple test's condition np(1 − p) ≥ 10 fails (common practice)",
        ),
        (
            ~empty & simple.large_share,
            large_share,
        ),
    ]
    # Few combinations occur among many pairs: each is worded once.
    code = sum(flag.astype(np.intp) << bit for bit, (flag, _) in enumerate(conditions))
    kinds, which = np.unique(code, return_inverse=True)
    texts = [
        "; ".join(text for bit, (_, text) in enumerate(conditions) if kind >> bit & 1)
        for kind in kinds.tolist()
    ]
    return np.array(texts, dtype=object)[which]
