"""Published rates: what a report says is what the comparisons use."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import pytest
from scipy import stats

import svyrates as sr
from tests.outside import published
from tests.quiet import compare_quietly


def test_census_bureau_margins() -> None:
    """U.S. Census Bureau, ACS 2006 accuracy document, table B12001; counts as shares of 10⁸."""
    case = published("census_margins")
    given, said = case["inputs"], case["published"]
    unit = 1e8
    report = pd.DataFrame(
        {
            "sex": ["males", "females"],
            "share": [given["males_never_married"] / unit, given["females_never_married"] / unit],
            "margin": [given["moe_m"] / unit, given["moe_f"] / unit],
        }
    )
    rates = sr.rates_from_published(report, rate="share", by="sex", margin="margin", level=0.9)
    # The Bureau divides by 1.645, the quantile to three decimals.
    np.testing.assert_allclose(rates.se * unit, [said["se_m"], said["se_f"]], rtol=2e-4)
    np.testing.assert_allclose(rates.high - rates.rate, report["margin"], rtol=1e-12)
    total = sr.contrast(rates, {"males": 1, "females": 1}, level=0.9)
    assert total.estimate[0] * unit == pytest.approx(said["sum"])
    assert total.se[0] * unit == pytest.approx(said["se_sum"], rel=2e-4)
    limits = [total.low[0] * unit, total.high[0] * unit]
    assert limits == pytest.approx(said["ci90"], abs=30)


def test_census_bureau_proportion() -> None:
    """ACS General Handbook, chapter 8: numerator and denominator seen, printed margin recalled."""
    case = published("census_proportion")
    given, said = case["inputs"], case["published"]
    p = given["X"] / given["Y"]
    margin = np.sqrt(given["moe_X"] ** 2 - p**2 * given["moe_Y"] ** 2) / given["Y"]
    report = pd.DataFrame({"area": ["three areas"], "p": [100 * p], "margin": [100 * margin]})
    rates = sr.rates_from_published(report, rate="p", by="area", percent=True, margin="margin")
    assert rates.rate[0] == pytest.approx(float(said["P"]), abs=0.0005)
    assert 1.645 * rates.se[0] == pytest.approx(float(said["moe_P"]), abs=0.0005)


def test_precision_table_of_a_health_survey() -> None:
    """NCHS, NHIS OMB package 0920-0214 (202411), Attachment 8, Sample Adult table 1 (seen)."""
    case = published("precision_table")
    rows = [
        (float(p), n, cv)
        for p, printed in case["published"]["cv_percent"].items()
        for n, cv in zip(case["inputs"]["n"], printed, strict=True)
    ]
    report = pd.DataFrame(rows, columns=["p", "n", "cv"]).assign(cell=range(len(rows)))
    rates = sr.rates_from_published(
        report, rate="p", by="cell", n="n", design_effect=case["inputs"]["deff"]
    )
    assert len(rates.rate) == 80
    np.testing.assert_allclose(100 * rates.rse, report["cv"], atol=0.0051)
    np.testing.assert_allclose(rates.design_effect, 2.5, rtol=1e-12)
    factor = sr.rates_from_published(
        report, rate="p", by="cell", n="n", design_factor=np.sqrt(2.5).item()
    )
    np.testing.assert_allclose(factor.se, rates.se, rtol=1e-12)


def test_overlapping_intervals_can_hide_a_difference() -> None:
    """Schenker & Gentleman (2001): 56% against 44%, 200 each; the limits overlap, p = .017."""
    report = pd.DataFrame({"g": ["a", "b"], "p": [56.0, 44.0], "n": [200, 200]})
    rates = sr.rates_from_published(
        report, rate="p", by="g", percent=True, n="n", design_effect=1.0
    )
    assert rates.low[0] < rates.high[1]
    gaps = compare_quietly(rates)
    # The paper's p pools no variance: 0.12 over the root of the two variances.
    assert round(float(gaps.p[0]), 3) in (0.016, 0.017)
    assert gaps.verdict[0] == "agrees"


def test_part_against_whole() -> None:
    """The assessments' rule, r from the share: |W - P|/√(S_w² + (1 - 2 share) S_p²) (NAEP)."""
    share, part_se, whole_se = 0.3, 0.021, 0.012
    r = share * part_se / whole_se
    report = pd.DataFrame({"g": ["part", "whole"], "p": [0.42, 0.38], "se": [part_se, whole_se]})
    rates = sr.rates_from_published(report, rate="p", by="g", se="se", correlation=r)
    gaps = compare_quietly(rates)
    expected = np.sqrt(whole_se**2 + (1 - 2 * share) * part_se**2)
    assert gaps.se[0] == pytest.approx(expected, rel=1e-12)
    assert gaps.correlation[0] == pytest.approx(r, rel=1e-12)
    assert "with the correlations that were given" in str(gaps)


