"""`homogeneity_test`: whether all rates are equal.

Sources: Rao & Scott (1981, 1984) for the corrections of Pearson's statistic, with the F forms of
Thomas & Rao (1987); Korn & Graubard (1990) for the adjusted Wald F.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any, Literal, get_args

import numpy as np
from numpy.typing import NDArray
from scipy import special

from svyrates.compare.contrast import read_options
from svyrates.compare.contrasts import fetch_rates
from svyrates.compare.homogeneity_table import HomogeneityTable
from svyrates.compare.pairs import by_level, held_columns
from svyrates.compare.verdict import TOLERANCE, outside_chi_square
from svyrates.errors import ComparisonError, some
from svyrates.rates.source import SideRates
from svyrates.rates.table import RateTable
from svyrates.totals import ZERO, joint_wald

__all__ = ["homogeneity_test"]

FloatArray = NDArray[np.float64]
HomogeneityMethod = Literal["second-order", "first-order", "wald"]


def homogeneity_test(
    rates: RateTable,
    *,
    within: str | Sequence[str] | None = None,
    method: HomogeneityMethod = "second-order",
    level: float | None = None,
) -> HomogeneityTable:
    """Test whether all groups have the same rate.

    Parameters
    ----------
    rates : RateTable
    within : str or list of str, optional
        Columns held fixed: one test in each of their levels. All grouping columns but the last by
        default.
    method : {"second-order", "first-order", "wald"}
        Which test the columns `p` and `verdict` speak of: Pearson's statistic with the second or
        first-order correction of Rao and Scott, or the adjusted Wald F. All three are in the table.
    level : float, optional
        Confidence level; tests are at 1 - level. The table's own by default.

    Returns
    -------
    HomogeneityTable

    Raises
    ------
    ComparisonError
        For fewer than two groups, overlapping groups or adjusted rates (but for the Wald test), and
        options out of range.

    Notes
    -----
    `X² = n Σ π_k (p_k - p̄)²/(p̄(1 - p̄))` with the groups' weighted shares `π_k`. Its generalised
    design effects δ are the eigenvalues of the design-based covariance of the differences
    `p_k - p_1` over their multinomial one. First order: `X²/Σδ` as F on `k - 1` and `(k - 1) df`;
    second order: the same as F on `ν = (Σδ)²/Σδ²` and `ν df`. The df are the smallest of the
    groups'.

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> test = sr.homogeneity_test(sr.estimate_rates(design, "damp", by="tenure"))
    >>> len(test.to_frame())
    1

    One test; ``print(test)`` shows it with Pearson's chi-square of the raw counts beside it.
    """
    asked = read_options(rates, "two-sided", 0.0, level, "none", "unweighted", "rate")
    if method not in get_args(HomogeneityMethod):
        raise ComparisonError(
            f"method must be one of {some(get_args(HomogeneityMethod))}; got {method!r}."
        )
    if rates.overlapping and method != "wald":
        raise ComparisonError(
            "The groups overlap, and Rao and Scott's tests need groups that do not: use "
            "method='wald'."
        )
    if rates.crude_rate is not None and method != "wald":
        raise ComparisonError(
            "Rao and Scott's tests are of crude rates, and these are adjusted: use method='wald'."
        )
    names = ["outcome", *rates.columns]
    rows = [(outcome, *labels) for outcome in rates.outcomes for labels in rates.groups]
    held = held_columns(rates, names, within)
    shown = [i for i, name in enumerate(held) if name != "outcome" or len(rates.outcomes) > 1]
    results, levels = [], []
    for labels, members in by_level(names, rows, held).items():
        if len(members) < 2:
            raise ComparisonError("There is one group only: nothing to compare.")
        found, df, no_variance = fetch_rates(rates, members)
        result = _test(found, df, method, 1.0 - asked.level, rates.overlapping)
        if np.isnan(found.covariance()).any():
            result = replace(result, note=no_variance)
        results.append(result)
        levels.append(tuple(labels[i] for i in shown))
    arrays: dict[str, Any] = {
        name: (
            tuple(getattr(one, name) for one in results)
            if name in ("design_effects", "verdict", "note")
            else np.array([getattr(one, name) for one in results], dtype=np.float64)
        )
        for name in results[0].__dataclass_fields__
    }
    return HomogeneityTable(
        held=tuple(held[i] for i in shown),
        levels=tuple(levels),
        method=method,
        level=asked.level,
        rates=rates,
        **arrays,
    )


@dataclass(frozen=True)
class _Test:
    """One row of the table; see `HomogeneityTable`."""

    groups: float
    n: float
    pooled_rate: float
    chi_square: float
    design_effects: tuple[float, ...]
    statistic: float
    df1: float
    df2: float
    p: float
    first_order_p: float
    second_order_p: float
    wald_p: float
    simple_chi_square: float
    simple_p: float
    simple_error_rate: float
    shift_p: float
    verdict: str
    note: str


def _test(
    found: SideRates, df_of_side: FloatArray, method: str, alpha: float, overlapping: bool
) -> _Test:
    there = found.n > 0
    k = int(there.sum())
    both = np.tile(there, 2)
    covariance = found.covariance()[np.ix_(both, both)]
    p, u = found.rate[there], found.unweighted[there]
    n, y = found.n[there], found.y[there]
    df = float(df_of_side[there].min()) if k else float("nan")
    notes = []
    if k < found.n.size:
        notes.append(f"{found.n.size - k} groups are empty and left out")
    if k < 2:
        return _nothing(float(k), "; ".join([*notes, "fewer than two groups with members"]))
    if found.certain.any():
        notes.append(
            "a rate is exactly 0 or 1: its variance counts as zero, so the test may claim too much"
        )
    share = found.weighted_n[there] / found.weighted_n[there].sum()
    if np.isnan(share).any():
        share = n / n.sum()
    pooled = float(share @ p)
    c = np.hstack((-np.ones((k - 1, 1)), np.eye(k - 1)))
    v = c @ covariance[:k, :k] @ c.T
    s = c @ covariance[k:, k:] @ c.T
    shift = np.hstack((-c, c))
    size = float(n.sum())
    with np.errstate(invalid="ignore", divide="ignore"):
        chi_square = size * float(share @ (p - pooled) ** 2) / (pooled * (1.0 - pooled))
    delta = _design_effects(v, share, pooled, size)
    if overlapping:
        chi_square, delta = float("nan"), np.full(k - 1, np.nan)
    first = _corrected(chi_square, delta, df, second=False)
    second = _corrected(chi_square, delta, df, second=True)
    wald = joint_wald(c @ p, v, df)
    if found.certain.any():
        wald = joint_wald(c @ p, np.full_like(v, np.nan), df)
    chosen = {
        "first-order": first,
        "second-order": second,
        "wald": (wald.f, wald.df1, wald.df2, wald.p),
    }[method]
    simple, simple_p = _pearson(n, y)
    crude = float(y.sum() / size)
    simple_delta = _design_effects(s, n / size, crude, size)
    moved = _shift_p(c @ (u - p), shift @ covariance @ shift.T, v + s, df)
    error_rate = _error_rate(simple_delta, k - 1, alpha)
    if not chosen[2] > 0:
        notes.append("too few degrees of freedom for this test")
    elif df < 8:
        notes.append("fewer than 8 degrees of freedom: the covariance is itself uncertain")
    verdict = _judge(chosen[3], simple_p, moved, error_rate, simple_delta, df, alpha)
    return _Test(
        float(k), size, pooled, chi_square, tuple(delta.tolist()), *chosen, first[3], second[3],
        wald.p, simple, simple_p, error_rate, moved, verdict, "; ".join(notes),
    )  # fmt: skip


def _nothing(k: float, note: str) -> _Test:
    nan = float("nan")
    return _Test(
        k, nan, nan, nan, (), nan, nan, nan, nan, nan, nan, nan, nan, nan, nan, nan,
        "undetermined", note,
    )  # fmt: skip


def _shift_p(shift: FloatArray, covariance: FloatArray, formed: FloatArray, df: float) -> float:
    """Whether the unweighted contrasts differ from the weighted ones."""
    # Where all weights are equal rounding is all that separates them.
    if (covariance.diagonal() <= ZERO * formed.diagonal()).any():
        return float("nan")
    return joint_wald(shift, covariance, df).p


def _design_effects(v: FloatArray, share: FloatArray, pooled: float, n: float) -> FloatArray:
    """Generalised design effects: eigenvalues of the contrasts' covariance over the simple one."""
    if not 0.0 < pooled < 1.0 or not np.isfinite(v).all():
        return np.full(share.size - 1, np.nan)
    c = np.hstack((-np.ones((share.size - 1, 1)), np.eye(share.size - 1)))
    simple = pooled * (1.0 - pooled) / n * (c / share) @ c.T
    root = np.linalg.cholesky(simple)
    half = np.linalg.solve(root, v)
    return np.linalg.eigvalsh(np.linalg.solve(root, half.T))[::-1]


