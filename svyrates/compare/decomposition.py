"""`gap_decomposition`: how much of a gap is composition, how much is rate.

Source: Kitagawa (1955), Journal of the American Statistical Association 50, 1168-1194.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from itertools import combinations
from typing import Any

import numpy as np
from numpy.typing import NDArray

from svyrates.compare.decomposition_table import DecompositionTable
from svyrates.compare.pairs import matches
from svyrates.design import SampleDesign
from svyrates.errors import QuestionError, some
from svyrates.rates.cells import cell_name, read_cells
from svyrates.rates.limits import t_p_value, t_quantile
from svyrates.rates.source import freedom_of
from svyrates.totals import ByComplexStep, blocks

__all__ = ["gap_decomposition"]

FloatArray = NDArray[np.float64]
PARTS = ("difference", "composition", "rates")


def gap_decomposition(
    design: SampleDesign,
    outcome: Any,
    by: str,
    adjust_for: str | Sequence[str],
    *,
    success: Any = None,
    where: Any = None,
    versus: Any = None,
    merge: Mapping[str, Mapping[object, object]] | None = None,
    level: float = 0.95,
    df: str | float | None = None,
) -> DecompositionTable:
    """Split the gap between groups into what they are made of and what their rates are.

    Parameters
    ----------
    design : SampleDesign
    outcome, success, where, df : see `estimate_rates`
    by : str
        Column of the groups.
    adjust_for : str or list of str
        Columns in which the groups may differ, such as age; several are crossed.
    versus : group label, optional
        The group compared with; without it every pair.
    merge : dict, optional
        Column -> {level: the level it joins}, for categories that a group has no member in.
    level : float
        Confidence level.

    Returns
    -------
    DecompositionTable
        For each pair the difference, the two parts, and what each category adds to them.

    Raises
    ------
    QuestionError
        For faults in the columns, and for a category that one group of a pair has no member in.

    Notes
    -----
    With shares q and rates r of the categories a, `p_1 - p_2` is composition,
    `Σ_a (q_1a - q_2a)(r_1a + r_2a)/2`, plus rates, `Σ_a (r_1a - r_2a)(q_1a + q_2a)/2`. Records with
    an unknown category are left out of both. Every part is a smooth function of totals, with its
    variance by linearization or replicates; shares and rates are both estimated. A part is
    arithmetic, not a cause: which categories are chosen decides what counts as composition.

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> parts = sr.gap_decomposition(design, "damp", by="terrain", adjust_for="age_group")
    >>> parts.part[:3]
    ('difference', 'composition', 'rates')

    The gap between lowland and upland homes, and the parts of it that age does and does not make.
    """
    factors = [adjust_for] if isinstance(adjust_for, str) else list(adjust_for)
    cells = read_cells(design, outcome, success, by, factors, where, merge, level, df)
    pairs = _pairs(cells.groups, versus)
    n = cells.n
    for i, j in pairs:
        cells.refuse_empty((n[[i, j]] > 0).any(axis=0) & (n[[i, j]] == 0), (i, j))
    first, second = [i for i, _ in pairs], [j for _, j in pairs]
    filled = cells.n > 0
    kitagawa = _Kitagawa(filled, first, second)
    found = cells.source.totals().apply(ByComplexStep(kitagawa))
    with np.errstate(invalid="ignore"):
        se = np.sqrt(found.variance())
    groups = cells.source.sides(cells.unions())
    group_df = freedom_of(groups, cells.source, cells.rule)
    each = len(PARTS) + 2 * filled.shape[1]
    freedom = np.repeat(np.fmin(group_df[first], group_df[second]), each)
    with np.errstate(invalid="ignore", divide="ignore"):
        statistic = np.where(se > 0, found.values / se, np.nan)
        share = found.values / np.repeat(found.values[::each], each)
    half = t_quantile(freedom, level) * se
    used = [(filled[[i, j]]).any(axis=0) for i, j in pairs]
    keep = np.concatenate([np.concatenate((np.ones(len(PARTS), bool), u, u)) for u in used])
    names = [cell_name(category) for category in cells.categories]
    part = [*PARTS, *["composition"] * len(names), *["rates"] * len(names)]
    category = [""] * len(PARTS) + names * 2
    label = [cell_name(group) for group in cells.groups]
    rows = np.flatnonzero(keep)
    return DecompositionTable(
        group=tuple(label[pairs[row // each][0]] for row in rows),
        versus=tuple(label[pairs[row // each][1]] for row in rows),
        part=tuple(part[row % each] for row in rows),
        category=tuple(category[row % each] for row in rows),
        estimate=found.values[rows],
        se=se[rows],
        low=(found.values - half)[rows],
        high=(found.values + half)[rows],
        statistic=statistic[rows],
        df=freedom[rows],
        p=t_p_value(statistic, freedom)[rows],
        share=share[rows],
        subject=f"{cells.outcome.name} = {cells.outcome.defined}",
        by=by,
        adjust_for=tuple(factors),
        level=level,
        df_rule=cells.rule,
        coverage=cells.coverage,
    )


def _pairs(groups: Sequence[tuple[object, ...]], versus: Any) -> list[tuple[int, int]]:
    if len(groups) < 2:
        raise QuestionError("It takes two groups to make a gap.")
    if versus is None:
        return list(combinations(range(len(groups)), 2))
    other = [i for i, group in enumerate(groups) if matches(group, versus)]
    if not other:
        shown = some([cell_name(group) for group in groups], 10)
        raise QuestionError(f"versus={versus!r} is not a group. The groups are {shown}.")
    return [(i, other[0]) for i in range(len(groups)) if i != other[0]]


class _Kitagawa:
    """Totals -> the parts of every pair: three sums, then composition and rates by category."""

    def __init__(self, filled: NDArray[np.bool_], first: list[int], second: list[int]) -> None:
        self.filled, self.first, self.second = filled, first, second

    def __call__(self, at: Any) -> Any:
        _, _, size, success = blocks(at)
        shape = (*size.shape[:-1], *self.filled.shape)
        size, success = size.reshape(shape), success.reshape(shape)
        # A category without a member in either group of a pair adds nothing there.
        rate = np.where(self.filled, success / np.where(self.filled, size, 1.0), 0.0)
        share = size / size.sum(axis=-1, keepdims=True)
        one, other = rate[..., self.first, :], rate[..., self.second, :]
        q_one, q_other = share[..., self.first, :], share[..., self.second, :]
        composition = (q_one - q_other) * (one + other) / 2.0
        of_rates = (one - other) * (q_one + q_other) / 2.0
        sums = [part.sum(axis=-1, keepdims=True) for part in (composition, of_rates)]
        whole = np.concatenate((sums[0] + sums[1], *sums, composition, of_rates), axis=-1)
        return whole.reshape(*whole.shape[:-2], -1)
