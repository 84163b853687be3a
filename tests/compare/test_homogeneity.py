"""Tests that all rates are equal: the definition, published tables, known special cases."""

from __future__ import annotations

import warnings
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, assume, given, settings
from scipy import linalg, stats

import svyrates as sr
from tests import reference
from tests.outside import published
from tests.reference import Survey
from tests.strategies import frame_of, surveys


def _plain(survey: Survey, groups: list[int], df: float) -> dict[str, float]:
    """Rao and Scott by the definition: generalised eigenvalues, another set of contrasts."""
    p = np.array([reference.rate(survey, 0, g) for g in groups])
    members = [reference.members(survey, 0, g) for g in groups]
    size = np.array([sum(survey.records[i].weight for i in m) for m in members])
    n = float(sum(len(m) for m in members))
    share = size / size.sum()
    pooled = float(share @ p)
    x2 = 0.0
    for s, rate in zip(share, p, strict=True):
        x2 += n * s * (rate - pooled) ** 2 / (pooled * (1 - pooled))
    v = reference.covariance(survey, [reference.scores(survey, 0, g) for g in groups])
    simple = np.diag(pooled * (1 - pooled) / (n * share))
    k = len(groups)
    # Every group against the next, instead of against the first.
    c = np.eye(k)[:-1] - np.eye(k)[1:]
    delta = linalg.eigh(c @ v @ c.T, c @ simple @ c.T, eigvals_only=True)
    nu = delta.sum() ** 2 / (delta**2).sum()
    f = x2 / delta.sum()
    d = c @ p
    wald = float(d @ np.linalg.solve(c @ v @ c.T, d))
    q = k - 1
    return {
        "chi_square": x2,
        "statistic": f,
        "first_order_p": float(stats.f.sf(f, q, q * df)),
        "second_order_p": float(stats.f.sf(f, nu, nu * df)),
        "wald_p": float(stats.f.sf((df - q + 1) / (df * q) * wald, q, df - q + 1)),
        "df1": nu,
        "smallest": float(delta.min()),
        "largest": float(delta.max()),
    }


@settings(max_examples=60, suppress_health_check=[HealthCheck.filter_too_much])
@given(survey=surveys())
def test_against_the_definition(survey: Survey) -> None:
    frame, arguments = frame_of(survey)
    present = sorted(frame["group"].dropna().unique().tolist())
    assume(len(present) >= 2)
    assume(all(0.001 < reference.rate(survey, 0, g) < 0.999 for g in present))
    df = min(reference.domain_df(survey, 0, g) for g in present)
    assume(df >= len(present))
    expected = _plain(survey, present, df)
    assume(expected["smallest"] > 1e-4)
    rates = sr.estimate_rates(sr.SampleDesign(frame, **arguments), "y0", by="group", where="inside")
    test = sr.homogeneity_test(rates)
    for name in ("chi_square", "statistic", "df1", "first_order_p", "second_order_p", "wald_p"):
        assert getattr(test, name)[0] == pytest.approx(expected[name], rel=1e-6, abs=1e-9), name
    assert test.design_effects[0][0] == pytest.approx(expected["largest"], rel=1e-6)
    assert test.p[0] == test.second_order_p[0]
    n = [len(reference.members(survey, 0, g)) for g in present]
    raw = [reference.rate(survey, 0, g, weighted=False) for g in present]
    y = np.rint(np.multiply(raw, n))
    table = np.array([y, np.subtract(n, y)])
    pearson = stats.chi2_contingency(table, correction=False)
    assert test.simple_chi_square[0] == pytest.approx(pearson.statistic, rel=1e-9)
    assert test.simple_p[0] == pytest.approx(pearson.pvalue, rel=1e-9)


def _simple_random(copies: int = 1) -> pd.DataFrame:
    rng = np.random.default_rng(4)
    n = 600
    group = rng.choice(list("abcd"), n)
    y = (rng.random(n) < 0.3 + 0.1 * (group == "a")).astype(int)
    data = pd.DataFrame({"g": group, "y": y, "unit": np.arange(n)})
    return pd.concat([data] * copies, ignore_index=True)


