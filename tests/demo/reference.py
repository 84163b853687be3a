"""The verdict on one comparison, worked out the long way: a road apart from the package.

Record by record, with scipy.stats: no tally, no matrices of totals, no code of the package. Only
what the demo's comparisons need is here: one stage of clusters drawn with replacement, the
difference of two groups that do not overlap, two-sided at 95 %.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from scipy import stats

from svyrates.demo import Showcase

__all__ = ["Answer", "answer"]

_ALPHA = 0.05
_TOLERANCE = 0.025
_Z = float(stats.norm.ppf(1.0 - _ALPHA / 2.0))


@dataclass(frozen=True)
class Answer:
    """What the design says, what the simple formula says, and the verdict."""

    verdict: str
    difference: float
    se: float
    df: int
    p: float
    simple_difference: float
    simple_se: float
    simple_p: float
    shift_p: float
    s_u: float
    coverage: float


def answer(survey: pd.DataFrame, show: Showcase) -> Answer:
    """Judge one comparison in one wave's records, `wt`, `district` and `block` as the design."""
    yes = survey[show.outcome].isin(show.success) if show.success else survey[show.outcome] == 1
    known = survey[show.outcome].notna() & survey[show.by].notna()
    sides = [
        (known & (survey[show.by] == label)).to_numpy(bool) for label in (show.group, show.versus)
    ]
    y = yes.to_numpy(bool)
    weight = survey["wt"].to_numpy(float)
    one = np.ones_like(weight)
    p = [float(np.average(y[side], weights=weight[side])) for side in sides]
    u = [float(np.average(y[side])) for side in sides]
    n = [int(side.sum()) for side in sides]
    of_p = _influence(y, weight, sides, p)
    of_u = _influence(y, one, sides, u)
    se, s_u, s_shift = _standard_errors(survey, of_p, of_u, of_u - of_p)
    df = min(_df(survey, side) for side in sides)
    determined = df > 0 and all(0.0 < rate < 1.0 for rate in (*p, *u))
    return _judge(p[0] - p[1], se, df, u, n, s_u, s_shift, determined=determined)


def _influence(
    y: np.ndarray, weight: np.ndarray, sides: list[np.ndarray], rate: list[float]
) -> np.ndarray:
    """Linearized value of the difference of two weighted rates, for every record."""
    values = np.zeros(y.size)
    for side, sign, level in zip(sides, (1.0, -1.0), rate, strict=True):
        values[side] += sign * weight[side] * (y[side] - level) / weight[side].sum()
    return values


def _standard_errors(survey: pd.DataFrame, *values: np.ndarray) -> list[float]:
    """Of totals, from the clusters of every stratum: `n_h` times their sample variance, summed."""
    where = [survey["district"].to_numpy(), survey["block"].to_numpy()]
    total = pd.DataFrame(np.stack(values, axis=1)).groupby(where).sum().groupby(level=0)
    return [float(v) for v in np.sqrt((total.count() * total.var(ddof=1)).sum())]


def _df(survey: pd.DataFrame, side: np.ndarray) -> int:
    held = survey.loc[side, ["district", "block"]].drop_duplicates()
    return len(held) - held["district"].nunique()


def _judge(
    d: float,
    se: float,
    df: int,
    u: list[float],
    n: list[int],
    s_u: float,
    s_shift: float,
    *,
    determined: bool,
) -> Answer:
    d_u = u[0] - u[1]
    pooled = (n[0] * u[0] + n[1] * u[1]) / sum(n)
    pooled_se = np.sqrt(pooled * (1.0 - pooled) * (1.0 / n[0] + 1.0 / n[1]))
    simple_se = float(np.sqrt(sum(r * (1.0 - r) / size for r, size in zip(u, n, strict=True))))
    simple_p = float(2.0 * stats.norm.sf(abs(d_u) / pooled_se))
    if not determined:
        nothing = float("nan")
        return Answer(
            "undetermined", d, se, df, nothing, d_u, simple_se, simple_p, nothing, s_u, nothing
        )
    p = float(2.0 * stats.t.sf(abs(d) / se, df))
    shift_p = float(2.0 * stats.t.sf(abs(d_u - d) / s_shift, df))
    bias = np.sqrt(max(0.0, (d_u - d) ** 2 - s_shift**2)) if shift_p < _ALPHA else 0.0
    reach = _Z * simple_se
    coverage = float(stats.norm.cdf((reach - bias) / s_u) - stats.norm.cdf((-reach - bias) / s_u))
    far = stats.chi2.interval(1.0 - _ALPHA, df)
    blame = (
        abs(coverage - (1.0 - _ALPHA)) > _TOLERANCE
        and not far[0] <= df * (s_u / simple_se) ** 2 <= far[1]
    )
    design_finds, simple_finds, shifted = p < _ALPHA, simple_p < _ALPHA, shift_p < _ALPHA
    if d * d_u < 0 and (design_finds or simple_finds) and shifted:
        verdict = "opposite"
    elif simple_finds and not design_finds:
        verdict = "false-alarm"
    elif design_finds and not simple_finds:
        verdict = "missed"
    elif shifted:
        verdict = "shifted"
    elif blame:
        verdict = "overconfident" if coverage < 1.0 - _ALPHA else "underconfident"
    else:
        verdict = "agrees"
    return Answer(verdict, d, se, df, p, d_u, simple_se, simple_p, shift_p, s_u, coverage)
