"""Several comparisons at once: adjusted p-values and limits that hold together."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

import svyrates as sr
from svyrates.compare import multiplicity
from svyrates.compare.multiplicity import MULTIPLICITY, adjust, draw_smallest
from tests.quiet import compare_quietly

FIXTURES = Path(__file__).parents[2] / "fixtures" / "published"
METHODS = [method for method in MULTIPLICITY if method not in ("none", "max-t")]


def _by_hand(p: list[float], method: str) -> list[float]:
    """Adjusted p-values from the definitions, one loop each."""
    m = len(p)
    order = sorted(range(m), key=lambda i: p[i])
    harmonic = sum(1 / k for k in range(1, m + 1))
    out = [0.0] * m
    if method == "bonferroni":
        return [min(1.0, m * value) for value in p]
    if method == "sidak":
        return [1 - (1 - value) ** m for value in p]
    if method == "holm":
        worst = 0.0
        for rank, i in enumerate(order):
            worst = max(worst, (m - rank) * p[i])
            out[i] = min(1.0, worst)
        return out
    best = 1.0
    for rank in range(m - 1, -1, -1):
        i = order[rank]
        factor = {
            "hochberg": m - rank,
            "benjamini-hochberg": m / (rank + 1),
            "benjamini-yekutieli": harmonic * m / (rank + 1),
        }[method]
        best = min(best, factor * p[i])
        out[i] = best
    return out


@pytest.mark.parametrize("method", METHODS)
@given(p=st.lists(st.floats(1e-8, 1.0), min_size=1, max_size=12))
def test_against_the_definitions(method: str, p: list[float]) -> None:
    values = np.array([*p, np.nan])
    found = adjust(values, method, [])
    np.testing.assert_allclose(found[:-1], _by_hand(p, method), rtol=1e-9, atol=1e-12)
    assert np.isnan(found[-1])


def test_published_example() -> None:
    """Benjamini & Hochberg (1995), section 4; p-values and result seen quoted, counts recalled."""
    case = json.loads((FIXTURES / "multiple_tests.json").read_text(encoding="utf-8"))
    p = np.array(case["inputs"])
    alpha = case["published"]["alpha"]
    bh = adjust(p, "benjamini-hochberg", [])
    assert (bh < alpha).sum() == case["published"]["BH_rejects"]
    assert bh[3] == pytest.approx(0.0095 * 15 / 4)
    assert (adjust(p, "bonferroni", []) < alpha).sum() == case["published"]["bonferroni_rejects"]
    assert (adjust(p, "hochberg", []) < alpha).sum() == case["published"]["hochberg_rejects"]


@pytest.fixture(scope="module")
def rates() -> sr.RateTable:
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    return sr.estimate_rates(design, "damp", by="tenure")


@pytest.mark.parametrize("df", [6.0, 30.0, np.inf])
def test_max_t_of_all_pairs_is_the_studentized_range(df: float) -> None:
    """K independent rates of equal variance: Tukey's distribution, in scipy."""
    k, error = 5, 0.02
    plus, minus = np.triu_indices(k, 1)
    se = np.full(plus.size, error * np.sqrt(2))
    freedom = np.full(plus.size, df)
    drawn = draw_smallest(error**2 * np.eye(k), (plus, minus), se, freedom, "two-sided", 5)
    t = np.array([1.5, 2.2, 2.8, 3.4])
    p = 2 * (stats.norm.sf(t) if np.isinf(df) else stats.t.sf(t, df))
    exact = stats.studentized_range.sf(t * np.sqrt(2), k, df)
    # The error of a proportion of the draws, four times over.
    tolerance = 4 * np.sqrt(exact * (1 - exact) / drawn.smallest.size) + 2e-5
    np.testing.assert_array_less(np.abs(drawn.reaches(p) - exact), tolerance)


def test_max_t_of_unequal_correlations_and_df_against_simulation() -> None:
    """Rates with a covariance, compared with the first; the p-values simulated one by one."""
    rng = np.random.default_rng(8)
    root = rng.normal(size=(4, 4))
    covariance = root @ root.T / 100
    plus, minus = np.array([1, 2, 3]), np.zeros(3, dtype=int)
    difference = covariance[plus, plus] + covariance[0, 0] - 2 * covariance[plus, 0]
    df = np.array([9.0, 9.0, 25.0])
    drawn = draw_smallest(covariance, (plus, minus), np.sqrt(difference), df, "two-sided", 5)
    n = 40_000
    draws = rng.multivariate_normal(np.zeros(4), covariance, n)
    uniform = rng.random(n)
    smallest = np.ones(n)
    for row in range(3):
        z = (draws[:, plus[row]] - draws[:, 0]) / np.sqrt(difference[row])
        t = z / np.sqrt(stats.chi2.isf(uniform, df[row]) / df[row])
        smallest = np.minimum(smallest, 2 * stats.t.sf(np.abs(t), df[row]))
    for p in (0.002, 0.01, 0.03, 0.2):
        assert drawn.reaches(np.array([p]))[0] == pytest.approx((smallest <= p).mean(), abs=0.012)


def test_max_t_lies_between_the_raw_p_and_bonferroni(rates: sr.RateTable) -> None:
    gaps = compare_quietly(rates, multiplicity="max-t")
    bonferroni = compare_quietly(rates, multiplicity="bonferroni")
    assert (gaps.p_adjusted >= gaps.p).all()
    assert (gaps.p_adjusted <= bonferroni.p_adjusted + 1e-12).all()
    assert (gaps.simultaneous_low <= gaps.low).all()
    assert (gaps.simultaneous_low >= bonferroni.simultaneous_low).all()
    assert (gaps.simultaneous_high <= bonferroni.simultaneous_high).all()
    again = compare_quietly(rates, multiplicity="max-t")
    np.testing.assert_array_equal(gaps.p_adjusted, again.p_adjusted)
    assert (
        compare_quietly(rates, multiplicity="max-t", seed=2).p_adjusted != gaps.p_adjusted
    ).any()


