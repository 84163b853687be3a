"""Waves that do not fit together: each reason is named, and all of them at once."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pandas as pd
import pytest

import svyrates as sr
from tests.design.small_waves import LABELS, one_design, one_frame, two_waves

pl = pytest.importorskip("polars")
Design = Callable[[], sr.SampleDesign]


def _replicated(scheme: Any = "stratified-jackknife", **options: Any) -> sr.SampleDesign:
    return sr.make_replicates(one_design(one_frame(1)), scheme, **options)


def _declared(**options: Any) -> sr.SampleDesign:
    data = _replicated("bootstrap", count=12, seed=2).frame.to_native()
    return one_design(data, replicates=sr.ReplicateWeights("replicate_*", **options))


def _lone(policy: Any, population: str | None = None) -> sr.SampleDesign:
    data = one_frame(1)
    data = data[(data["s"] != "b") | (data["c"] == 0)].assign(N=9)
    return one_design(data, single_cluster_strata=policy, population=population)


def _with(**columns: Any) -> sr.SampleDesign:
    return one_design(one_frame(1).assign(**columns))


def _plain(**options: Any) -> sr.SampleDesign:
    return one_design(one_frame(1), **options)


CASES: list[tuple[Design, Design, dict[str, Any], str]] = [
    (
        _plain,
        lambda: one_design(pl.from_pandas(one_frame(2))),
        {},
        "different libraries: '2021' of pandas, '2024' of polars",
    ),
    (
        _plain,
        lambda: _plain(strata=["s", "g"]),
        {},
        "different numbers of `strata` columns: 1 in '2021', 2 in '2024'",
    ),
    (
        _plain,
        lambda: _plain(clusters=None),
        {},
        "different numbers of `clusters` columns: 1 in '2021', 0 in '2024'",
    ),
    (
        lambda: one_design(one_frame(1).assign(N=9), population="N"),
        _plain,
        {},
        "different numbers of `population` columns",
    ),
    (_plain, lambda: _plain(weight=None), {}, "waves '2024' have no weight"),
    (
        lambda: _plain(clusters=None),
        lambda: _plain(clusters=None),
        {"shared_clusters": True},
        "no clusters: there is nothing to share",
    ),
    (_plain, lambda: _with(wave="2021"), {}, "'2024' has a column 'wave' already.*name="),
    (_plain, lambda: _with(wave=None), {}, "'2024' has a column 'wave' already"),
    (_plain, lambda: _with(wave=[[1]] * len(one_frame(1))), {}, "a column 'wave' already"),
    (_plain, _plain, {"name": "c"}, "'c' is a column of the design: choose another name="),
    (_plain, _plain, {"name": "w"}, "'w' is a column of the design"),
    (_plain, _plain, {"name": 3}, "name must be the name of a column; got 3"),
    (
        _plain,
        lambda: one_design(one_frame(2).assign(v=1.0), weight="v"),
        {},
        "wave '2024' has columns 'w', but these are names of the first wave's",
    ),
    (
        lambda: _plain(strata=["s", "g"]),
        lambda: _plain(strata=["s", "s"]),
        {},
        "one column in two roles",
    ),
    (
        _plain,
        lambda: _with(s=one_frame(1)["s"].map({"a": 1, "b": 2, "c": 3})),
        {},
        "column 's' holds String and Int64 values",
    ),
    (
        lambda: _lone("collapse"),
        lambda: _lone("grand-mean"),
        {},
        "single_cluster_strata.*'collapse' in '2021', 'grand-mean' in '2024'",
    ),
    (
        lambda: _lone({"b": "a"}),
        lambda: _lone({"b": "c"}),
        {"shared_clusters": True},
        "a mapping in '2021', a mapping in '2024'.*must be the same in all",
    ),
    (_plain, _replicated, {}, "some waves have replicate weights, but not '2021'"),
    (
        _replicated,
        lambda: _declared(scheme="bootstrap", centre="replicate-mean"),
        {},
        "replicates of '2024' are centred on their mean",
    ),
    (
        _replicated,
        lambda: _replicated("bootstrap", count=9, seed=1),
        {"shared_clusters": True},
        "(?s)2 faults.*one count; here 12 in '2021', 9 in '2024'.*one scheme",
    ),
    (
        lambda: _declared(scheme="bootstrap"),
        lambda: _declared(scheme="bootstrap", centre="replicate-mean"),
        {"shared_clusters": True},
        "one centre; here full-sample in '2021', replicate-mean in '2024'",
    ),
    (
        lambda: _declared(scheme="coefficients", coefficients=0.1),
        lambda: _declared(scheme="coefficients", coefficients=0.2),
        {"shared_clusters": True},
        "coefficients of the replicates of '2024' differ from those of '2021'",
    ),
    (
        lambda: one_design(one_frame(1).assign(N=9), population="N"),
        lambda: one_design(one_frame(1).assign(N=8), population="N"),
        {"shared_clusters": True},
        "population 'N' varies within 3 strata",
    ),
]


@pytest.mark.parametrize(("first", "second", "options", "message"), CASES)
def test_waves_that_do_not_fit(
    first: Design, second: Design, options: dict[str, Any], message: str
) -> None:
    waves = dict(zip(LABELS, (first(), second()), strict=True))
    with pytest.raises(sr.DesignError, match=message):
        sr.combine_waves(waves, **options)


@pytest.mark.parametrize(
    ("waves", "message"),
    [
        ({}, "holds 0 waves; it takes at least two"),
        ({"2021": _plain()}, "holds 1 waves"),
        ([_plain(), _plain()], "mapping of label to SampleDesign; got list"),
        ({"2021": _plain(), "2024": one_frame(1)}, "wave '2024' must be a SampleDesign; got Data"),
        ({2021: _plain(), "2024": _plain()}, "labels of waves must be text; got 2021"),
    ],
)
def test_what_are_no_waves(waves: Any, message: str) -> None:
    with pytest.raises(sr.DesignError, match=message):
        sr.combine_waves(waves)


def test_every_fault_at_once() -> None:
    waves = {"2021": _plain(), "2024": _with(wave="1999", s=1.5)}
    waves["2024"] = sr.SampleDesign(waves["2024"].frame.to_native(), strata=["s", "g"])
    with pytest.raises(sr.DesignError) as raised:
        sr.combine_waves(waves)
    message = str(raised.value)
    assert message.startswith("The waves have 5 faults:")
    for part in ("`strata`", "`clusters`", "no weight", "'wave' already", "column 's' holds"):
        assert part in message


@pytest.mark.parametrize("shared", [True, False])
@pytest.mark.parametrize("average", [True, False])
def test_nothing_is_changed(shared: bool, average: bool) -> None:
    waves = {label: _replicated() for label in LABELS}
    before = {label: design.frame.to_native().copy() for label, design in waves.items()}
    weights = {label: design.weights.copy() for label, design in waves.items()}
    combined = sr.combine_waves(waves, shared_clusters=shared, average_weights=average)
    combined.frame.to_native().loc[:, "w"] = 0.0
    for label, design in waves.items():
        pd.testing.assert_frame_equal(design.frame.to_native(), before[label])
        np.testing.assert_array_equal(design.weights, weights[label])


def test_clusters_that_no_two_waves_share_are_questioned() -> None:
    waves = two_waves()
    other = one_frame(2)
    waves["2024"] = one_design(other.assign(c=other["c"] + 100))
    with pytest.warns(sr.DesignWarning, match="none of the 24 clusters is in two waves"):
        sr.combine_waves(waves, shared_clusters=True)
