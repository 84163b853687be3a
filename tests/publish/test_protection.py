"""Protection: what a reader could work out from a table, by enumeration and by rank."""

from __future__ import annotations

from collections.abc import Iterator
from itertools import product

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import svyrates as sr
from svyrates.publish import DisclosureRule, protection, withhold_cells
from svyrates.publish.alternatives import cheapest_move, recoverable_cells

Cell = tuple[int, ...]


def _lines_of(shape: Cell) -> list[list[Cell]]:
    """Lines along each factor that has more than one level."""
    cells = list(product(*map(range, shape)))
    return [
        [cell for cell in cells if cell[:axis] + cell[axis + 1 :] == rest]
        for axis, length in enumerate(shape)
        if length > 1
        for rest in sorted({cell[:axis] + cell[axis + 1 :] for cell in cells})
    ]


def _possible(
    counts: np.ndarray, withheld: np.ndarray, most: np.ndarray | None = None
) -> Iterator[dict[Cell, int]]:
    """Every way to fill the withheld cells that fits the sums: a reader with much patience."""
    lines = [
        (
            [cell for cell in line if withheld[cell]],
            sum(int(counts[c]) for c in line if withheld[c]),
        )
        for line in _lines_of(counts.shape)
    ]
    order = [tuple(cell) for cell in np.argwhere(withheld).tolist()]

    def fill(filled: dict[Cell, int]) -> Iterator[dict[Cell, int]]:
        if len(filled) == len(order):
            yield dict(filled)
            return
        cell = order[len(filled)]
        mine = [(line, total) for line, total in lines if cell in line]
        left = [total - sum(filled.get(c, 0) for c in line) for line, total in mine]
        forced = [
            room
            for (line, _), room in zip(mine, left, strict=True)
            if all(c in filled or c == cell for c in line)
        ]
        ceiling = min(left) if most is None else min(*left, int(most[cell]))
        for value in {*forced} if forced else range(ceiling + 1):
            if 0 <= value <= ceiling and len({*forced}) <= 1:
                yield from fill({**filled, cell: value})

    return fill({})


def _values(
    counts: np.ndarray, withheld: np.ndarray, most: np.ndarray | None = None
) -> dict[Cell, set[int]]:
    found: dict[Cell, set[int]] = {}
    for filled in _possible(counts, withheld, most):
        for cell, value in filled.items():
            found.setdefault(cell, set()).add(value)
    return found


def _tables(largest: int) -> st.SearchStrategy[np.ndarray]:
    shapes = st.sampled_from([(2,), (4,), (1, 3), (3, 1), (2, 2), (2, 3), (3, 3), (2, 2, 2)])
    return shapes.flatmap(
        lambda shape: st.lists(
            st.integers(0, largest), min_size=int(np.prod(shape)), max_size=int(np.prod(shape))
        ).map(lambda values: np.array(values).reshape(shape))
    )


@pytest.mark.filterwarnings("ignore:The sums of the table give away")
@settings(max_examples=300)
@given(_tables(5), st.integers(2, 4))
def test_members_by_enumeration(counts: np.ndarray, minimum: int) -> None:
    found = withhold_cells(counts, DisclosureRule(minimum=minimum))
    assert (found.primary == ((counts > 0) & (counts < minimum))).all()
    assert not (found.primary & found.complementary).any()
    values = _values(counts, found.cells)
    alone = np.prod(counts.shape) == 1
    for cell in map(tuple, np.argwhere(found.primary).tolist()):
        if found.exposed[cell]:
            # Truly beyond help: not even an empty table could hide it.
            assert len(_values(counts, np.ones_like(found.cells))[cell]) == 1
        else:
            assert alone or len(values[cell]) > 1


@pytest.mark.filterwarnings("ignore:The sums of the table give away")
@settings(max_examples=300)
@given(_tables(4), st.data())
def test_answers_by_enumeration(n: np.ndarray, data: st.DataObject) -> None:
    """Successes and failures stay unknown even to a reader who knows the size of every group."""
    successes = np.array([data.draw(st.integers(0, int(size))) for size in n.ravel()])
    successes = successes.reshape(n.shape)
    failures = n - successes
    found = withhold_cells(n, DisclosureRule(minimum=2, unanimous_below=4), successes=successes)
    known_sizes = _values(successes, found.cells, most=n)
    yes, no = _values(successes, found.cells), _values(failures, found.cells)
    everything = np.ones_like(found.cells)
    for cell in map(tuple, np.argwhere(found.primary).tolist()):
        why = set(found.why[cell].split("; "))
        of_answers = why - {"fewer than 2 members"}
        if found.exposed[cell]:
            answers_fixed = len(_values(successes, everything, most=n)[cell]) == 1
            sizes_fixed = all(
                len(_values(each, everything)[cell]) == 1 for each in (successes, failures)
            )
            assert (of_answers and answers_fixed) or sizes_fixed
            continue
        if of_answers:
            assert len(known_sizes[cell]) > 1
        if "fewer than 2 members" in why:
            assert len({a + b for a, b in product(yes[cell], no[cell])}) > 1


