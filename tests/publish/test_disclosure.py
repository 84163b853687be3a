"""Disclosure: the cells and rows that are withheld, case by case, and rounding."""

from __future__ import annotations

from decimal import ROUND_HALF_UP, Decimal
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

import svyrates as sr
from svyrates.publish import (
    DisclosureRule,
    WithheldCells,
    round_counts,
    withhold_cells,
    withhold_rows,
)


def _rule(minimum: int = 3, **others: Any) -> DisclosureRule:
    return DisclosureRule(minimum=minimum, **others)


def _found(counts: list[Any], minimum: int = 5, **others: Any) -> WithheldCells:
    return withhold_cells(counts, _rule(minimum), **others)


def test_nothing_small_nothing_withheld() -> None:
    found = _found([[5, 0, 7], [0, 0, 12]])
    assert not found.cells.any()
    assert set(found.why.ravel()) == {""}


def test_one_small_cell_takes_the_cheapest_other_of_its_only_sum() -> None:
    found = _found([40, 3, 11, 0, 25])
    assert np.flatnonzero(found.primary).tolist() == [1]
    assert np.flatnonzero(found.complementary).tolist() == [2]
    assert found.why.tolist() == ["", "fewer than 5 members", "protects another", "", ""]


def test_one_small_cell_of_two_factors_takes_three_others() -> None:
    found = _found([[3, 50, 11, 60], [45, 70, 12, 80], [90, 75, 14, 85]])
    assert np.argwhere(found.cells).tolist() == [[0, 0], [0, 2], [1, 0], [1, 2]]


def test_two_small_cells_in_a_row_take_two_others() -> None:
    found = _found([[3, 4, 60], [30, 40, 50], [10, 20, 90]])
    assert np.argwhere(found.complementary).tolist() == [[2, 0], [2, 1]]


def test_three_factors_take_eight() -> None:
    counts = np.full((2, 3, 4), 40)
    counts[1, 1, 1] = 1
    assert withhold_cells(counts, _rule()).cells.sum() == 8


def test_small_cells_protect_each_other() -> None:
    found = _found([[1, 2], [3, 4]])
    assert found.primary.all()
    assert not found.exposed.any()


def test_empty_cells_protect_only_if_nothing_else_does() -> None:
    assert np.flatnonzero(_found([2, 0, 900]).cells).tolist() == [0, 2]
    assert np.flatnonzero(_found([2, 0, 0]).cells).tolist() == [0, 1]


@pytest.mark.parametrize("counts", [[[2, 30, 9]], [[2], [30], [9]]])
def test_a_factor_with_one_level_adds_no_sum(counts: list[Any]) -> None:
    """The sum over it would be the cell itself."""
    assert np.flatnonzero(_found(counts).cells).tolist() == [0, 2]


def test_a_lone_cell_has_no_sum_but_itself() -> None:
    found = _found([[2]])
    assert found.cells.all()
    assert not found.exposed.any()


def test_a_cell_that_makes_up_its_sums() -> None:
    """All other members are in its row or all in its column: the sums say so."""
    with pytest.warns(sr.RatesWarning, match=r"give away cell \(0, 0\).*do not publish those sums"):
        found = _found([[2, 0, 0], [70, 0, 0], [90, 0, 0]])
    assert np.argwhere(found.exposed).tolist() == [[0, 0]]
    assert np.argwhere(found.cells).tolist() == [[0, 0], [0, 1], [0, 2], [1, 0], [2, 0]]


def test_everybody_answers_alike_in_all_cells() -> None:
    with pytest.warns(sr.RatesWarning, match=r"give away cell \(1,\)"):
        found = withhold_cells([30, 4, 20], _rule(5), successes=[30, 4, 20])
    assert found.cells.all()


def test_members_are_what_successes_and_failures_leave_possible() -> None:
    """The 1 could be a 2 if only members were known; the sums of successes forbid it."""
    n, successes = [[1, 6], [7, 8]], [[0, 6], [0, 8]]
    assert not _found(n).exposed.any()
    with pytest.warns(sr.RatesWarning, match=r"give away cell \(0, 0\)"):
        found = withhold_cells(n, _rule(5, counted=["members"]), successes=successes)
    assert np.argwhere(found.exposed).tolist() == [[0, 0]]


