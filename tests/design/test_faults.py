"""Bad input to a design: each fault is named, counted, and never turned into a number."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import pytest

import svyrates as sr


def _frame(**columns: Any) -> pd.DataFrame:
    base = {
        "w": [1.0, 2.0, 3.0, 4.0, 5.0, 6.0],
        "s": ["a", "a", "a", "b", "b", "b"],
        "c": [1, 2, 2, 1, 2, 2],
        "n": [9, 9, 9, 7, 7, 7],
        "y": [0, 1, 0, 1, 1, 0],
    }
    return pd.DataFrame({**base, **columns})


GOOD: dict[str, Any] = {"weight": "w", "strata": "s", "clusters": "c", "population": "n"}

CASES: list[tuple[dict[str, Any], dict[str, Any], str]] = [
    (
        {"w": [1, 2, np.nan, 4, np.nan, 6]},
        {},
        r"weight 'w' is missing in 2 of 6 rows \(first: row 2",
    ),
    ({"w": [1, 2, -0.4, 4, 5, 6]}, {}, r"negative in 1 of 6 rows \(first: row 2, value -0.4"),
    ({"w": [1, 2, np.inf, 4, 5, 6]}, {}, r"infinite in 1 of 6 rows"),
    ({"w": [0.0] * 6}, {}, r"weight 'w' is zero in all 6 rows"),
    ({"w": list("123456")}, {}, r"weight 'w' holds String values, not numbers"),
    ({"w": [True] * 6}, {}, r"weight 'w' holds Boolean values, not numbers"),
    ({"w": pd.array([1, None, 3, 4, 5, 6], dtype="Int64")}, {}, r"missing in 1 of 6 rows"),
    ({"w": [1e308] * 6}, {}, r"more than a double can hold"),
    (
        {"s": ["a", None, "a", "b", "b", "b"]},
        {},
        r"strata 's' is missing in 1 of 6 rows \(first: row 1",
    ),
    ({"c": [1, 2, np.nan, 1, 2, 2]}, {}, r"clusters 'c' is missing in 1 of 6 rows"),
    ({"s": ["a", 1, "a", 1, "a", 1]}, {}, r"strata 's' mixes kinds of values"),
    ({"c": [[1], [2], [2], [1], [2], [2]]}, {}, r"(nested values|cannot|mixes|unhashable)"),
    ({"c": [1.0, np.inf, 2, 1, 2, 2]}, {}, r"clusters 'c' is infinite in 1 rows"),
    ({}, {"weight": "wt"}, r"weight: there is no column 'wt'. Did you mean 'w'"),
    ({}, {"strata": ["s", "zzz"]}, r"strata: there is no column 'zzz'"),
    ({}, {"clusters": 7}, r"clusters must be a column name|clusters"),
    ({"n": [9, 9, 8, 7, 7, 7]}, {}, r"population 'n' varies within 1 strata: 'a'"),
    (
        {"n": [1, 1, 1, 7, 7, 7]},
        {},
        r"smaller than the sample in 1 strata \(first: 2 units drawn of 1",
    ),
    (
        {"n": [0, 0, 0, 7, 7, 7]},
        {},
        r"population 'n' is missing, infinite or not positive in 3 of 6",
    ),
    ({}, {"population": ["n", "n", "n"]}, r"names 3 columns for 1 cluster stages"),
    ({"c": [1, 1, 1, 1, 2, 2]}, {}, r"1 strata hold a single cluster.*'a'.*where="),
    (
        {"c": [1, 1, 1, 1, 2, 2]},
        {"single_cluster_strata": "drop"},
        r"single_cluster_strata must be",
    ),
    (
        {"c": [1, 1, 1, 1, 2, 2]},
        {"single_cluster_strata": {"a": "z"}},
        r"strata that do not exist: 'z'",
    ),
    (
        {"c": [1, 1, 1, 1, 2, 2]},
        {"single_cluster_strata": {"b": "b"}},
        r"leaves 1 strata with a single",
    ),
]


@pytest.mark.parametrize(("columns", "options", "message"), CASES)
def test_fault_is_named(columns: dict[str, Any], options: dict[str, Any], message: str) -> None:
    with pytest.raises(sr.DesignError, match=message):
        sr.SampleDesign(_frame(**columns), **{**GOOD, **options})


def test_all_faults_are_reported_together() -> None:
    data = _frame(w=[1, 2, -1, 4, np.nan, 6], s=["a", None, "a", "b", "b", "b"])
    with pytest.raises(sr.DesignError) as raised:
        sr.SampleDesign(data, weight="w", strata="s", clusters="cc")
    text = str(raised.value)
    assert text.startswith("The design has 4 faults:")
    for part in ("weight 'w' is missing", "is negative", "strata 's' is missing", "no column 'cc'"):
        assert part in text


@pytest.mark.parametrize(
    ("data", "message"),
    [
        (pd.DataFrame(), "no records|no column"),
        (_frame().iloc[:0], "0 rows arrived"),
        (pd.DataFrame([[1, 2]], columns=["w", "w"]), "columns of the same name: 'w'"),
        (pd.DataFrame({0: [1], "w": [1]}), "1 column names are not text"),
        ([1, 2, 3], "must be a data frame"),
        (None, "must be a data frame"),
        (pd.Series([1.0]), "must be a data frame"),
        (np.ones((3, 2)), "must be a data frame"),
    ],
)
def test_data_that_is_no_frame(data: Any, message: str) -> None:
    with pytest.raises(sr.DesignError, match=message):
        sr.SampleDesign(data)


def test_errors_are_value_errors() -> None:
    with pytest.raises(ValueError, match="no column"):
        sr.SampleDesign(_frame(), weight="nothing like it")


def test_single_record_stratum_cannot_represent_itself() -> None:
    data = _frame(s=["a", "a", "a", "b", "b", "c"])
    with pytest.raises(sr.DesignError, match="needs a stage below the single unit"):
        sr.SampleDesign(data, strata="s", single_cluster_strata="self-representing")


def test_certainty_unit_needs_no_policy() -> None:
    """One unit drawn of one: its stratum adds no variance, and nothing is wrong with it."""
    data = _frame(c=[1, 1, 1, 1, 2, 2], n=[1, 1, 1, 7, 7, 7])
    design = sr.SampleDesign(data, **GOOD)
    assert design.n_strata == 2


def test_collapsing_pairs_in_sorted_order() -> None:
    data = pd.DataFrame({"s": list("edcba"), "c": [1] * 5, "y": [0, 1, 0, 1, 1]})
    design = sr.SampleDesign(data, strata="s", clusters="c", single_cluster_strata="collapse")
    assert design.n_strata == 2
    assert "a with b" in str(design)
    assert "c with d with e" in " ".join(str(design).split())


def test_a_lone_single_stratum_joins_the_next() -> None:
    data = pd.DataFrame({"s": list("aabcc"), "c": [1, 2, 1, 1, 2], "y": [0, 1, 0, 1, 1]})
    design = sr.SampleDesign(data, strata="s", clusters="c", single_cluster_strata="collapse")
    assert "joined: b with c" in " ".join(str(design).split())
    assert design.df == 5 - 2


def test_the_frame_is_not_touched() -> None:
    data = _frame()
    before = data.copy(deep=True)
    design = sr.SampleDesign(data, **GOOD)
    sr.estimate_rates(design, "y", by="s", where=data["c"] == 2)
    pd.testing.assert_frame_equal(data, before)
    assert design.frame.to_native() is data


def test_summary_says_what_was_found() -> None:
    text = str(sr.SampleDesign(_frame(), **GOOD))
    assert "Unit codes repeat across strata; they are read within strata." in text
    assert "21" in text
    assert "1: with finite population correction" in text
    relative = sr.SampleDesign(_frame(w=[0.5, 1.5, 0.8, 1.2, 1.1, 0.9]), weight="w")
    assert relative.weights_are_relative
    assert "population sizes are unknown" in str(relative)
    assert "none: every record has weight 1" in str(sr.SampleDesign(_frame()))


def test_summary_does_not_invent_a_repeat() -> None:
    data = _frame(c=[1, 2, 2, 3, 4, 4])
    assert "repeat across strata" not in str(sr.SampleDesign(data, **GOOD))


def test_summary_fits_a_terminal_and_a_notebook() -> None:
    design = sr.SampleDesign(_frame(), **GOOD)
    assert max(map(len, repr(design).splitlines())) <= 80
    assert "<table" in design._repr_html_()