@settings(max_examples=60)
@given(_tables(6), st.integers(2, 4))
@pytest.mark.filterwarnings("ignore:The sums of the table give away")
def test_step_by_enumeration(counts: np.ndarray, step: int) -> None:
    """Some possible count of every protected cell lies a step or more from the true one."""
    found = withhold_cells(counts, DisclosureRule(minimum=3, step=step))
    values = _values(counts, found.cells)
    for cell in map(tuple, np.argwhere(found.primary & ~found.exposed).tolist()):
        alone = counts.size == 1
        assert alone or max(abs(value - counts[cell]) for value in values[cell]) >= step


def _by_rank(withheld: np.ndarray) -> np.ndarray:
    """A cell is recoverable if its equation adds nothing to those of the sums."""
    cells = [tuple(cell) for cell in np.argwhere(withheld).tolist()]
    sums = np.array([[float(c in line) for c in cells] for line in _lines_of(withheld.shape)])
    rank = np.linalg.matrix_rank(sums)
    found = np.zeros_like(withheld)
    for cell, unit in zip(cells, np.eye(len(cells)), strict=True):
        found[cell] = np.linalg.matrix_rank(np.vstack((sums, unit))) == rank
    return found


@pytest.mark.parametrize("shape", [(6,), (4, 5), (3, 3, 4), (2, 2, 3, 2)])
def test_recoverable_cells_by_rank(shape: Cell, rng: np.random.Generator) -> None:
    for share in np.linspace(0.1, 1.0, 12):
        withheld = rng.random(shape) < share
        if withheld.any():
            assert (recoverable_cells(withheld) == _by_rank(withheld)).all()
    assert not recoverable_cells(np.zeros(shape, dtype=bool)).any()


@pytest.mark.filterwarnings("ignore:The sums of the table give away")
@pytest.mark.parametrize(
    ("shape", "typical"),
    [
        ((9,), 1.5),
        ((7, 9), 1.5),
        ((7, 9), 3.0),
        ((4, 5, 6), 1.5),
        ((4, 5, 6), 3.0),
        ((3, 3, 3, 2), 3.0),
    ],
)
def test_larger_tables_by_rank(shape: Cell, typical: float, rng: np.random.Generator) -> None:
    n = rng.poisson(np.exp(rng.normal(typical, 1.0, shape)))
    n[(0,) * len(shape)] = 2
    successes = rng.binomial(n, 0.3)
    found = withhold_cells(n, DisclosureRule(minimum=4), successes=successes)
    safe = found.primary & ~found.exposed
    assert safe.any()
    assert not (_by_rank(found.cells) & safe).any()
    if not found.exposed.any():
        assert not _by_rank(found.cells).any()


def test_a_longer_way_round_where_no_box_will_do() -> None:
    """Empty cells have no answers to move, so six cells must pass a success around."""
    n = np.array([[30, 40, 0], [0, 45, 50], [55, 0, 60]])
    successes = np.array([[2, 20, 0], [0, 20, 25], [25, 0, 30]])
    found = withhold_cells(n, DisclosureRule(minimum=5), successes=successes)
    assert (found.cells == (n > 0)).all()
    assert not found.exposed.any()


def test_a_move_too_long_for_its_cells() -> None:
    counts = np.array([[1, 1], [1, 1]])
    most = np.full((2, 2), 4)
    price = np.ones((2, 2))
    move = cheapest_move((0, 1), -counts, most, price, 1)
    assert move is not None
    assert (np.abs(move) == 1).all()
    assert not move.sum(axis=0).any()
    assert not move.sum(axis=1).any()
    assert cheapest_move((0, 1), -counts, most, price, 2) is None


def test_a_table_that_is_not_safe_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    """Were the search for a move wrong, the check by linear algebra would stop the table."""

    def wrong(cell: Cell, lower: np.ndarray, *_: object) -> np.ndarray:
        move = np.zeros_like(lower)
        move[cell] = 1
        return move

    monkeypatch.setattr(protection, "cheapest_move", wrong)
    with pytest.raises(sr.RatesError, match=r"1 withheld cell could be recovered.*do not publish"):
        withhold_cells([[2, 20], [20, 20]], DisclosureRule(minimum=5))


@pytest.mark.parametrize("seed", range(8))
def test_order_of_the_levels_does_not_matter(seed: int) -> None:
    """Counts so uneven that no two choices cost the same."""
    rng = np.random.default_rng(seed)
    counts = rng.integers(1_000, 1_000_000, (5, 6))
    counts[2, 3], counts[4, 0] = 2, 3
    rows, columns = rng.permutation(5), rng.permutation(6)
    shuffled = withhold_cells(counts[rows][:, columns], DisclosureRule(minimum=5))
    found = withhold_cells(counts, DisclosureRule(minimum=5))
    assert (shuffled.cells == found.cells[rows][:, columns]).all()
    assert (withhold_cells(counts.T, DisclosureRule(minimum=5)).cells == found.cells.T).all()
