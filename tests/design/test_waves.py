"""Waves in one design: independent samples, shared clusters, and replicates of both kinds."""

from __future__ import annotations

import warnings
from typing import Any

import numpy as np
import pandas as pd
import pytest

import svyrates as sr

WAVES = ("2021", "2024")


def _designs(**options: Any) -> dict[str, sr.SampleDesign]:
    arguments = {"weight": "wt", "strata": "district", "clusters": "block"} | options
    return {wave: sr.SampleDesign(sr.demo_survey(wave), **arguments) for wave in WAVES}


def _change(design: sr.SampleDesign, **options: Any) -> sr.ComparisonTable:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
        return sr.compare_rates(sr.estimate_rates(design, "damp", by="wave"), **options)


def test_independent_waves_add_their_variances() -> None:
    designs = _designs()
    both = sr.combine_waves(designs)
    rates = sr.estimate_rates(both, "damp", by="wave")
    alone = [sr.estimate_rates(design, "damp") for design in designs.values()]
    assert [label[0] for label in rates.groups] == list(WAVES)
    np.testing.assert_allclose(rates.rate, [one.rate[0] for one in alone], rtol=1e-13)
    np.testing.assert_allclose(rates.se, [one.se[0] for one in alone], rtol=1e-12)
    gaps = _change(both)
    assert gaps.se[0] ** 2 == pytest.approx(sum(one.variance[0] for one in alone), rel=1e-12)
    assert gaps.correlation[0] == pytest.approx(0.0, abs=1e-12)
    assert both.n_units == 224


def test_shared_clusters_keep_the_covariance_by_plain_loops() -> None:
    both = sr.combine_waves(_designs(), shared_clusters=True)
    found = sr.estimate_rates(both, "damp", by="wave").covariance.to_numpy()
    data = sr.demo_survey()
    z = []
    for wave in WAVES:
        mine = (data["wave"] == wave).to_numpy()
        w, y = data["wt"].to_numpy(), data["damp"].to_numpy()
        p = (w * y)[mine].sum() / w[mine].sum()
        z.append(np.where(mine, w * (y - p) / w[mine].sum(), 0.0))
    total = np.zeros((2, 2))
    for _, stratum in data.groupby("district"):
        units = [
            np.array([column[block.index].sum() for column in z])
            for _, block in stratum.groupby("block")
        ]
        mean = sum(units) / len(units)
        scale = len(units) / (len(units) - 1)
        total += scale * sum(np.outer(unit - mean, unit - mean) for unit in units)
    np.testing.assert_allclose(found, total, rtol=1e-10)
    assert abs(found[0, 1]) > 0.1 * found[0, 0]


def test_treating_shared_waves_as_independent_is_seen() -> None:
    """What lasts in a block is in both waves; only the design with shared blocks knows."""
    shared = _change(sr.combine_waves(_designs(), shared_clusters=True))
    apart = _change(sr.combine_waves(_designs()))
    assert shared.estimate[0] == pytest.approx(apart.estimate[0])
    assert shared.se[0] < 0.95 * apart.se[0]
    assert shared.variance_sources()["covariance"][0] < 1
    assert shared.simple_se[0] == pytest.approx(apart.simple_se[0])


def _with_replicates(seeds: tuple[int, int]) -> dict[str, sr.SampleDesign]:
    return {
        wave: sr.make_replicates(design, "bootstrap", count=30, seed=seed)
        for (wave, design), seed in zip(_designs().items(), seeds, strict=True)
    }


@pytest.mark.parametrize("average", [False, True])
def test_independent_replicates_stand_side_by_side(average: bool) -> None:
    designs = _with_replicates((1, 2))
    both = sr.combine_waves(designs, average_weights=average)
    assert both.replicates.count == 60
    assert both.replicates.df == sum(design.replicates.df for design in designs.values())
    alone = [sr.estimate_rates(design, "damp") for design in designs.values()]
    gaps = _change(both)
    assert gaps.se[0] ** 2 == pytest.approx(sum(one.variance[0] for one in alone), rel=1e-9)
    assert both.sum_of_weights == pytest.approx(694_000 * (1 if average else 2), rel=1e-9)