def _corrected(
    chi_square: float, delta: FloatArray, df: float, *, second: bool
) -> tuple[float, float, float, float]:
    """F, its two df and p."""
    total = float(delta.sum())
    nan = float("nan")
    if not total > 0 or np.isnan(chi_square):
        return nan, nan, nan, nan
    nu = total**2 / float(delta @ delta) if second else float(delta.size)
    f, df2 = chi_square / total, nu * df
    if not df2 > 0:
        return nan, nu, df2, nan
    if np.isinf(df2):
        return f, nu, df2, float(special.chdtrc(nu, f * nu))
    return f, nu, df2, float(special.fdtrc(nu, df2, f))


def _pearson(n: FloatArray, y: FloatArray) -> tuple[float, float]:
    """Pearson's chi-square of the raw counts."""
    crude = y.sum() / n.sum()
    if not 0.0 < crude < 1.0:
        return float("nan"), float("nan")
    square = float(((y - n * crude) ** 2 / (n * crude * (1.0 - crude))).sum())
    return square, float(special.chdtrc(n.size - 1, square))


def _error_rate(delta: FloatArray, q: int, alpha: float) -> float:
    """How often Pearson's test rejects equal rates: its statistic is about `(Σδ/ν) χ²_ν`."""
    total = float(delta.sum())
    if not total > 0:
        return float("nan")
    nu = total**2 / float(delta @ delta)
    return float(special.chdtrc(nu, special.chdtri(q, alpha) * nu / total))


def _judge(
    p: float, simple_p: float, shift_p: float, error_rate: float, delta: FloatArray, df: float,
    alpha: float,
) -> str:  # fmt: skip
    """The verdict on Pearson's test, the first that applies."""
    if np.isnan(p) or np.isnan(simple_p) or np.isnan(error_rate):
        return "undetermined"
    if simple_p < alpha <= p:
        return "false-alarm"
    if p < alpha <= simple_p:
        return "missed"
    if shift_p < alpha:
        return "shifted"
    q = delta.size
    blame = outside_chi_square(np.array([delta.mean()]), np.array([q * df]), alpha)[0]
    if abs(error_rate - alpha) > TOLERANCE and blame:
        return "overconfident" if error_rate > alpha else "underconfident"
    return "agrees"