@pytest.fixture
def report() -> pd.DataFrame:
    return pd.DataFrame(
        {
            "year": ["2019", "2019", "2023", "2023"],
            "area": ["Coast", "Hills"] * 2,
            "share": [32.2, 35.0, 29.8, 36.1],
            "margin": [0.8, 1.1, 0.7, 1.3],
            "n": [5200, 3900, 5600, 3700],
        }
    )


def _read(report: pd.DataFrame, **options: Any) -> sr.RateTable:
    arguments = {"rate": "share", "by": ["year", "area"], "percent": True, "margin": "margin"}
    return sr.rates_from_published(report, **(arguments | options))


def test_every_comparator_works_on_a_report(report: pd.DataFrame) -> None:
    rates = _read(report, n="n")
    se = report["margin"].to_numpy() / 100 / stats.norm.ppf(0.95)
    np.testing.assert_allclose(rates.se, se, rtol=1e-12)
    gaps = compare_quietly(rates)
    assert gaps.levels == (("share", "2019"), ("share", "2023"))
    z = (0.322 - 0.35) / np.hypot(se[0], se[1])
    assert gaps.p[0] == pytest.approx(2 * stats.norm.sf(abs(z)), rel=1e-10)
    did = sr.difference_in_differences(rates)
    assert did.estimate[0] == pytest.approx((0.298 - 0.361) - (0.322 - 0.35))
    assert did.se[0] == pytest.approx(np.sqrt((se**2).sum()), rel=1e-12)
    test = sr.homogeneity_test(rates, method="wald")
    assert test.p[0] == pytest.approx(gaps.p[0], rel=1e-9)
    trend = sr.trend_test(_read(report.assign(k=[1, 2, 3, 4]), by="k"))
    assert trend.estimate[0] == pytest.approx(np.polyfit([1, 2, 3, 4], report["share"] / 100, 1)[0])
    for result in (rates, gaps, did, test, trend):
        assert "taken as independent of each other" in str(result).replace("\n  ", " ")
    # Where the report gives n, the simple formula is the binomial test of the published rates.
    n = report["n"].to_numpy()
    pooled = (n[0] * 0.322 + n[1] * 0.35) / (n[0] + n[1])
    simple = (0.322 - 0.35) / np.sqrt(pooled * (1 - pooled) * (1 / n[0] + 1 / n[1]))
    assert gaps.simple_p[0] == pytest.approx(2 * stats.norm.sf(abs(simple)), rel=1e-10)
    assert gaps.shift[0] == 0.0


def test_without_n_there_is_no_simple_formula(report: pd.DataFrame) -> None:
    gaps = compare_quietly(_read(report))
    assert np.isnan(gaps.simple_p).all()
    assert set(gaps.verdict) == {"undetermined"}
    assert all("no sample size was published" in note for note in gaps.note)
    assert gaps.variance_sources()[["weights", "clusters", "covariance"]].isna().all().all()


def test_what_needs_totals_says_so(report: pd.DataFrame) -> None:
    rates = _read(report)
    for versus in (sr.EVERYONE, sr.EVERYONE_ELSE):
        with pytest.raises(sr.ComparisonError, match="needs the totals behind the rates"):
            sr.compare_rates(rates, versus)
    with pytest.raises(sr.ComparisonError, match="needs crude rates"):
        sr.common_difference(rates)


def test_controlled_and_missing_margins(report: pd.DataFrame) -> None:
    report.loc[0, "margin"] = 0.0
    report.loc[3, "margin"] = np.nan
    rates = _read(report, n="n")
    assert rates.low[0] == rates.high[0] == rates.rate[0]
    assert "controlled to a known total" in rates.notes[0]
    assert np.isnan([rates.low[3], rates.se[3]]).all()
    gaps = compare_quietly(rates)
    assert gaps.se[0] == pytest.approx(rates.se[1])
    assert np.isnan(gaps.p[1])
    assert "no standard error was published for a rate" in gaps.note[1]
    report.loc[1, "margin"] = 0.0
    both = compare_quietly(_read(report))
    assert np.isnan(both.p[0])
    assert "the standard error is zero" in both.note[0]