def test_a_simple_random_sample_is_pearsons_test() -> None:
    data = _simple_random()
    test = sr.homogeneity_test(sr.estimate_rates(sr.SampleDesign(data), "y", by="g"))
    pearson = stats.chi2_contingency(pd.crosstab(data["y"], data["g"]), correction=False)
    assert test.chi_square[0] == pytest.approx(pearson.statistic, rel=1e-12)
    # Design effects are near 1: the covariance is not pooled, and has a factor n/(n - 1).
    np.testing.assert_allclose(test.design_effects[0], 1.0, atol=0.15)
    assert test.p[0] == pytest.approx(pearson.pvalue, abs=0.02)
    assert test.verdict[0] == "agrees"


@pytest.mark.parametrize("copies", [2, 5])
def test_equal_design_effects_divide_pearson(copies: int) -> None:
    """Records repeated within units: the corrected test sees through it, Pearson's does not."""
    once = sr.homogeneity_test(
        sr.estimate_rates(sr.SampleDesign(_simple_random(), clusters="unit"), "y", by="g")
    )
    data = _simple_random(copies)
    test = sr.homogeneity_test(
        sr.estimate_rates(sr.SampleDesign(data, clusters="unit"), "y", by="g")
    )
    np.testing.assert_allclose(
        test.design_effects[0], copies * np.array(once.design_effects[0]), rtol=1e-9
    )
    assert test.simple_chi_square[0] == pytest.approx(copies * once.simple_chi_square[0])
    for name in ("statistic", "first_order_p", "second_order_p", "wald_p"):
        assert getattr(test, name)[0] == pytest.approx(getattr(once, name)[0], rel=1e-9)


def test_couples() -> None:
    """Lohr, chapter 10 (recalled): a table of 500 households, then of 500 identical couples."""
    case = published("couples")
    rows = []
    for i, row in enumerate(case["inputs"]["table"]):
        for j, size in enumerate(row):
            rows += [(i, j)] * size
    single = pd.DataFrame(rows, columns=["g", "y"])
    single["household"] = np.arange(len(single))
    couples = pd.concat([single, single], ignore_index=True)
    said = case["published"]
    one = sr.homogeneity_test(sr.estimate_rates(sr.SampleDesign(single), "y", by="g"))
    assert one.simple_chi_square[0] == pytest.approx(float(said["X2"]), abs=0.0005)
    assert one.simple_p[0] == pytest.approx(float(said["p"]), abs=0.005)
    rates = sr.estimate_rates(sr.SampleDesign(couples, clusters="household"), "y", by="g")
    both = sr.homogeneity_test(rates, method="first-order")
    assert both.simple_chi_square[0] == pytest.approx(float(said["X2_doubled"]), abs=0.0005)
    assert both.simple_p[0] == pytest.approx(float(said["p_doubled"]), abs=0.005)
    # The sampling variance of a sample has n/(n - 1): 2.004 in place of 2, up to the pooling.
    assert both.design_effects[0][0] == pytest.approx(2.0, abs=0.03)
    assert both.chi_square[0] / both.design_effects[0][0] == pytest.approx(
        float(said["X2"]), abs=0.03
    )
    assert both.verdict[0] == "false-alarm"
    assert both.simple_error_rate[0] == pytest.approx(
        2 * stats.norm.sf(1.959964 / np.sqrt(2.004)), abs=0.01
    )


def test_litters() -> None:
    """Weil's litters (Rao & Scott 1992): two groups of clusters, the Wald F is t²."""
    case = published("litters")["inputs"]
    rows = [
        (group, litter, int(i < y))
        for group in ("control", "treated")
        for litter, (n, y) in enumerate(case[group])
        for i in range(n)
    ]
    data = pd.DataFrame(rows, columns=["g", "litter", "y"])
    rates = sr.estimate_rates(sr.SampleDesign(data, strata="g", clusters="litter"), "y", by="g")
    test = sr.homogeneity_test(rates, method="wald")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
        gap = sr.compare_rates(rates)
    assert test.statistic[0] == pytest.approx(gap.statistic[0] ** 2, rel=1e-10)
    assert test.p[0] == pytest.approx(gap.p[0], rel=1e-9)
    assert test.simple_chi_square[0] == pytest.approx(8.8999, abs=5e-5)
    assert test.verdict[0] == "false-alarm"


