"""Replicates of several waves: under one another where clusters are shared, else side by side."""

from __future__ import annotations

import warnings
from typing import Any

import numpy as np
import pandas as pd
import pytest

import svyrates as sr
from tests.design.small_waves import (
    EXACT,
    LABELS,
    assert_independent,
    change_of,
    one_design,
    one_frame,
    two_waves,
)

R = sr.ReplicateWeights


def _made(waves: dict[str, sr.SampleDesign], scheme: Any, **options: Any) -> dict[str, Any]:
    return {label: sr.make_replicates(design, scheme, **options) for label, design in waves.items()}


SCHEMES: list[tuple[str, dict[str, Any], int]] = [
    ("stratified-jackknife", {}, 4),
    ("bootstrap", {"count": 40, "seed": 5}, 4),
    ("balanced-repeated-replication", {}, 2),
    ("fay", {"fay": 0.4}, 2),
    ("paired-jackknife", {"both_halves": True}, 2),
]


@pytest.mark.parametrize(("scheme", "options", "clusters"), SCHEMES)
def test_replicates_of_shared_clusters(scheme: str, options: dict[str, Any], clusters: int) -> None:
    """Replicates made wave by wave from the same clusters are those of the whole."""
    waves = {
        label: one_design(one_frame(1 + i, clusters=clusters)) for i, label in enumerate(LABELS)
    }
    stacked = sr.combine_waves(_made(waves, scheme, **options), shared_clusters=True)
    whole = sr.make_replicates(sr.combine_waves(waves, shared_clusters=True), scheme, **options)
    one, other = (sr.estimate_rates(d, "y", by="wave") for d in (stacked, whole))
    np.testing.assert_allclose(one.covariance, other.covariance, **EXACT)
    assert abs(one.covariance.iloc[0, 1]) > 1e-6
    np.testing.assert_array_equal(one.df, other.df)
    assert stacked.replicates.names == whole.replicates.names


@pytest.mark.parametrize(("scheme", "options", "clusters"), SCHEMES)
def test_replicates_of_independent_waves(
    scheme: str, options: dict[str, Any], clusters: int
) -> None:
    waves = {
        label: one_design(one_frame(1 + i, clusters=clusters, strata="abc" if i else "abcd"))
        for i, label in enumerate(LABELS)
    }
    made = _made(waves, scheme, **options)
    assert_independent(made)
    combined = sr.combine_waves(made)
    sets = [design.replicates for design in made.values()]
    assert combined.replicates.count == sum(one.count for one in sets)
    assert combined.replicates.df == sum(one.df for one in sets)
    rates = sr.estimate_rates(combined, "y", by="wave", df="design")
    np.testing.assert_array_equal(rates.df, sum(design.df for design in waves.values()))


def test_a_pooled_rate_of_independent_replicates_by_hand() -> None:
    made = _made(two_waves(), "stratified-jackknife")
    variance = 0.0
    frames = [design.frame.to_native() for design in made.values()]
    whole = pd.concat(frames)
    centre = np.average(whole["y"], weights=whole["w"])
    for moved in (0, 1):
        for r in range(1, 13):
            w = [f[f"replicate_{r}"] if i == moved else f["w"] for i, f in enumerate(frames)]
            away = np.average(whole["y"], weights=pd.concat(w)) - centre
            variance += 3 / 4 * away**2
    for average in (False, True):
        rates = sr.estimate_rates(sr.combine_waves(made, average_weights=average), "y")
        assert rates.variance[0] == pytest.approx(variance, rel=1e-10)


def test_satterthwaite_over_sets_side_by_side() -> None:
    made = _made(two_waves(), "stratified-jackknife")
    alone = [sr.estimate_rates(d, "y", by="g", df="satterthwaite").df for d in made.values()]
    both = sr.estimate_rates(sr.combine_waves(made), "y", by=["wave", "g"], df="satterthwaite")
    np.testing.assert_allclose(both.df, np.concatenate(alone), rtol=1e-9)
    # For the change, the two variances with their degrees of freedom stand beside each other.
    combined = sr.combine_waves(made)
    change = change_of(sr.estimate_rates(combined, "y", by="wave", df="satterthwaite"))
    rates = [sr.estimate_rates(d, "y", df="satterthwaite") for d in made.values()]
    total = sum(table.variance[0] for table in rates)
    parts = sum(table.variance[0] ** 2 / table.df[0] for table in rates)
    assert change.df[0] == pytest.approx(total**2 / parts, rel=1e-9)