def test_rates_of_zero_with_a_margin_are_compared(report: pd.DataFrame) -> None:
    report.loc[0, "share"] = 0.0
    gaps = compare_quietly(_read(report, n="n"))
    assert np.isfinite(gaps.p[0])
    assert gaps.se[0] > 0
    effect = _read(report, margin=None, n="n", design_effect=2.0)
    assert np.isnan(effect.se[0])


def test_degrees_of_freedom_of_a_report(report: pd.DataFrame) -> None:
    rates = _read(report.assign(df=[12, 30, 12, 30]), df="df")
    gaps = compare_quietly(rates)
    np.testing.assert_array_equal(gaps.df, [12, 12])
    z = gaps.statistic[0]
    assert gaps.p[0] == pytest.approx(2 * stats.t.sf(abs(z), 12), rel=1e-10)
    np.testing.assert_array_equal(_read(report, df=7).df, [7] * 4)


def test_a_matrix_of_correlations(report: pd.DataFrame) -> None:
    matrix = np.array([[1, 0.2, 0.5, 0], [0.2, 1, 0, 0.4], [0.5, 0, 1, 0.1], [0, 0.4, 0.1, 1]])
    rates = _read(report, correlation=matrix)
    scale = np.sqrt(np.outer(rates.variance, rates.variance))
    np.testing.assert_allclose(rates.covariance / scale, matrix, atol=1e-12)
    c = np.array([1, -1, -1, 1])
    did = sr.difference_in_differences(rates)
    assert did.se[0] ** 2 == pytest.approx(c @ rates.covariance.to_numpy() @ c, rel=1e-12)


BAD: list[tuple[dict[str, Any], str]] = [
    ({"rate": "rate"}, "there is no column 'rate'"),
    ({"by": "year"}, "repeats a label in 2 rows"),
    ({"percent": False}, r"outside 0 to 1 in 4 of 4 rows. Percentages"),
    ({"se": "margin"}, "give one of `se`, `margin`, `design_effect` and `design_factor`; got 2"),
    ({"margin": None}, "got 0"),
    ({"margin": None, "design_effect": 2.0}, "needs `n`"),
    ({"margin": None, "design_effect": -2.0, "n": "n"}, "design_effect is missing or not positive"),
    ({"margin_level": 90}, "margin_level must be a number between 0 and 1"),
    ({"level": 0}, "level must be a number between 0 and 1"),
    ({"interval": "exact"}, "interval must be one of"),
    ({"df": 0}, "df is missing or not positive in 4 of 4 rows"),
    ({"df": [3]}, "df must be a number or a column"),
    ({"correlation": 1.5}, "no correlation matrix"),
    ({"correlation": np.eye(3)}, "a matrix of 4 rows"),
    ({"correlation": "high"}, "a number or a matrix of 4 rows"),
    ({"correlation": -0.9}, "no correlation matrix"),
]


@pytest.mark.parametrize(("options", "message"), BAD)
def test_bad_report(report: pd.DataFrame, options: dict[str, Any], message: str) -> None:
    with pytest.raises(sr.QuestionError, match=message):
        _read(report, **options)


def test_marks_in_a_report_are_refused(report: pd.DataFrame) -> None:
    with pytest.raises(sr.QuestionError, match="not numbers"):
        _read(report.assign(margin=["0.8", "***", "0.7", "1.3"]))
    with pytest.raises(sr.QuestionError, match="1 standard errors or margins are negative"):
        _read(report.assign(margin=[0.8, -5, 0.7, 1.3]))
    with pytest.raises(sr.QuestionError, match="rate 'share' is missing in 1 of 4 rows"):
        _read(report.assign(share=[32.2, np.nan, 29.8, 36.1]))
    with pytest.raises(sr.QuestionError, match="is missing in 1 rows"):
        _read(report.assign(area=["Coast", None, "Coast", "Hills"]))
    with pytest.raises(sr.DesignError, match="must be a data frame"):
        sr.rates_from_published({"share": [1]}, rate="share", by="area", se="se")