def test_successes_and_failures_count() -> None:
    n, successes = [50, 60, 70, 80], [25, 58, 30, 2]
    found = withhold_cells(n, _rule(5), successes=successes)
    assert found.why.tolist() == ["", "fewer than 5 failures", "", "fewer than 5 successes"]
    only = withhold_cells(n, _rule(5, counted=("failures",)), successes=successes)
    assert np.flatnonzero(only.primary).tolist() == [1]
    assert np.flatnonzero(only.complementary).tolist() == [0]
    assert not withhold_cells(n, _rule(5, counted=["members"]), successes=successes).cells.any()
    assert not withhold_cells(n, _rule(5)).cells.any()


def test_a_rate_of_zero_in_a_small_group_tells_every_answer() -> None:
    n, successes = [12, 40, 90, 12], [0, 20, 45, 6]
    assert not withhold_cells(n, _rule(5), successes=successes).cells.any()
    found = withhold_cells(n, _rule(5, unanimous_below=20), successes=successes)
    assert np.flatnonzero(found.primary).tolist() == [0]
    assert found.why[0] == "all answers alike, and fewer than 20 members"
    assert not withhold_cells(n, _rule(5, unanimous_below=12), successes=successes).cells.any()


def test_sensitive_cells_are_protected_whatever_their_counts() -> None:
    found = _found([50, 60, 70], sensitive=[False, True, False])
    assert found.primary.tolist() == [False, True, False]
    assert found.complementary.tolist() == [True, False, False]
    assert found.why[1] == "said to be sensitive"


def test_cells_withheld_already_protect_at_no_cost() -> None:
    found = _found([2, 10, 900], already=[False, False, True])
    assert np.flatnonzero(found.cells).tolist() == [0]


def test_step_keeps_the_true_count_at_a_distance() -> None:
    """With a step of 4 another table must have 7 or more in the place of 3: 2 has no 4 to give."""
    counts = np.array([3, 2, 40])
    assert np.flatnonzero(withhold_cells(counts, _rule(5)).cells).tolist() == [0, 1]
    assert withhold_cells(counts, _rule(5, step=4)).cells.all()


BAD: list[tuple[dict[str, Any], str]] = [
    ({"n": [[1.5, 2.0], [-1.0, np.nan]]}, "whole counts, none negative: 3 of 4 are not"),
    ({"n": ["a", "b"]}, "n must be an array of counts"),
    ({"n": []}, "n must be an array of counts"),
    ({"n": [3, 4], "successes": [1]}, r"successes has the shape \(1,\), but n has \(2,\)"),
    ({"n": [3, 4], "successes": [4, 4]}, "must not exceed n: in 1 cell they do"),
    ({"n": [3, 4], "already": [0, 1]}, r"already must be true or false.*\(2,\); got int64"),
    ({"n": [3, 4], "sensitive": [True]}, r"sensitive must be.*of shape \(1,\)"),
]


@pytest.mark.parametrize(("arguments", "message"), BAD)
def test_bad_tables(arguments: dict[str, Any], message: str) -> None:
    with pytest.raises(sr.QuestionError, match=message):
        withhold_cells(arguments.pop("n"), _rule(), **arguments)


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"minimum": 0}, "minimum must be a whole number of 1 or more; got 0"),
        ({"minimum": 2.5}, "minimum must be a whole number"),
        ({"minimum": True}, "minimum must be a whole number"),
        ({"minimum": None}, "minimum must be a whole number"),
        ({"minimum": 5, "step": None}, "step must be a whole number"),
        ({"minimum": 5, "unanimous_below": -1}, "unanimous_below must be a whole number"),
        ({"minimum": 5, "counted": "members"}, "counted must list some of 'members'"),
        ({"minimum": 5, "counted": ["people"]}, r"counted must list.*got \['people'\]"),
        ({"minimum": 5, "counted": []}, "counted must list"),
    ],
)
def test_bad_rules(options: dict[str, Any], message: str) -> None:
    with pytest.raises(sr.QuestionError, match=message):
        DisclosureRule(**options)