@pytest.mark.parametrize("shared", [True, False])
def test_averaged_replicates_sum_to_the_average_population(shared: bool) -> None:
    made = _made(two_waves(), "stratified-jackknife")
    whole, average = (
        sr.combine_waves(made, shared_clusters=shared, average_weights=how).frame
        for how in (False, True)
    )
    for name in ("w", *(f"replicate_{r}" for r in range(1, 13))):
        halves = whole.get_column(name).to_numpy() / 2
        np.testing.assert_allclose(average.get_column(name).to_numpy(), halves, rtol=1e-15)


def test_three_waves_combined_in_two_ways() -> None:
    waves = {str(i): one_design(one_frame(i)) for i in (1, 2, 3)}
    made = _made(waves, "stratified-jackknife")
    at_once = sr.combine_waves(made)
    pair = sr.combine_waves({"1": made["1"], "2": made["2"]}, name="early")
    last = made["3"]
    with pytest.warns(sr.DesignWarning, match="'early'"):
        nested = sr.combine_waves({"pair": _unwave(pair), "3": last})
    one, other = (sr.estimate_rates(d, "y").variance[0] for d in (at_once, nested))
    assert one == pytest.approx(other, rel=1e-10)
    assert len(nested.replicates.side_by_side) == 3


def _unwave(design: sr.SampleDesign) -> sr.SampleDesign:
    """The pair with as many stratum columns as a single wave."""
    data = design.frame.to_native()
    data = data.assign(s=data["early"].astype(str) + data["s"])
    return sr.SampleDesign(data, weight="w", strata="s", clusters="c", replicates=design.replicates)


def test_factors_and_decimals_that_differ_become_finished_weights() -> None:
    made = _made(two_waves(), "stratified-jackknife")
    expected = {
        shared: sr.estimate_rates(sr.combine_waves(made, shared_clusters=shared), "y", by="wave")
        for shared in (True, False)
    }
    names = made["2021"].replicates.names
    data = made["2024"].frame.to_native()
    factors = data.assign(**{n: data[n] / data["w"] * 1000 for n in names})
    factors = factors.rename(columns={n: n.replace("replicate", "factor") for n in names})
    declared = R("factor_*", "stratified-jackknife", units_per_stratum=4, factors=True, decimals=3)
    waves = {"2021": made["2021"], "2024": one_design(factors, replicates=declared)}
    for shared, table in expected.items():
        for average in (False, True):
            combined = sr.combine_waves(waves, shared_clusters=shared, average_weights=average)
            assert not combined.replicates.factors
            found = sr.estimate_rates(combined, "y", by="wave")
            np.testing.assert_allclose(found.covariance, table.covariance, rtol=1e-9, atol=1e-17)
            total = sum(d.sum_of_weights for d in waves.values()) / (2 if average else 1)
            sums = [combined.frame.get_column(n).sum() for n in combined.replicates.names]
            np.testing.assert_allclose(np.mean(sums), total, rtol=0.02)
    both = {"2021": waves["2024"], "2024": waves["2024"]}
    kept = sr.combine_waves(both, shared_clusters=True, average_weights=True)
    assert kept.replicates.factors
    again = sr.estimate_rates(kept, "y", by="wave")
    alone = sr.estimate_rates(waves["2024"], "y")
    np.testing.assert_allclose(again.covariance, np.full((2, 2), alone.variance[0]), rtol=1e-9)