def test_shared_replicates_have_the_same_index() -> None:
    """Jackknife replicates of the stacked sample, or stacked replicates of the waves: the same."""
    stacked = sr.combine_waves(_designs(), shared_clusters=True)
    expected = _change(sr.make_replicates(stacked, "stratified-jackknife"))
    designs = {
        wave: sr.make_replicates(design, "stratified-jackknife")
        for wave, design in _designs().items()
    }
    both = sr.combine_waves(designs, shared_clusters=True)
    assert both.replicates.count == 112
    assert not both.replicates.may_leave_out
    gaps = _change(both)
    assert gaps.se[0] == pytest.approx(expected.se[0], rel=1e-9)
    assert gaps.correlation[0] == pytest.approx(expected.correlation[0], rel=1e-9)


def test_factors_and_decimals_become_finished_weights() -> None:
    designs = _with_replicates((1, 2))
    plain = sr.combine_waves(designs, shared_clusters=True)
    later = designs["2024"].frame.to_native().copy()
    names = list(designs["2024"].replicates.names)
    later[names] = later[names].div(later["wt"], axis=0)
    later["wt"] = later["wt"] * 100
    factors = sr.SampleDesign(
        later.rename(columns={"wt": "weight_2024", "district": "area", "block": "unit"}),
        weight="weight_2024", weight_decimals=2, strata="area", clusters="unit",
        replicates=sr.ReplicateWeights(names, "bootstrap", factors=True),
    )  # fmt: skip
    mixed = sr.combine_waves(designs | {"2024": factors}, shared_clusters=True)
    assert _change(mixed).se[0] == pytest.approx(_change(plain).se[0], rel=1e-9)


def test_average_weights_change_no_rate_of_a_wave() -> None:
    one, other = (
        sr.combine_waves(_designs(), shared_clusters=True, average_weights=average)
        for average in (False, True)
    )
    assert other.sum_of_weights == pytest.approx(694_000)
    for by in ("wave", None):
        rates = [sr.estimate_rates(design, "damp", by=by) for design in (one, other)]
        np.testing.assert_allclose(rates[0].rate, rates[1].rate, rtol=1e-12)
        np.testing.assert_allclose(rates[0].se, rates[1].se, rtol=1e-12)


def test_the_order_of_waves_only_turns_the_sign() -> None:
    designs = _designs()
    forward = sr.combine_waves(designs, shared_clusters=True)
    backward = sr.combine_waves(dict(reversed(designs.items())), shared_clusters=True)
    one, other = _change(forward), _change(backward)
    assert one.estimate[0] == pytest.approx(-other.estimate[0])
    assert one.se[0] == pytest.approx(other.se[0], rel=1e-12)
    assert (one.group, other.group) == (("2021",), ("2024",))


@pytest.mark.parametrize("library", ["polars", "pyarrow"])
@pytest.mark.parametrize("replicated", [False, True])
def test_other_frames(library: str, replicated: bool) -> None:
    module = pytest.importorskip(library)
    convert = module.from_pandas if library == "polars" else module.Table.from_pandas
    source = _with_replicates((1, 2)) if replicated else _designs()
    expected = _change(sr.combine_waves(source))
    designs = {}
    for wave, design in source.items():
        data = design.frame.to_native().drop(columns="wave")
        declared = sr.ReplicateWeights("replicate_*", "bootstrap") if replicated else None
        designs[wave] = sr.SampleDesign(
            convert(data), weight="wt", strata="district", clusters="block", replicates=declared
        )
    found = _change(sr.combine_waves(designs))
    assert found.se[0] == pytest.approx(expected.se[0], rel=1e-9)
    assert found.group == expected.group


def test_lone_strata_and_populations_go_along() -> None:
    designs = _designs(population="blocks_in_district", single_cluster_strata="collapse")
    both = sr.combine_waves(designs)
    alone = sum(sr.estimate_rates(design, "damp").variance[0] for design in designs.values())
    assert _change(both).se[0] ** 2 == pytest.approx(alone, rel=1e-12)