def _survey(n: np.ndarray, successes: np.ndarray) -> pd.DataFrame:
    """One record for each member of a table of sex by region, or only by region."""
    rows = [
        (*cell, member < successes[cell])
        for cell in np.ndindex(n.shape)
        for member in range(n[cell])
    ]
    frame = pd.DataFrame(rows, columns=["sex", "region", "y"][-n.ndim - 1 :])
    return frame.assign(w=np.linspace(1.0, 3.0, len(frame)))


@pytest.fixture(scope="module")
def crossed() -> tuple[np.ndarray, np.ndarray]:
    n = np.array([[3, 30, 14], [20, 40, 15], [60, 70, 0]])
    return n, n // 2


def test_rows_of_a_table_of_rates(crossed: tuple[np.ndarray, np.ndarray]) -> None:
    n, successes = crossed
    frame = _survey(n, successes).sample(frac=1.0, random_state=1, ignore_index=True)
    rates = sr.estimate_rates(sr.SampleDesign(frame, weight="w"), "y", by=["sex", "region"])
    found = withhold_rows(rates, _rule(5))
    cells = withhold_cells(n, _rule(5), successes=successes)
    assert found.cells.tolist() == cells.cells.ravel().tolist()
    assert found.why.tolist() == cells.why.ravel().tolist()
    assert np.flatnonzero(found.cells).tolist() == [0, 2, 3, 5]


