"""Waves: independent samples add their variances, shared clusters keep their covariance."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import svyrates as sr
from tests import reference
from tests.design.small_waves import (
    EXACT,
    LABELS,
    assert_independent,
    change_of,
    each_alone,
    one_design,
    one_frame,
    two_waves,
)
from tests.reference import Record, Survey

pl = pytest.importorskip("polars")
pa = pytest.importorskip("pyarrow")

R = sr.ReplicateWeights


@pytest.mark.parametrize(
    "options",
    [
        {},
        {"strata": None},
        {"clusters": None},
        {"strata": None, "clusters": None},
        {"weight": None},
    ],
)
def test_variances_of_independent_waves_add_up(options: dict[str, Any]) -> None:
    assert_independent(two_waves(**options))


def test_finite_populations_stay_with_their_wave() -> None:
    waves = {
        label: one_design(one_frame(7 + i).assign(N=6 + 5 * i), population="N")
        for i, label in enumerate(LABELS)
    }
    assert_independent(waves)


def _record(row: Any, wave: int) -> Record:
    groups = tuple(wave == i for i in range(2))
    return Record(row.w, (row.y,), groups, (row.s, row.c))


def _plain(waves: dict[str, sr.SampleDesign]) -> np.ndarray:
    """Covariance of the two rates by loops over records, clusters shared by their codes."""
    records = [
        _record(row, i)
        for i, design in enumerate(waves.values())
        for row in design.frame.to_native().itertuples()
    ]
    survey = Survey(records, n_cluster_stages=1, records_last=False)
    return reference.covariance(survey, [reference.scores(survey, 0, group) for group in (0, 1)])


@settings(max_examples=25)
@given(st.integers(1, 10_000), st.integers(2, 5), st.integers(2, 5))
def test_shared_clusters_keep_their_covariance(seed: int, first: int, second: int) -> None:
    """The waves may have some clusters in common and others not."""
    waves = {
        "2021": one_design(one_frame(seed, clusters=first)),
        "2024": one_design(one_frame(seed + 1, clusters=second, strata="abcd")),
    }
    rates = sr.estimate_rates(sr.combine_waves(waves, shared_clusters=True), "y", by="wave")
    expected = _plain(waves)
    np.testing.assert_allclose(rates.covariance, expected, rtol=1e-9, atol=1e-15)
    assert abs(expected[0, 1]) > 1e-9


@settings(max_examples=15)
@given(st.integers(1, 10_000), st.booleans())
def test_order_of_waves_only_turns_the_sign(seed: int, shared: bool) -> None:
    waves = two_waves(first=seed)
    turned = dict(reversed(waves.items()))
    one, other = (
        change_of(
            sr.estimate_rates(sr.combine_waves(given, shared_clusters=shared), "y", by="wave"),
            versus="2021",
        )
        for given in (waves, turned)
    )
    back = change_of(
        sr.estimate_rates(sr.combine_waves(turned, shared_clusters=shared), "y", by="wave"),
        versus="2024",
    )
    np.testing.assert_allclose(one.estimate, other.estimate, rtol=1e-9)
    np.testing.assert_allclose(one.estimate, -back.estimate, rtol=1e-9)
    np.testing.assert_allclose(one.se, back.se, rtol=1e-9)


def test_the_verdict_sees_the_shared_clusters() -> None:
    """In the demo survey people of the same blocks are alike in both waves."""
    waves = {
        label: sr.SampleDesign(
            sr.demo_survey(label), weight="wt", strata="district", clusters="block"
        )
        for label in LABELS
    }
    shared, independent = (
        change_of(
            sr.estimate_rates(sr.combine_waves(waves, shared_clusters=how), "damp", by="wave")
        )
        for how in (True, False)
    )
    np.testing.assert_allclose(shared.estimate, independent.estimate, rtol=1e-10)
    assert shared.correlation[0] > 0.3
    assert abs(independent.correlation[0]) < 1e-9
    assert shared.variance_ratio[0] < 0.8 * independent.variance_ratio[0]
    assert shared.verdict[0] != independent.verdict[0]


def test_the_stack_of_the_demo_survey_is_the_demo_survey() -> None:
    arguments: dict[str, Any] = {"weight": "wt", "strata": "district", "clusters": "block"}
    waves = {label: sr.SampleDesign(sr.demo_survey(label), **arguments) for label in LABELS}
    stacked = sr.combine_waves(waves, shared_clusters=True)
    whole = sr.SampleDesign(sr.demo_survey(), **arguments)
    one, other = (sr.estimate_rates(d, "damp", by=["wave", "tenure"]) for d in (stacked, whole))
    np.testing.assert_allclose(one.covariance, other.covariance, **EXACT)
    assert one.groups == other.groups


def test_pooled_rates_are_weighted_and_averages_keep_them() -> None:
    waves = two_waves()
    totals = [design.sum_of_weights for design in waves.values()]
    each = [table.rate[0] for table in each_alone(waves)]
    for average in (False, True):
        combined = sr.combine_waves(waves, average_weights=average)
        rates = sr.estimate_rates(combined, "y")
        assert rates.rate[0] == pytest.approx(np.average(each, weights=totals), rel=1e-12)
        expected = np.mean(totals) if average else np.sum(totals)
        assert combined.sum_of_weights == pytest.approx(expected, rel=1e-12)
    by_wave = sr.estimate_rates(combined, "y", by="wave")
    np.testing.assert_allclose(by_wave.rate, each, rtol=1e-12)
    np.testing.assert_allclose(by_wave.se, [t.se[0] for t in each_alone(waves)], rtol=1e-10)


def test_an_average_without_weights_has_a_weight_of_its_own() -> None:
    data = [one_frame(seed).assign(weight="taken") for seed in (1, 2)]
    waves = {label: one_design(d, weight=None) for label, d in zip(LABELS, data, strict=True)}
    combined = sr.combine_waves(waves, average_weights=True)
    np.testing.assert_array_equal(combined.weights, 0.5)
    assert combined.declared["weight"] == "weight_"


KINDS: dict[str, Callable[[pd.DataFrame], Any]] = {
    "pandas": lambda data: data,
    "pandas nullable": lambda data: data.convert_dtypes(),
    "polars": pl.from_pandas,
    "polars lazy": lambda data: pl.from_pandas(data).lazy(),
    "pyarrow": lambda data: pa.Table.from_pandas(data, preserve_index=False),
}


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("replicated", [False, True])
def test_every_library(kind: str, replicated: bool) -> None:
    """Labels out of their alphabetical order, categories of different sets, text and integers."""

    def waves(convert: Callable[[pd.DataFrame], Any]) -> dict[str, sr.SampleDesign]:
        made = {}
        for seed, label in ((1, "later"), (2, "earlier")):
            data = one_frame(seed).assign(t=lambda d: d["g"])
            data["t"] = data["t"].astype("category" if seed == 1 else object)
            data["u"] = pd.Categorical(data["g"], ["z", "y", "x"] if seed == 1 else ["x", "y"])
            data["v"] = data["y"] + (0.0 if seed == 1 else 1.5)
            data["y"] = data["y"].astype(np.int64 if seed == 1 else np.int8)
            design = one_design(data)
            if replicated:
                data = sr.make_replicates(design, "stratified-jackknife").frame.to_native()
                options = {
                    "replicates": R("replicate_*", "stratified-jackknife", units_per_stratum=4)
                }
                made[label] = one_design(convert(data), **options)
            else:
                made[label] = one_design(convert(data))
        return made

    for shared in (True, False):
        combined = sr.combine_waves(waves(KINDS[kind]), shared_clusters=shared)
        expected = sr.combine_waves(waves(lambda data: data), shared_clusters=shared)
        assert type(combined.frame.to_native()) is type(
            KINDS[kind](one_frame(1)) if kind != "polars lazy" else pl.DataFrame()
        )
        found = sr.estimate_rates(combined, "y", by="wave")
        truth = sr.estimate_rates(expected, "y", by="wave")
        order = [1, 0] if kind == "pyarrow" else [0, 1]
        assert truth.groups == (("later",), ("earlier",))
        assert found.groups == tuple(truth.groups[i] for i in order)
        matrix = truth.covariance.to_numpy()[np.ix_(order, order)]
        np.testing.assert_allclose(found.covariance, matrix, **EXACT)
        for column in ("t", "u", "v"):
            values = combined.frame.get_column(column).to_list()
            assert values == expected.frame.get_column(column).to_list()
    if kind == "pandas":
        assert list(expected.frame.to_native()["u"].cat.categories) == ["z", "y", "x"]
        assert expected.frame.to_native()["wave"].cat.ordered


@pytest.mark.parametrize("convert", [KINDS["polars"], KINDS["pyarrow"]])
def test_categories_of_the_library_are_joined(convert: Callable[[pd.DataFrame], Any]) -> None:
    frames = []
    for seed, levels in ((1, ["y", "x"]), (2, ["x", "y", "z"])):
        data = one_frame(seed)
        frame = convert(data.assign(g=pd.Categorical(data["g"], levels)))
        if isinstance(frame, pl.DataFrame):
            frame = frame.with_columns(pl.col("g").cast(pl.String).cast(pl.Enum(levels)))
        frames.append(frame)
    waves = {label: one_design(frame) for label, frame in zip(LABELS, frames, strict=True)}
    rates = sr.estimate_rates(sr.combine_waves(waves), "y", by="g")
    labels = [label for (label,) in rates.groups]
    assert labels == (["y", "x", "z"] if isinstance(frames[0], pl.DataFrame) else ["x", "y"])


def test_other_names_and_decimals_in_another_wave() -> None:
    data = one_frame(2)
    other = data.rename(columns={"s": "c", "c": "s", "w": "weight_2024"})
    other["weight_2024"] *= 100
    same = sr.combine_waves(two_waves(), shared_clusters=True)
    waves = {
        "2021": one_design(one_frame(1)),
        "2024": sr.SampleDesign(
            other, weight="weight_2024", weight_decimals=2, strata="c", clusters="s"
        ),
    }
    renamed = sr.combine_waves(waves, shared_clusters=True)
    one, two = (sr.estimate_rates(d, "y", by="wave").covariance for d in (same, renamed))
    np.testing.assert_allclose(one, two, rtol=1e-9)
    assert set(renamed.frame.columns) == {"wave", "s", "c", "w", "g", "y"}
    assert set(other.columns) == {"s", "c", "weight_2024", "g", "y"}


def test_columns_of_some_waves_are_left_out_with_a_warning() -> None:
    frames = [one_frame(1).assign(a=1, b=1, z=True), one_frame(2).assign(b="1", d=2, z=False)]
    waves = {label: one_design(d) for label, d in zip(LABELS, frames, strict=True)}
    with pytest.warns(sr.DesignWarning) as caught:
        combined = sr.combine_waves(waves)
    (message,) = (str(one.message) for one in caught)
    assert "2 columns are not in every wave and are left out of the stack: 'a', 'd'" in message
    assert "1 columns are of different types in the waves" in message
    assert combined.frame.columns == ["wave", "s", "c", "w", "g", "y", "z"]


@pytest.mark.parametrize("held", [2021, "2021", 2021.0])
def test_a_column_that_says_the_label_already_is_replaced(held: object) -> None:
    frames = [one_frame(1).assign(wave=held), one_frame(2)]
    waves = {label: one_design(d) for label, d in zip(LABELS, frames, strict=True)}
    rates = sr.estimate_rates(sr.combine_waves(waves), "y", by="wave")
    assert rates.groups == (("2021",), ("2024",))


def test_strata_that_name_the_wave_already() -> None:
    plain = sr.estimate_rates(sr.combine_waves(two_waves()), "y", by="wave")
    waves = {
        label: one_design(one_frame(1 + i).assign(wave=label), strata=["s", "wave"])
        for i, label in enumerate(LABELS)
    }
    combined = sr.combine_waves(waves)
    assert combined.declared["strata"] == ("s", "wave")
    found = sr.estimate_rates(combined, "y", by="wave")
    np.testing.assert_allclose(found.covariance, plain.covariance, **EXACT)


def _lone(seed: int, where: str) -> pd.DataFrame:
    data = one_frame(seed, strata="abcde")
    return data[(data["c"] == 0) | ~data["s"].isin(list(where))].reset_index(drop=True)


@pytest.mark.parametrize(
    ("policies", "where"),
    [
        (("collapse", "collapse"), ("b", "c")),
        (("collapse", "collapse"), ("abc", "d")),
        (("collapse", {"e": "a"}), ("abcd", "e")),
        (({"b": "c"}, {"d": "e", "a": "e"}), ("b", "da")),
        (("grand-mean", "grand-mean"), ("ab", "c")),
        (("self-representing", "self-representing"), ("a", "ab")),
    ],
)
def test_single_clusters_are_joined_within_waves(policies: Any, where: Any) -> None:
    waves = {
        label: one_design(_lone(3 + i, where[i]), single_cluster_strata=policies[i])
        for i, label in enumerate(LABELS)
    }
    assert_independent(waves)


def test_shared_policies_are_passed_on() -> None:
    waves = {
        label: one_design(_lone(3 + i, "bc"), single_cluster_strata="collapse")
        for i, label in enumerate(LABELS)
    }
    combined = sr.combine_waves(waves, shared_clusters=True)
    assert combined.joined_strata == (("b", "c"),)
