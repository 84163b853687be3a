"""What a test comes to, in a few words."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from svyrates.compare.hypothesis import Hypothesis

__all__ = ["FINDINGS", "conclusions", "finding"]

FloatArray = NDArray[np.float64]
FINDINGS = {
    "greater": "that it is greater",
    "less": "that it is lower",
    "not-lower": "that it is not lower by the margin",
    "not-higher": "that it is not higher by the margin",
}


def finding(alternative: str, null: float, unity: float) -> tuple[str, str]:
    """What a test looks for: an article and a noun."""
    if alternative == "equivalent":
        return "", "equivalence"
    if alternative in ("not-lower", "not-higher"):
        return "", "non-inferiority"
    return "a ", "difference" if null == unity else f"departure from {null:g}"


def conclusions(
    asked: Hypothesis, alternative: str, p: FloatArray, equality_p: FloatArray
) -> NDArray[np.object_]:
    """One phrase per test, by its adjusted p-value.

    Equivalence and difference are asked together: where neither is found, there is no conclusion
    (the rule of the National Center for Health Statistics, Keppel & Pearcy 2004).
    """
    alpha = 1.0 - asked.level
    with np.errstate(invalid="ignore"):
        found, differs = p < alpha, equality_p < alpha
    if alternative == "equivalent":
        texts = np.select(
            [np.isnan(p), found & differs, found, differs],
            ["no test", "different, but within the margin", "equivalent within the margin",
             "different"],
            default="inconclusive",
        )  # fmt: skip
        return texts.astype(object)
    of = FINDINGS.get(alternative, "of a difference")
    if alternative in ("two-sided", "greater", "less") and not asked.is_equality:
        of = "against the null value"
    texts = np.select(
        [np.isnan(p), found], ["no test", f"evidence {of}"], default=f"no evidence {of}"
    )
    return texts.astype(object)
