"""Which cells of a table a disclosure rule withholds, and which others protect those."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Literal, get_args

import numpy as np
from numpy.typing import NDArray

from svyrates.errors import QuestionError, RatesError, some
from svyrates.publish.alternatives import cheapest_move, recoverable_cells
from svyrates.words import plural

__all__ = ["CountTable", "DisclosureRule", "WithheldCells", "protect_tables"]

BoolArray = NDArray[np.bool_]
FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
Counted = Literal["members", "successes", "failures"]
_COUNTED: tuple[Counted, ...] = get_args(Counted)


@dataclass(frozen=True, slots=True, kw_only=True)
class DisclosureRule:
    """Which counts are too small to be published.

    Attributes
    ----------
    minimum : smallest count that may be published, unless it is zero
    counted : which counts of a cell it holds for: its members, and those of them with and without
        the outcome
    unanimous_below : a rate of exactly 0 or 1 tells the answer of every member; with this number
        it is withheld too where the cell has fewer members, even if `minimum` lets it pass
    step : another possible count of a protected cell must lie so far from the true one; 1 asks
        only that the true one cannot be recovered exactly

    Raises
    ------
    QuestionError
        A number is not whole and positive, or `counted` names something else.

    Notes
    -----
    Minimums from 3 to 30 are in use; the provider of the data says which holds.

    Examples
    --------
    >>> import svyrates as sr
    >>> sr.DisclosureRule(minimum=10).step
    1

    Counts of 1 to 9 are withheld, with the cells that would show them by subtraction.
    """

    minimum: int
    counted: Sequence[Counted] = _COUNTED
    unanimous_below: int | None = None
    step: int = 1

    def __post_init__(self) -> None:
        for name in ("minimum", "unanimous_below", "step"):
            value = getattr(self, name)
            whole = isinstance(value, int | np.integer) and not isinstance(value, bool)
            if not (whole and value >= 1) and not (value is None and name == "unanimous_below"):
                raise QuestionError(f"{name} must be a whole number of 1 or more; got {value!r}.")
        if isinstance(self.counted, str) or not self.counted or set(self.counted) - {*_COUNTED}:
            raise QuestionError(
                f"counted must list some of {some(_COUNTED)}; got {self.counted!r}."
            )


@dataclass(frozen=True, slots=True, eq=False)
class WithheldCells:
    """Cells to withhold, all arrays of the shape of the table.

    Attributes
    ----------
    primary : cells that the rule itself withholds
    complementary : cells withheld so that those cannot be recovered from the sums
    exposed : primary cells that the sums give away whatever else is withheld
    why : the reason of each cell, for the author and not for the publication, whose readers should
        not learn which cells are small
    """

    primary: BoolArray
    complementary: BoolArray
    exposed: BoolArray
    why: NDArray[np.object_]

    @property
    def cells(self) -> BoolArray:
        """All cells to withhold."""
        return self.primary | self.complementary


@dataclass(frozen=True, slots=True)
class CountTable:
    """Counts of one outcome; without successes, `yes` holds the members and `no` nothing."""

    n: IntArray
    yes: IntArray
    no: IntArray
    knows_answers: bool

    @classmethod
    def of(cls, n: IntArray, successes: IntArray | None) -> CountTable:
        """Check the counts against each other."""
        if successes is None:
            return cls(n, n, np.zeros_like(n), False)
        if successes.shape != n.shape:
            raise QuestionError(
                f"successes has the shape {successes.shape}, but n has {n.shape}; give both alike."
            )
        if (successes > n).any():
            raise QuestionError(
                f"successes must not exceed n: in {plural(int((successes > n).sum()), 'cell')} "
                "they do."
            )
        return cls(n, successes, n - successes, True)

    def flags(self, rule: DisclosureRule) -> Iterator[tuple[BoolArray, bool, str]]:
        """Cells that the rule withholds, whether for their answers, and why."""
        few = f"fewer than {rule.minimum}"
        for name, counts in (("members", self.n), ("successes", self.yes), ("failures", self.no)):
            if name in rule.counted and (self.knows_answers or name == "members"):
                small = (counts > 0) & (counts < rule.minimum)
                yield small, name != "members", f"{few} {name}"
        if rule.unanimous_below is not None and self.knows_answers:
            alike = (self.n > 0) & ((self.yes == 0) | (self.no == 0))
            text = f"all answers alike, and fewer than {rule.unanimous_below} members"
            yield alike & (self.n < rule.unanimous_below), True, text

    def bounds(self, answers: bool) -> list[tuple[IntArray, IntArray]]:
        """Between what a move must lie, one pair for each kind of move that would do."""
        if answers:
            # Whoever gains a success loses a failure: the members stay.
            return [(-self.yes, self.no)]
        most = np.full_like(self.n, self.n.sum())
        kinds = (self.yes, self.no) if self.knows_answers else (self.n,)
        return [(-counts, most) for counts in kinds]

    @property
    def price(self) -> FloatArray:
        """What it costs to withhold each cell."""
        return np.where(self.n > 0, self.n + 1.0, self.n.sum() + 2.0)


def protect_tables(
    tables: list[CountTable], rule: DisclosureRule, sensitive: BoolArray, already: BoolArray
) -> list[WithheldCells]:
    """Withhold and protect; masks have one more axis than the tables, the outcomes."""
    flags = [list(table.flags(rule)) for table in tables]
    for_members, for_answers = sensitive.copy(), sensitive.copy()
    for outcome, table in enumerate(tables):
        for_answers[outcome] &= table.knows_answers
        for small, answers, _ in flags[outcome]:
            (for_answers if answers else for_members)[outcome] |= small
    # The size of a group is the same for all outcomes, or nearly: it is hidden in all or in none.
    common = np.asarray(for_members.any(axis=0) | already.all(axis=0), dtype=np.bool_)
    exposed = np.zeros_like(already)
    for outcome, table in enumerate(tables):
        _protect(table, False, for_members[outcome], common, exposed[outcome], rule.step)
    found = []
    for outcome, table in enumerate(tables):
        withheld = common | for_answers[outcome] | already[outcome]
        _protect(table, True, for_answers[outcome], withheld, exposed[outcome], rule.step)
        primary = for_members[outcome] | for_answers[outcome]
        _check(withheld, primary & ~exposed[outcome])
        complementary = withheld & ~primary & ~already[outcome]
        why = np.full(primary.shape, "", dtype=object)
        why[complementary] = "protects another"
        why[sensitive[outcome]] = "said to be sensitive"
        for small, _, text in flags[outcome]:
            why[small] = [f"{said}; {text}" if said else text for said in why[small]]
        found.append(WithheldCells(primary, complementary, exposed[outcome], why))
    return found


def _protect(
    table: CountTable,
    answers: bool,
    cells: BoolArray,
    withheld: BoolArray,
    exposed: BoolArray,
    step: int,
) -> None:
    """Withhold more cells until every one of `cells` could be another count, smallest first."""
    shape = tuple(length for length in withheld.shape if length > 1)
    if not shape:
        # The only sum of a lone cell is the cell.
        return
    taken, gone, price = withheld.reshape(shape), exposed.reshape(shape), table.price.reshape(shape)
    bounds = [(low.reshape(shape), high.reshape(shape)) for low, high in table.bounds(answers)]
    order = np.argsort(table.n.reshape(shape)[cells.reshape(shape)], kind="stable")
    for at in np.argwhere(cells.reshape(shape))[order].tolist():
        cell = tuple(at)
        cost = np.where(taken, 0.0, price)
        moves = [cheapest_move(cell, low, high, cost, step) for low, high in bounds]
        possible = [move for move in moves if move is not None]
        if possible:
            taken |= min(possible, key=lambda move: float(cost[move != 0].sum())) != 0
            continue
        gone[cell] = True
        for axis in range(len(shape)):
            taken[(*cell[:axis], slice(None), *cell[axis + 1 :])] = True


def _check(withheld: BoolArray, safe: BoolArray) -> None:
    """Make sure, by another road than the one that chose the cells."""
    shape = tuple(length for length in withheld.shape if length > 1)
    recovered = recoverable_cells(withheld.reshape(shape)) & safe.reshape(shape)
    if recovered.any():
        raise RatesError(
            f"{plural(int(recovered.sum()), 'withheld cell')} could be recovered from the sums of "
            "the table. This is a fault of the package: do not publish the table, and report it."
        )