@pytest.mark.parametrize("method", ["bonferroni", "sidak", "max-t"])
@pytest.mark.parametrize("alternative", ["two-sided", "greater", "less"])
@pytest.mark.parametrize("limits", ["linear", "recovered"])
def test_simultaneous_limits_agree_with_adjusted_p(
    rates: sr.RateTable, method: str, alternative: str, limits: str
) -> None:
    """Limits exclude zero where the adjusted p-value is below alpha."""
    gaps = compare_quietly(
        rates, multiplicity=method, alternative=alternative, limits=limits, level=0.6
    )
    excluded = (gaps.simultaneous_low > 0) | (gaps.simultaneous_high < 0)
    if limits == "linear":
        np.testing.assert_array_equal(excluded, gaps.p_adjusted < 0.4)
    assert (gaps.simultaneous_low <= gaps.low).all()
    assert (gaps.simultaneous_high >= gaps.high).all()


def test_bonferroni_limits_are_limits_at_a_higher_level(rates: sr.RateTable) -> None:
    gaps = compare_quietly(rates, multiplicity="bonferroni", limits="recovered")
    direct = compare_quietly(rates, limits="recovered", level=1 - 0.05 / len(gaps))
    np.testing.assert_allclose(gaps.simultaneous_low, direct.low, rtol=1e-12)
    np.testing.assert_allclose(gaps.simultaneous_high, direct.high, rtol=1e-12)


def test_families_are_levels_or_the_table() -> None:
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    rates = sr.estimate_rates(design, "damp", by=["terrain", "tenure"])
    by_level = compare_quietly(rates, multiplicity="holm")
    together = compare_quietly(rates, multiplicity="holm", family="table")
    upland = np.array([level[1] == "upland" for level in by_level.levels])
    for part in (upland, ~upland):
        expected = _by_hand(by_level.p[part].tolist(), "holm")
        np.testing.assert_allclose(by_level.p_adjusted[part], expected, rtol=1e-12)
    np.testing.assert_allclose(together.p_adjusted, _by_hand(together.p.tolist(), "holm"))
    assert "Families of 6 comparisons within terrain" in str(by_level)
    assert "A family of 12 comparisons" in str(together)
    largest = compare_quietly(rates, multiplicity="max-t", family="table")
    assert (largest.p_adjusted <= np.minimum(12 * largest.p, 1) + 1e-12).all()
    assert (largest.p_adjusted >= largest.p).all()


def test_undefined_comparisons_do_not_count() -> None:
    survey = sr.demo_survey(wave="2024")
    survey["heating"] = survey["heating"].cat.add_categories(["peat"])
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    rates = sr.estimate_rates(design, "draught", by="heating")
    for method in (*METHODS, "max-t"):
        gaps = compare_quietly(rates, "gas boiler", multiplicity=method)
        tested = ~np.isnan(gaps.p)
        assert not tested.all()
        assert np.isnan(gaps.p_adjusted[~tested]).all()
        assert (gaps.p_adjusted[tested] <= np.minimum(tested.sum() * 3 * gaps.p[tested], 1)).all()
        assert set(gaps.conclusion[~tested]) == {"no test"}


def test_a_certain_rate_joins_by_bonferroni() -> None:
    """A test without a variance has no place in the draws; it adds its own p to the others'."""
    data = {
        "g": ["none"] * 14 + ["a"] * 40 + ["b"] * 40,
        "y": [0] * 14 + [1, 0] * 20 + [1, 1, 0, 0] * 10,
    }
    rates = sr.estimate_rates(sr.SampleDesign(pd.DataFrame(data)), "y", by="g")
    gaps = compare_quietly(rates, multiplicity="max-t")
    certain = np.isnan(gaps.se)
    assert certain.sum() == 2
    assert (gaps.p_adjusted[certain] >= 2 * gaps.p[certain] - 1e-12).all()
    assert not np.isnan(gaps.p_adjusted).any()


@settings(max_examples=20)
@given(st.permutations(range(4)))
def test_relabelled_groups_have_the_same_adjusted_p(order: list[int]) -> None:
    survey = sr.demo_survey(wave="2024")
    names = list(survey["tenure"].cat.categories)
    survey["g"] = survey["tenure"].map({name: f"g{order[i]}" for i, name in enumerate(names)})
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    gaps = compare_quietly(sr.estimate_rates(design, "mould", by="g"), multiplicity="holm")
    plain = compare_quietly(sr.estimate_rates(design, "mould", by="tenure"), multiplicity="holm")
    assert sorted(gaps.p_adjusted) == pytest.approx(sorted(plain.p_adjusted))


def test_many_pairs_in_bounded_memory(monkeypatch: pytest.MonkeyPatch) -> None:
    """The draws come in pieces, and the pieces make no difference to what they are for."""
    k = 30
    plus, minus = np.triu_indices(k, 1)
    se, df = np.full(plus.size, np.sqrt(2)), np.full(plus.size, 40.0)
    monkeypatch.setattr(multiplicity, "_MOST_WORK", 5_000 * plus.size)
    monkeypatch.setattr(multiplicity, "_AT_A_TIME", 1_000 * plus.size)
    drawn = draw_smallest(np.eye(k), (plus, minus), se, df, "two-sided", 1)
    assert drawn.smallest.size == 5_000
    exact = stats.studentized_range.sf(3.9 * np.sqrt(2), k, 40)
    assert drawn.reaches(2 * stats.t.sf(np.array([3.9]), 40))[0] == pytest.approx(exact, abs=0.02)
