"""`common_difference`: one difference between two groups over the levels of another factor."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import combinations
from typing import Any

import numpy as np
from numpy.typing import NDArray

from svyrates.compare.contrast import OneSided, read_options
from svyrates.compare.contrast_table import ContrastTable, assemble_contrasts
from svyrates.compare.contrasts import Combined, combine
from svyrates.compare.families import Tests
from svyrates.compare.hypothesis import Hypothesis, normal_df
from svyrates.compare.multiplicity import Multiplicity
from svyrates.compare.pairs import by_level, held_columns, matches
from svyrates.compare.simple import (
    SimpleFormula,
    counted_shift,
    real_coverage,
    real_error_rate,
)
from svyrates.compare.verdict import judge
from svyrates.errors import ComparisonError, some
from svyrates.rates.crude import CrudeRates
from svyrates.rates.limits import t_p_value, t_quantile
from svyrates.rates.source import freedom_of
from svyrates.rates.table import RateTable
from svyrates.totals import ByComplexStep, WaldTest, blocks, joint_wald

__all__ = ["common_difference"]

FloatArray = NDArray[np.float64]


def common_difference(
    rates: RateTable,
    versus: Any = None,
    *,
    within: str | Sequence[str] | None = None,
    alternative: OneSided = "two-sided",
    multiplicity: Multiplicity = "none",
    seed: int = 1,
    level: float | None = None,
) -> ContrastTable:
    """Estimate a difference between groups that is common to the levels of another factor.

    Parameters
    ----------
    rates : RateTable
        From `estimate_rates`, one outcome and at least two grouping columns; groups of the last are
        compared within the levels of the others.
    versus : group label, optional
        The group compared with; without it every pair.
    within : str or list of str, optional
        Columns held fixed; all grouping columns but the last by default.
    alternative, multiplicity, seed, level : see `contrast`

    Returns
    -------
    ContrastTable
        With a joint test that the difference is the same at every level, if there is one pair.

    Raises
    ------
    ComparisonError
        When the table has no second grouping column, or rates without the totals behind them.

    Notes
    -----
    Mantel & Haenszel's weights on weighted sizes: `d = Σ_s ω_s (p_1s - p_2s)/Σ_s ω_s` with
    `ω_s = N_1s N_2s/(N_1s + N_2s)`, levels with an empty group left out. Variance by linearization
    of the whole expression, the weights included, or under every replicate. The simple formula is
    the same on raw counts, with variance `Σ ω² (u_1(1 - u_1)/n_1 + u_2(1 - u_2)/n_2)/(Σ ω)²`. The
    joint test is Wald's F of the levels' differences.

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.estimate_rates(design, "damp", by=["terrain", "sex"])
    >>> sr.common_difference(rates).contrast
    ('woman − man',)

    The difference between the sexes, uplands compared with uplands and lowlands with lowlands.
    """
    asked = read_options(rates, alternative, 0.0, level, multiplicity, "unweighted", "rate")
    source = rates.blocks[0].source
    if len(rates.outcomes) > 1 or len(rates.columns) < 2 or not isinstance(source, CrudeRates):
        raise ComparisonError(
            "A common difference needs crude rates of one outcome by two grouping columns at "
            f"least; this table has {len(rates.outcomes)} outcomes by {some(rates.columns)}."
        )
    names = ["outcome", *rates.columns]
    rows = [(rates.outcomes[0], *labels) for labels in rates.groups]
    held = held_columns(rates, names, within)
    varying = [position for position, name in enumerate(names) if name not in held]
    members = list(by_level(names, rows, held).values())
    groups = [tuple(rows[row][position] for position in varying) for row in members[0]]
    pairs = _pairs(groups, versus)
    table = np.array(members)
    cells = np.array(rates.cells_of(rates.blocks[0]))[table]
    titles = [" / ".join(map(str, group)) for group in groups]
    found = _common(rates, source, cells, pairs, asked)
    joint = _same_everywhere(rates, table, pairs[0], asked) if len(pairs) == 1 else None
    columns = " × ".join(name for name in held if name != "outcome")
    return assemble_contrasts(
        rates, [found], title=f"Differences of rates of {rates.what(0)} common to {columns}",
        held=(), levels=[()] * len(pairs), names=[f"{titles[i]} − {titles[j]}" for i, j in pairs],
        asked=asked, scale="rate", multiplicity=multiplicity, seed=seed, joint=joint,
        joint_is=f"The difference is the same at every level of {columns}",
    )  # fmt: skip


def _pairs(groups: list[tuple[object, ...]], versus: Any) -> list[tuple[int, int]]:
    if len(groups) < 2:
        raise ComparisonError("There is one group only: nothing to compare.")
    if versus is None:
        return list(combinations(range(len(groups)), 2))
    other = [i for i, group in enumerate(groups) if matches(group, versus)]
    if not other:
        shown = [group[0] if len(group) == 1 else group for group in groups]
        raise ComparisonError(
            f"versus={versus!r} is not a group. The groups are {some(shown, 10)}."
        )
    return [(i, other[0]) for i in range(len(groups)) if i != other[0]]


def _common(
    rates: RateTable,
    source: CrudeRates,
    cells: NDArray[np.intp],
    pairs: list[tuple[int, int]],
    asked: Hypothesis,
) -> Combined:
    """Common differences of all pairs; `cells` is (levels, groups)."""
    first, second = cells[:, [i for i, _ in pairs]], cells[:, [j for _, j in pairs]]
    estimates = source.totals().apply(ByComplexStep(lambda at: _mantel_haenszel(at, first, second)))
    q = len(pairs)
    covariance = estimates.covariance()
    weighted, plain = np.split(estimates.values, 2)
    variance = covariance.diagonal()[:q].copy()
    sides = source.sides(source.rows_of(cells.ravel().tolist()))
    n, u = sides.n.reshape(cells.shape), sides.unweighted.reshape(cells.shape)
    of_pair = [(n[:, [i, j]] > 0).all(axis=1) for i, j in pairs]
    df = np.array([
        _freedom(source, cells[used][:, [i, j]], rates.df_rule)
        for used, (i, j) in zip(of_pair, pairs, strict=True)
    ])  # fmt: skip
    with np.errstate(invalid="ignore"):
        se = np.sqrt(variance)
    statistic, p = asked.test(weighted, se, df)

    def limits_at(level: float) -> tuple[FloatArray, FloatArray]:
        half = t_quantile(df, level) * se
        return weighted - half, weighted + half

    low, high = asked.limits(*limits_at(asked.pointwise))
    simple_se = np.array([_simple_se(n[:, [i, j]], u[:, [i, j]]) for i, j in pairs])
    moved = covariance[:q, :q] + covariance[q:, q:] - covariance[:q, q:] - covariance[q:, :q]
    simple = _simple(plain, weighted, simple_se, moved.diagonal(), covariance[q:, q:], df, asked)
    left_out = [int((~used).sum()) for used in of_pair]
    notes = [f"{k} levels with an empty group are left out" if k else "" for k in left_out]
    tests = Tests(
        p, t_p_value(statistic, df), se, df, lambda: covariance[:q, :q], np.eye(q), limits_at
    )
    return Combined(
        weighted, se, low, high, statistic, df, p, covariance[:q, :q], simple,
        judge(weighted, variance, p, simple, df, asked), np.array(notes, dtype=object), tests,
    )  # fmt: skip


def _freedom(source: CrudeRates, cells: NDArray[np.intp], rule: str | float) -> float:
    """The smaller df of the two groups, each over the levels in use; `cells` is (levels, 2)."""
    if not cells.size:
        return float("nan")
    unions = [source.row(dict.fromkeys(group.tolist(), 1.0)) for group in cells.T]
    return float(min(freedom_of(source.sides(side), source, rule)[0] for side in unions))


def _mantel_haenszel(at: Any, first: Any, second: Any) -> Any:
    """Weighted and unweighted common difference of each pair; at (..., 4 cells)."""
    n, y, weighted_n, weighted_y = blocks(at)
    parts = []
    for size, success in ((weighted_n, weighted_y), (n, y)):
        one, other = size[..., first], size[..., second]
        filled = (one.real > 0) & (other.real > 0)
        one, other = np.where(filled, one, 1.0), np.where(filled, other, 1.0)
        weight = np.where(filled, one * other / (one + other), 0.0)
        gap = success[..., first] / one - success[..., second] / other
        total = weight.sum(axis=-2)
        total = np.where(total == 0.0, np.nan, total)
        parts.append((weight * gap).sum(axis=-2) / total)
    return np.concatenate(parts, axis=-1)


def _simple_se(n: FloatArray, u: FloatArray) -> float:
    used = (n > 0).all(axis=1)
    n, u = n[used], u[used]
    weight = n[:, 0] * n[:, 1] / n.sum(axis=1)
    variance = (u * (1.0 - u) / n).sum(axis=1)
    return float(np.sqrt((weight**2 * variance).sum()) / weight.sum()) if n.size else float("nan")


def _simple(
    plain: FloatArray,
    weighted: FloatArray,
    se: FloatArray,
    moved: FloatArray,
    true: FloatArray,
    df: FloatArray,
    asked: Hypothesis,
) -> SimpleFormula:
    """The same difference of raw counts in independent samples."""
    shift, shift_p, b = counted_shift(plain, weighted, np.maximum(moved, 0.0), asked.level, df)
    _, p = asked.test(plain, se, normal_df(se))
    low, high = asked.limits(plain - asked.z * se, plain + asked.z * se)
    s_u = np.sqrt(true.diagonal())
    with np.errstate(invalid="ignore", divide="ignore"):
        error_rate, coverage = real_error_rate(asked, se, b, s_u), real_coverage(asked, se, b, s_u)
    none = np.zeros(se.size, dtype=bool)
    return SimpleFormula(
        plain, se, low, high, p, plain, shift, shift_p, s_u, error_rate, coverage, none, none
    )


def _same_everywhere(
    rates: RateTable, table: NDArray[np.intp], pair: tuple[int, int], asked: Hypothesis
) -> WaldTest | None:
    """Whether the difference of one pair is the same at every level."""
    both = table[:, list(pair)]
    both = both[(rates.n[both] > 0).all(axis=1)]
    levels = both.shape[0]
    if levels < 2:
        return None
    rows = both.ravel().tolist()
    gaps = np.kron(np.eye(levels), np.array([1.0, -1.0]))
    found = combine(
        rates, rows, gaps[1:] - gaps[0], scale="rate", asked=asked, variant="unweighted"
    )
    return joint_wald(found.estimate, found.covariance, float(found.df.min()))
