"""Disclosure control of a published table: small counts, and cells that protect them.

Nothing here is done unless it is asked for, and nothing here is a guarantee. The data provider's
own rules and the law of the place come first. What one table hides another may show: the same
question with a finer grouping, for a subpopulation that differs by a few people, from another wave
or by another author. Only somebody who knows all that is published can judge that.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from svyrates.errors import QuestionError, RatesWarning, some, warn
from svyrates.publish.protection import CountTable, DisclosureRule, WithheldCells, protect_tables
from svyrates.rates import RateTable
from svyrates.words import plural

__all__ = [
    "WITHHELD",
    "DisclosureRule",
    "WithheldCells",
    "round_counts",
    "withhold_cells",
    "withhold_rows",
]

BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]
# What a publication says of every such cell. To tell the small ones from those that protect them
# would say that the small ones are small.
WITHHELD = "withheld to protect respondents"


def withhold_cells(
    n: ArrayLike,
    rule: DisclosureRule,
    *,
    successes: ArrayLike | None = None,
    sensitive: ArrayLike | None = None,
    already: ArrayLike | None = None,
) -> WithheldCells:
    """Find the cells of a table of counts to withhold, and the cells that protect them.

    Parameters
    ----------
    n : k-way array of counts
        Unweighted members, one axis per factor of the table.
    rule : DisclosureRule
    successes : k-way array of counts, optional
        Members with the outcome. Without it only members are counted.
    sensitive : k-way mask, optional
        Cells to protect whatever their counts.
    already : k-way mask, optional
        Cells withheld for another reason; they protect at no further cost.

    Returns
    -------
    WithheldCells

    Raises
    ------
    QuestionError
        Counts are not whole, are negative or exceed the members; shapes differ.

    Warns
    -----
    RatesWarning
        The sums give cells away whatever is withheld, as when one cell alone makes up a sum. Then
        everything in the sums of such a cell is withheld, and those sums must not be published.

    Notes
    -----
    Readers are taken to know every sum of the table over any of its factors, published or not, of
    members, successes and failures. For a small count of members another table must exist that has
    the same sums and the same published cells, whole counts, none of them negative, and another
    count there. For successes and failures that table must also keep the members of every cell,
    since group sizes are often known. Protecting cells are chosen greedily, those with few members
    first and empty ones last; fewer might do. An empty cell protects nothing if everybody knows
    that it must be empty. A factor with one level adds no sums.

    Examples
    --------
    >>> from svyrates.publish import DisclosureRule, withhold_cells
    >>> found = withhold_cells([[2, 30, 11], [25, 40, 35]], DisclosureRule(minimum=5))
    >>> found.cells.tolist()
    [[True, False, True], [True, False, True]]

    The 2 is too small. Withheld alone, or with one other cell of its row, it would follow from the
    sums of the columns; four cells keep each other hidden.
    """
    members = _counts(n, "n")
    table = CountTable.of(members, None if successes is None else _counts(successes, "successes"))
    chosen = _mask(sensitive, members.shape, "sensitive")
    (found,) = protect_tables(
        [table], rule, chosen[None], _mask(already, members.shape, "already")[None]
    )
    if found.exposed.any():
        where = [tuple(at) for at in np.argwhere(found.exposed).tolist()]
        _warn_exposed(f"cells {some(where)}" if len(where) > 1 else f"cell {where[0]}")
    return found


def withhold_rows(
    rates: RateTable, rule: DisclosureRule, *, already: ArrayLike | None = None
) -> WithheldCells:
    """Find the rows of a table of rates to withhold, and the rows that protect them.

    Parameters
    ----------
    rates : RateTable
        Its grouping columns are the factors of the table.
    rule : DisclosureRule
    already : (rows,) mask, optional
        Rows withheld for another reason, such as a presentation standard.

    Returns
    -------
    WithheldCells
        With arrays of shape (rows,).

    Raises
    ------
    QuestionError
        The groups are masks, which do not cross into a table with sums.

    Warns
    -----
    RatesWarning
        As `withhold_cells` does.

    Notes
    -----
    A withheld row must lose all its numbers, weighted ones and missing answers included, in every
    form of the output. A group that is withheld for its members is withheld for every outcome, as
    one outcome would tell the size of the group that another hides; a group withheld for its
    successes or failures is withheld for that outcome. Outcomes are otherwise looked at one by one:
    sums over several outcomes, and missing answers, are not.

    Examples
    --------
    >>> import svyrates as sr
    >>> from svyrates.publish import DisclosureRule, withhold_rows
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.estimate_rates(
    ...     design, outcome="cold_home", success=["often", "always"], by="sex"
    ... )
    >>> withhold_rows(rates, DisclosureRule(minimum=10)).cells.tolist()
    [False, False]

    No count of this table is below 10.
    """
    if rates.overlapping:
        raise QuestionError(
            "The groups of this table are masks, which may overlap, so that its sums and what they "
            "give away are unknown. Group by columns instead, or withhold by hand."
        )
    shape = _shape(rates.groups)
    n, successes = rates.n.astype(np.int64), rates.n_success.astype(np.int64)
    everywhere = (len(rates.outcomes), *shape)
    tables = [
        CountTable.of(members, yes)
        for members, yes in zip(n.reshape(everywhere), successes.reshape(everywhere), strict=True)
    ]
    taken = _mask(already, rates.rate.shape, "already").reshape(everywhere)
    found = protect_tables(tables, rule, np.zeros_like(taken), taken)
    rows = WithheldCells(
        *(
            np.concatenate([getattr(part, name).ravel() for part in found])
            for name in ("primary", "complementary", "exposed", "why")
        )
    )
    if rows.exposed.any():
        _, labels = rates.label_columns()
        where = [", ".join(map(str, labels[row])) for row in np.flatnonzero(rows.exposed)]
        _warn_exposed(f"{plural(len(where), 'row')} ({some(where)})")
    return rows


def round_counts(values: ArrayLike, base: int) -> NDArray[Any]:
    """Round counts to the nearest multiple of a base, halves up.

    Parameters
    ----------
    values : array of counts, none negative; NaN stays
    base : whole number of 1 or more, such as 10

    Returns
    -------
    array
        Whole numbers if `values` are, else floats.

    Raises
    ------
    QuestionError
        A value is negative or no number; the base is not whole and positive.

    Notes
    -----
    Always the same count for the same count, never at random. Rounding is not disclosure control
    by itself: rates printed beside rounded counts, and differences between tables, undo it. Rounded
    parts need not add up to their rounded sum.

    Examples
    --------
    >>> round_counts([4, 5, 14, 15, 1234], base=10).tolist()
    [0, 10, 10, 20, 1230]
    """
    if isinstance(base, bool) or not isinstance(base, int | np.integer) or base < 1:
        raise QuestionError(f"base must be a whole number of 1 or more; got {base!r}.")
    counts = np.asarray(values)
    if counts.dtype.kind not in "iuf" or (counts < 0).any() or np.isinf(counts).any():
        raise QuestionError("values must be counts: numbers, none of them negative or infinite.")
    if counts.dtype.kind == "f":
        return np.asarray(np.floor_divide(2.0 * counts + base, 2.0 * base) * base)
    return np.asarray((2 * counts.astype(np.int64) + base) // (2 * base) * base)


def _warn_exposed(what: str) -> None:
    warn(
        f"The sums of the table give away {what}, whatever else is withheld. Everything in the "
        "same sums is withheld; do not publish those sums either, or join small groups.",
        RatesWarning,
    )


def _shape(groups: Sequence[tuple[object, ...]]) -> tuple[int, ...]:
    """Levels of each factor, from groups that are their product."""
    # 1, True and '1' are three labels.
    return tuple(
        len({(type(label), label) for label in column}) for column in zip(*groups, strict=True)
    )


def _counts(values: ArrayLike, name: str) -> IntArray:
    counts = np.asarray(values)
    if counts.dtype.kind not in "iuf" or not counts.size:
        raise QuestionError(f"{name} must be an array of counts.")
    bad = int(np.count_nonzero(~(np.isfinite(counts) & (counts >= 0) & (counts % 1 == 0))))
    if bad:
        raise QuestionError(
            f"{name} must hold whole counts, none negative: {bad} of {counts.size} are not."
        )
    return counts.astype(np.int64)


def _mask(given: ArrayLike | None, shape: tuple[int, ...], name: str) -> BoolArray:
    if given is None:
        return np.zeros(shape, dtype=np.bool_)
    mask = np.asarray(given)
    if mask.dtype != np.bool_ or mask.shape != shape:
        raise QuestionError(
            f"{name} must be true or false for each cell, of shape {shape}; got {mask.dtype} of "
            f"shape {mask.shape}."
        )
    return mask