def test_a_group_is_hidden_in_all_outcomes_or_in_none() -> None:
    """Otherwise one outcome tells the size of the group that protects a small one in another."""
    n = np.array([3, 30, 14, 50])
    frame = _survey(n, n // 2)
    # Fewer in group 2 answer the second question, fewer still in group 1: it would protect there.
    frame["z"] = pd.array(frame["y"], dtype="boolean")
    frame.loc[frame.index[frame["region"] == 1][:24], "z"] = pd.NA
    rare = (frame["region"] == 3) & (frame["y"].cumsum() % 12 == 0) & frame["y"]
    frame["rare"] = rare | ((frame["region"] < 3) & frame["y"])
    design = sr.SampleDesign(frame, weight="w")
    rates = sr.estimate_rates(design, ["y", "z", "rare"], by="region")
    found = withhold_rows(rates, _rule(5))
    per_outcome = found.cells.reshape(3, 4)
    members_small = [0, 2]
    assert np.flatnonzero(per_outcome[0]).tolist() == members_small
    assert set(np.flatnonzero(per_outcome[1])) >= set(members_small)
    # The rare answer is withheld where it is rare, in its own outcome only.
    assert "fewer than 5 successes" in found.why.reshape(3, 4)[2, 3]
    assert not per_outcome[0, 3]


def test_a_group_is_hidden_where_only_another_outcome_is_answered_by_few() -> None:
    n = np.array([20, 30, 40])
    frame = _survey(n, n // 2)
    frame["z"] = pd.array(frame["y"], dtype="boolean")
    frame.loc[frame.index[frame["region"] == 1][:27], "z"] = pd.NA
    rates = sr.estimate_rates(sr.SampleDesign(frame, weight="w"), ["y", "z"], by="region")
    found = withhold_rows(rates, _rule(5))
    assert np.flatnonzero(found.primary).tolist() == [4]
    assert np.flatnonzero(found.cells).tolist() == [0, 1, 3, 4]


def test_rows_withheld_already_protect_in_their_outcome() -> None:
    n = np.array([30, 40, 50])
    frame = _survey(n, n // 2)
    frame["rare"] = frame["y"] & ((frame["region"] > 0) | (frame.index < 2))
    rates = sr.estimate_rates(sr.SampleDesign(frame, weight="w"), ["y", "rare"], by="region")
    assert np.flatnonzero(withhold_rows(rates, _rule(5)).cells).tolist() == [3, 4]
    already = np.array([False, False, False, False, False, True])
    assert np.flatnonzero(withhold_rows(rates, _rule(5), already=already).cells).tolist() == [3]


def test_rows_withheld_already(crossed: tuple[np.ndarray, np.ndarray]) -> None:
    n, successes = crossed
    frame = _survey(n, successes)
    rates = sr.estimate_rates(sr.SampleDesign(frame, weight="w"), "y", by=["sex", "region"])
    already = np.zeros(9, dtype=bool)
    already[[1, 4]] = True
    found = withhold_rows(rates, _rule(5), already=already)
    assert np.flatnonzero(found.cells).tolist() == [0, 3]
    with pytest.raises(sr.QuestionError, match=r"already must be true or false.*shape \(9,\)"):
        withhold_rows(rates, _rule(5), already=already[:3])


def test_rows_that_the_sums_give_away_are_named() -> None:
    frame = _survey(np.array([[2, 1], [70, 1]]), np.array([[1, 0], [35, 0]]))
    # Nobody of positive weight lives in region 1.
    frame.loc[frame["region"] == 1, "w"] = 0.0
    rates = sr.estimate_rates(sr.SampleDesign(frame, weight="w"), "y", by=["sex", "region"])
    with pytest.warns(sr.RatesWarning, match=r"give away 1 row \('0, 0'\)"):
        found = withhold_rows(rates, _rule(5))
    assert found.exposed.tolist() == [True, False, False, False]
    assert found.cells.tolist() == [True, True, True, False]


def test_everyone_as_one_row() -> None:
    frame = pd.DataFrame({"y": [1, 0, 0]})
    rates = sr.estimate_rates(sr.SampleDesign(frame), "y")
    assert withhold_rows(rates, _rule(5)).cells.tolist() == [True]
    assert withhold_rows(rates, _rule(1)).cells.tolist() == [False]


def test_everyone_is_hidden_in_all_outcomes_or_in_none() -> None:
    frame = pd.DataFrame({"y": [1.0, 0.0] * 10, "z": [1.0, 0.0] + [np.nan] * 18})
    rates = sr.estimate_rates(sr.SampleDesign(frame), ["y", "z"])
    assert withhold_rows(rates, _rule(5)).cells.tolist() == [True, True]


def test_masks_are_refused() -> None:
    frame = pd.DataFrame({"y": [1, 0, 0], "a": [True, True, False], "b": [False, True, True]})
    rates = sr.estimate_rates(sr.SampleDesign(frame), "y", by={"a": "a", "b": "b"})
    with pytest.raises(sr.QuestionError, match="masks, which may overlap"):
        withhold_rows(rates, _rule(5))


@given(st.integers(0, 10**12), st.integers(1, 5000))
def test_rounding_is_half_up(value: int, base: int) -> None:
    quotient = (Decimal(value) / base).quantize(Decimal(1), rounding=ROUND_HALF_UP)
    expected = int(quotient) * base
    assert round_counts([value], base).tolist() == [expected]
    assert round_counts([float(value)], base).tolist() == [float(expected)]


def test_rounding_keeps_what_is_withheld_and_its_kind() -> None:
    rounded = round_counts(np.array([np.nan, 15.0, 14.999]), 10)
    assert np.isnan(rounded[0])
    assert rounded[1:].tolist() == [20.0, 10.0]
    assert round_counts(np.array([5, 15], dtype=np.uint8), 100).dtype.kind == "i"


@pytest.mark.parametrize(
    ("values", "base", "message"),
    [
        ([-1], 10, "none of them negative"),
        (["a"], 10, "must be counts"),
        ([np.inf], 10, "negative or infinite"),
        ([1], 0, "base must be a whole number"),
        ([1], 2.5, "base must be a whole number"),
        ([1], True, "base must be a whole number"),
    ],
)
def test_bad_rounding(values: list[Any], base: Any, message: str) -> None:
    with pytest.raises(sr.QuestionError, match=message):
        round_counts(values, base)