def test_columns_of_some_waves_are_left_out() -> None:
    designs = _designs()
    later = sr.demo_survey("2024").assign(new=1)
    designs["2024"] = sr.SampleDesign(later, weight="wt", strata="district", clusters="block")
    with pytest.warns(sr.DesignWarning, match="left out: 'new'"):
        both = sr.combine_waves(designs)
    assert "new" not in both.frame.columns


def _fault(designs: Any, message: str, **options: Any) -> None:
    with pytest.raises(sr.DesignError, match=message):
        sr.combine_waves(designs, **options)


def test_what_does_not_fit_together() -> None:
    designs = _designs()
    data = sr.demo_survey("2024")
    _fault({"2021": designs["2021"]}, "two waves or more")
    _fault([designs["2021"]], "two waves or more")
    _fault({"a": designs["2021"], "b": data}, r"waves 'b' are no SampleDesign")
    _fault(designs, "name must be the name of a column", name="")
    polars = pytest.importorskip("polars")
    _fault(designs | {"2024": sr.SampleDesign(polars.from_pandas(data))}, "2 libraries")
    _fault(designs | {"2024": sr.SampleDesign(data, weight="wt")}, "numbers of strata columns")
    replicated = _with_replicates((1, 2))
    _fault(designs | {"2024": replicated["2024"]}, "some waves have replicate weights")
    policy = _designs(single_cluster_strata="collapse")
    _fault(designs | {"2024": policy["2024"]}, "single_cluster_strata differs")
    mapped = {"single_cluster_strata": {"a": "b"}}
    _fault(_designs(**mapped), "a mapping of strata")
    bare = {wave: sr.SampleDesign(sr.demo_survey(wave), weight="wt") for wave in WAVES}
    _fault(bare, "shared_clusters=True needs clusters", shared_clusters=True)
    _fault(designs, "has a column 'sex' that holds other values", name="sex")
    renamed = sr.SampleDesign(
        data.rename(columns={"block": "unit"}).assign(block=1),
        weight="wt", strata="district", clusters="unit",
    )  # fmt: skip
    _fault(designs | {"2024": renamed}, "columns 'block' of another meaning")
    odd = data.assign(damp="yes")
    types = sr.SampleDesign(
        polars.from_pandas(odd), weight="wt", strata="district", clusters="block"
    )
    first = sr.SampleDesign(
        polars.from_pandas(sr.demo_survey("2021")), weight="wt", strata="district", clusters="block"
    )
    _fault({"2021": first, "2024": types}, "cannot be put below each other")


def test_replicates_that_do_not_fit_together() -> None:
    designs = _with_replicates((1, 2))
    file = designs["2024"].frame.to_native()
    names = list(designs["2024"].replicates.names)

    def other(columns: list[str], *arguments: Any, **options: Any) -> dict[str, sr.SampleDesign]:
        declared = sr.ReplicateWeights(columns, *arguments, **options)
        fits = {"weight": "wt", "strata": "district", "clusters": "block"}
        return designs | {"2024": sr.SampleDesign(file, **fits, replicates=declared)}

    few = other(names[:20], "bootstrap")
    _fault(few, "they have 30, 20 replicates", shared_clusters=True)
    with pytest.warns(sr.DesignWarning, match="'replicate_21'"):
        assert sr.combine_waves(few).replicates.count == 50
    _fault(other(names, "successive-difference"), "differ in scheme", shared_clusters=True)
    on_mean = other(names, "bootstrap", centre="replicate-mean")
    _fault(on_mean, "centred on their mean cannot stand side by side")


def test_single_precision_stays_single() -> None:
    designs = {}
    for wave, design in _with_replicates((1, 2)).items():
        names = list(design.replicates.names)
        data = design.frame.to_native().astype(dict.fromkeys(names, np.float32))
        declared = sr.ReplicateWeights("replicate_*", "bootstrap")
        designs[wave] = sr.SampleDesign(data, weight="wt", replicates=declared)
    both = sr.combine_waves(designs, shared_clusters=True, average_weights=True)
    frame: pd.DataFrame = both.frame.to_native()
    assert {str(frame[name].dtype) for name in both.replicates.names} == {"float32"}