@pytest.mark.parametrize("whole_weights", [True, False])
def test_single_precision_stays_where_it_holds_the_weights(whole_weights: bool) -> None:
    frames = []
    for seed in (1, 2):
        data = one_frame(seed)
        data["w"] = data["w"].round() if whole_weights else data["w"]
        columns = sr.make_replicates(one_design(data), "stratified-jackknife").frame.to_native()
        names = [name for name in columns if name.startswith("replicate_")]
        frames.append(columns.astype(dict.fromkeys(names, np.float32)))
    declared = R("replicate_*", "stratified-jackknife", units_per_stratum=4)
    waves = {
        label: one_design(frame, replicates=declared)
        for label, frame in zip(LABELS, frames, strict=True)
    }
    shared = sr.combine_waves(waves, shared_clusters=True, average_weights=True)
    assert set(shared.frame.to_native().filter(like="replicate_").dtypes) == {np.dtype("f4")}
    combined = sr.combine_waves(waves)
    kinds = set(combined.frame.to_native().filter(like="replicate_").dtypes)
    assert kinds == {np.dtype("f4" if whole_weights else "f8")}
    assert_independent(waves)


def test_names_of_replicates_side_by_side_avoid_other_columns() -> None:
    made = _made(two_waves(), "bootstrap", count=5, seed=1, prefix="rw_")
    waves = {
        label: one_design(
            d.frame.to_native().assign(replicate_3=1), replicates=R("rw_*", "bootstrap")
        )
        for label, d in made.items()
    }
    names = sr.combine_waves(waves).replicates.names
    assert names == tuple(f"combined_replicate_{i}" for i in range(1, 11))


def test_a_group_that_a_jackknife_leaves_out_is_unknown_in_the_stack_too() -> None:
    """All its members in one cluster: the replicate without it is not missing at random."""
    frames = [one_frame(1), one_frame(2)]
    frames[0]["rare"] = ((frames[0]["s"] == "a") & (frames[0]["c"] == 1)).astype(int)
    frames[1]["rare"] = (frames[1]["g"] == "x").astype(int)
    waves = {label: one_design(d) for label, d in zip(LABELS, frames, strict=True)}
    jackknife = _made(waves, "stratified-jackknife")
    combined = sr.combine_waves(jackknife)
    rates = sr.estimate_rates(combined, "y", by=["wave", "rare"])
    assert np.isnan(rates.se).tolist() == [False, True, False, False]
    alone = sr.estimate_rates(jackknife["2024"], "y", by="rare")
    np.testing.assert_allclose(rates.se[2:], alone.se, rtol=1e-10)


def test_replicates_left_out_are_made_up_for_within_their_set() -> None:
    """One bootstrap of 40 leaves a few out; another of 400 cannot stand in for them."""
    frames = [one_frame(1), one_frame(2)]
    for data in frames:
        data["rare"] = ((data["s"] == "a") & (data["c"] > 0)).astype(int)
    waves = {label: one_design(d) for label, d in zip(LABELS, frames, strict=True)}
    made = {
        "2021": sr.make_replicates(waves["2021"], "bootstrap", count=40, seed=3),
        "2024": sr.make_replicates(waves["2024"], "bootstrap", count=400, seed=3),
    }
    data = made["2021"].frame.to_native()
    # Two replicates of the small set lose the group for certain, one of twenty.
    data.loc[data["rare"] == 1, ["replicate_1", "replicate_2"]] = 0.0
    made["2021"] = one_design(data, replicates=R("replicate_*", "bootstrap"))
    with pytest.warns(sr.DesignWarning, match="undefined in some replicates"):
        alone = sr.estimate_rates(made["2021"], "y", by="rare")
    with pytest.warns(sr.DesignWarning, match="undefined in some replicates"):
        rates = sr.estimate_rates(sr.combine_waves(made), "y", by=["wave", "rare"])
    np.testing.assert_allclose(rates.se[:2], alone.se, rtol=1e-10)
    covariance = rates.covariance.to_numpy()
    assert covariance[1, 1] == pytest.approx(alone.se[1] ** 2, rel=1e-10)
    data.loc[data["rare"] == 1, [f"replicate_{i}" for i in range(1, 7)]] = 0.0
    made["2021"] = one_design(data, replicates=R("replicate_*", "bootstrap"))
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", sr.DesignWarning)
        rates = sr.estimate_rates(sr.combine_waves(made), "y", by=["wave", "rare"])
    assert np.isnan(rates.se).tolist() == [False, True, False, False]