def test_levels_order_and_replicates() -> None:
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    rates = sr.estimate_rates(design, "damp", by=["sex", "tenure"])
    both = sr.homogeneity_test(rates)
    assert both.levels == (("woman",), ("man",))
    for row, sex in enumerate(("woman", "man")):
        mask = (survey["sex"] == sex).to_numpy()
        alone = sr.homogeneity_test(sr.estimate_rates(design, "damp", by="tenure", where=mask))
        assert both.p[row] == pytest.approx(alone.p[0], rel=1e-9)
        assert both.shift_p[row] == pytest.approx(alone.shift_p[0], rel=1e-9)
    names = {name: f"{9 - i} {name}" for i, name in enumerate(survey["tenure"].cat.categories)}
    turned = survey.assign(tenure=survey["tenure"].astype(object).map(names))
    other = sr.SampleDesign(turned, weight="wt", strata="district", clusters="block")
    again = sr.homogeneity_test(sr.estimate_rates(other, "damp", by=["sex", "tenure"]))
    assert sorted(again.p) == pytest.approx(sorted(both.p), rel=1e-9)
    replicated = sr.make_replicates(design, "stratified-jackknife")
    jack = sr.homogeneity_test(sr.estimate_rates(replicated, "damp", by=["sex", "tenure"], df=88))
    np.testing.assert_allclose(jack.statistic, both.statistic, rtol=0.15)
    assert list(both.to_frame()["sex"]) == ["woman", "man"]


def test_edges() -> None:
    survey = sr.demo_survey(wave="2024")
    survey["heating"] = survey["heating"].cat.add_categories(["peat"])
    survey["never"] = np.where(survey["tenure"] == "owner", 0, survey["damp"])
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    empty = sr.homogeneity_test(sr.estimate_rates(design, "damp", by="heating"))
    assert "1 groups are empty and left out" in empty.note[0]
    certain = sr.homogeneity_test(sr.estimate_rates(design, "never", by="tenure"))
    assert "exactly 0 or 1" in certain.note[0]
    assert np.isnan(certain.wald_p[0])
    masks = sr.estimate_rates(design, "damp", by={"a": "mould", "b": "draught"})
    with pytest.raises(sr.ComparisonError, match="groups overlap"):
        sr.homogeneity_test(masks)
    assert np.isfinite(sr.homogeneity_test(masks, method="wald").p[0])
    with pytest.raises(sr.ComparisonError, match="one group only"):
        sr.homogeneity_test(sr.estimate_rates(design, "damp"))
    rates = sr.estimate_rates(design, "damp", by="tenure")
    with pytest.raises(sr.ComparisonError, match="method must be one of"):
        sr.homogeneity_test(rates, method="pearson")  # type: ignore[arg-type]
    few = sr.homogeneity_test(sr.estimate_rates(design, "damp", by="tenure", df=2), method="wald")
    assert few.verdict[0] == "undetermined"
    assert "too few degrees of freedom" in few.note[0]


@pytest.mark.simulation
def test_error_rates_by_simulation() -> None:
    """Clustered samples with equal rates: the corrected tests keep 5%, Pearson's errs as said."""
    rng = np.random.default_rng(12)
    rejected: dict[str, int] = {"second": 0, "wald": 0, "simple": 0}
    predicted, n_samples = [], 1500
    for _ in range(n_samples):
        cluster = np.repeat(np.arange(60), 12)
        effect = rng.normal(0, 0.7, 60)[cluster]
        y = (rng.random(720) < 1 / (1 + np.exp(0.5 - effect))).astype(int)
        data = pd.DataFrame({"c": cluster, "y": y, "g": (cluster % 4)})
        test = sr.homogeneity_test(
            sr.estimate_rates(sr.SampleDesign(data, clusters="c"), "y", by="g")
        )
        rejected["second"] += test.second_order_p[0] < 0.05
        rejected["wald"] += test.wald_p[0] < 0.05
        rejected["simple"] += test.simple_p[0] < 0.05
        predicted.append(test.simple_error_rate[0])
    share: dict[str, Any] = {name: count / n_samples for name, count in rejected.items()}
    # Twice the Monte Carlo error, and what 14 degrees of freedom a group add.
    assert 0.03 < share["second"] < 0.075
    assert 0.02 < share["wald"] < 0.075
    assert share["simple"] == pytest.approx(np.mean(predicted), abs=0.03)
