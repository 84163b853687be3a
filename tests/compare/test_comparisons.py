"""Every column of a comparison against scalar arithmetic, and what must always hold."""

from __future__ import annotations

import warnings
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

import svyrates as sr
from tests import reference
from tests.compare.scalar import Pair, compare
from tests.quiet import compare_quietly
from tests.reference import Record, Survey
from tests.strategies import frame_of, surveys

MEASURES = ("difference", "ratio", "odds_ratio")
SIDES = ("two-sided", "greater", "less")
VARIANTS = ("unweighted", "weighted", "weights-as-counts", "kish")


def _pair(survey: Survey, first: int, second: float) -> Pair:
    """Ingredients of a pair from the plain reference; a float is a fixed number."""
    fixed = isinstance(second, float)
    groups = [first] if fixed else [first, int(second)]
    columns = [
        reference.scores(survey, 0, group, weighted=weighted)
        for weighted in (True, False)
        for group in groups
    ]
    cov = reference.covariance(survey, columns)
    rates = [
        reference.rate(survey, 0, group, weighted=weighted)
        for weighted in (True, False)
        for group in groups
    ]
    if fixed:
        whole = np.zeros((4, 4))
        whole[np.ix_([0, 2], [0, 2])] = cov
        cov, rates = whole, [rates[0], second, rates[1], second]
    weights = [[survey.records[i].weight for i in reference.members(survey, 0, g)] for g in groups]
    n = [float(len(w)) for w in weights]
    sums = [sum(w) for w in weights]
    kish = [len(w) * sum(x * x for x in w) / sum(w) ** 2 for w in weights]
    df = min(reference.domain_df(survey, 0, group) for group in groups)
    if fixed:
        n, sums, kish = n * 2, sums * 2, kish * 2
    return Pair(rates, cov, n, sums, kish, df, second if fixed else None)


def _ordinary(survey: Survey, groups: list[int]) -> None:
    """Rates inside (0, 1), with degrees of freedom; the edges have tests of their own."""
    for group in groups:
        assume(0.001 < reference.rate(survey, 0, group) < 0.999)
        assume(reference.domain_df(survey, 0, group) > 0)


def _check(found: pd.Series, expected: dict[str, Any]) -> None:
    for name, value in expected.items():
        if name == "verdict":
            continue
        assert found[name] == pytest.approx(value, rel=1e-6, abs=1e-9, nan_ok=True), name
    close = [
        abs(expected[name] - alpha) < 1e-7
        for name in ("p", "simple_p", "shift_p")
        for alpha in (0.05, 0.1)
    ]
    assert found["verdict"] == expected["verdict"] or any(close)


def _with_union(survey: Survey, others: list[int], *, whole: bool) -> Survey:
    """Add one more group: everyone in `others`, or all with a known group."""
    records = []
    for r in survey.records:
        groups = r.groups
        if groups is not None:
            member = whole or any(groups[other] for other in others)
            groups = (*groups, member and any(groups))
        records.append(Record(r.weight, r.outcomes, groups, r.units, r.population, r.inside))
    return Survey(records, survey.n_cluster_stages, survey.records_last, survey.n_populations)


@settings(max_examples=150)
@given(
    survey=surveys(),
    measure=st.sampled_from(MEASURES),
    alternative=st.sampled_from(SIDES),
    variant=st.sampled_from(VARIANTS),
    level=st.sampled_from([0.9, 0.95]),
    kind=st.sampled_from(["pair", "number", "everyone", "everyone else", "null"]),
)
def test_every_column(
    survey: Survey, measure: str, alternative: str, variant: str, level: float, kind: str
) -> None:
    n_groups = max((len(r.groups) for r in survey.records if r.groups is not None), default=0)
    assume(n_groups >= 2)
    frame, arguments = frame_of(survey)
    present = sorted(frame["group"].dropna().unique().tolist())
    assume(len(present) >= 2)
    first, second = present[0], present[1]
    versus: Any = second
    null = None
    if kind == "number":
        _ordinary(survey, [first])
        pair, versus = _pair(survey, first, 0.31), 0.31
    elif kind in ("everyone", "everyone else"):
        larger = _with_union(survey, present[1:], whole=kind == "everyone")
        _ordinary(larger, [first, n_groups])
        pair = _pair(larger, first, n_groups)
        versus = sr.EVERYONE if kind == "everyone" else sr.EVERYONE_ELSE
    else:
        _ordinary(survey, [first, second])
        pair = _pair(survey, first, second)
        null = (
            {"difference": 0.07, "ratio": 1.2, "odds_ratio": 0.8}[measure]
            if kind == "null"
            else None
        )
    contrast = np.array([1.0, -1.0 if pair.fixed is None else 0.0, 0, 0])
    spread = float(contrast @ pair.cov @ contrast)
    assume(spread > 1e-10)
    plain = np.array([0, 0, *contrast[:2]])
    assume(float(plain @ pair.cov @ plain) > 1e-10)
    shift = np.array([-1, 1, 1, -1]) * (1.0 if pair.fixed is None else np.array([1, 0, 1, 0]))
    assume(float(shift @ pair.cov @ shift) > 1e-10 or variant != "unweighted")
    design = sr.SampleDesign(frame, **arguments)
    rates = sr.estimate_rates(design, "y0", by="group", where="inside", level=level)
    gaps = compare_quietly(
        rates, versus, measure=measure, alternative=alternative, simple=variant, null=null
    )
    found = gaps.to_frame().iloc[gaps.find(first)] if kind != "number" else gaps.to_frame().iloc[0]
    _check(found, compare(pair, measure, alternative, null, level, variant))


@pytest.fixture(scope="module")
def rates() -> sr.RateTable:
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    return sr.estimate_rates(design, "cold_home", success=["often", "always"], by="tenure")


@pytest.mark.parametrize("measure", MEASURES)
@pytest.mark.parametrize("limits", ["linear", "recovered"])
def test_swapping_the_groups(rates: sr.RateTable, measure: str, limits: str) -> None:
    one = compare_quietly(rates, versus="owner", measure=measure, limits=limits)
    pairs = compare_quietly(rates, measure=measure, limits=limits)
    row, other = one.find("rent-free", "owner"), pairs.find("owner", "rent-free")

    def swap(value: float) -> float:
        return -value if measure == "difference" else 1 / value

    assert one.estimate[row] == pytest.approx(swap(pairs.estimate[other]))
    assert one.low[row] == pytest.approx(swap(pairs.high[other]))
    assert one.simple_high[row] == pytest.approx(swap(pairs.simple_low[other]))
    assert one.shift[row] == pytest.approx(-pairs.shift[other])
    for name in ("p", "simple_p", "shift_p", "variance_ratio", "simple_coverage"):
        assert getattr(one, name)[row] == pytest.approx(getattr(pairs, name)[other])
    assert one.verdict[row] == pairs.verdict[other]


def test_part_against_whole_is_part_against_rest_scaled() -> None:
    """P - p_all = (1 - share)(p - p_rest): the same evidence, up to the share's own variation."""
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    rates = sr.estimate_rates(design, "damp", by="sex")
    whole, rest = compare_quietly(rates, sr.EVERYONE), compare_quietly(rates, sr.EVERYONE_ELSE)
    pairs = compare_quietly(rates)
    share = rates.weighted_n / rates.weighted_n.sum()
    np.testing.assert_allclose(whole.estimate, (1 - share) * rest.estimate, rtol=1e-9)
    assert rest.estimate[0] == pytest.approx(pairs.estimate[0])
    assert rest.se[0] == pytest.approx(pairs.se[0])


def test_recovered_limits_by_hand(rates: sr.RateTable) -> None:
    """Zou & Donner (2008) with the groups' own limits and the correlation of their rates."""
    gaps = compare_quietly(rates, limits="recovered")
    frame = rates.to_frame().set_index("tenure")
    one, two = frame.loc["owner"], frame.loc["social tenant"]
    r = rates.covariance.loc["owner", "social tenant"] / (one["se"] * two["se"])
    a, b = one["rate"] - one["low"], two["high"] - two["rate"]
    c, e = one["high"] - one["rate"], two["rate"] - two["low"]
    d = one["rate"] - two["rate"]
    row = gaps.find("owner", "social tenant")
    assert gaps.correlation[row] == pytest.approx(r)
    assert gaps.low[row] == pytest.approx(d - np.sqrt(a**2 - 2 * r * a * b + b**2))
    assert gaps.high[row] == pytest.approx(d + np.sqrt(c**2 - 2 * r * c * e + e**2))


def _certain() -> sr.RateTable:
    data = pd.DataFrame(
        {"g": ["none"] * 12 + ["some"] * 20, "y": [0] * 12 + [1, 1, 0, 1, 0, 1, 1, 0, 1, 1] * 2}
    )
    return sr.estimate_rates(sr.SampleDesign(data), "y", by="g")


def test_a_rate_of_zero_is_tested_where_recovered_limits_touch() -> None:
    gaps = compare_quietly(_certain())
    assert gaps.verdict[0] == "undetermined"
    assert np.isnan(gaps.se[0])
    assert "exactly 0 or 1" in gaps.note[0]
    assert gaps.low[0] < gaps.estimate[0] < gaps.high[0] < 0
    again = compare_quietly(_certain(), level=1 - gaps.p[0])
    assert again.high[0] == pytest.approx(0.0, abs=1e-6)
    one_sided = compare_quietly(_certain(), alternative="less")
    assert one_sided.p[0] == pytest.approx(gaps.p[0] / 2)
    ratio = compare_quietly(_certain(), measure="ratio")
    assert np.isnan([ratio.estimate[0], ratio.low[0], ratio.p[0]]).all()
    assert "the ratio has no variance" in ratio.note[0]


def test_two_equal_certain_rates_give_no_evidence() -> None:
    data = pd.DataFrame({"g": list("aaabbb"), "y": [0] * 6})
    gaps = compare_quietly(sr.estimate_rates(sr.SampleDesign(data), "y", by="g"))
    assert gaps.p[0] == 1.0
    assert gaps.low[0] < 0 < gaps.high[0]
    assert gaps.verdict[0] == "undetermined"


def test_empty_and_one_unit_groups_are_undetermined() -> None:
    survey = sr.demo_survey(wave="2024")
    survey["heating"] = survey["heating"].cat.add_categories(["peat"])
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    gaps = compare_quietly(sr.estimate_rates(design, "draught", by="heating"), versus="gas boiler")
    notes = dict(zip(gaps.group, gaps.note, strict=True))
    assert "a group is empty" in notes["peat"]
    assert "one sampling unit" in notes["heat network"]
    verdicts = dict(zip(gaps.group, gaps.verdict, strict=True))
    assert verdicts["peat"] == verdicts["heat network"] == "undetermined"


@pytest.mark.parametrize("measure", MEASURES)
@pytest.mark.parametrize("versus", [None, "owner", sr.EVERYONE_ELSE, 0.3])
def test_sources_of_the_variance_multiply_to_the_ratio(
    rates: sr.RateTable, measure: str, versus: Any
) -> None:
    gaps = compare_quietly(rates, versus, measure=measure)
    product = gaps.variance_sources()[["weights", "clusters", "covariance", "strata"]].prod(axis=1)
    np.testing.assert_allclose(product, gaps.variance_ratio, rtol=1e-9)


def test_sources_of_the_variance_one_by_one() -> None:
    """Independent records and unstratified units, as designs of their own."""
    survey = sr.demo_survey(wave="2024")
    ask = {"outcome": "damp", "by": "dwelling_type"}
    full = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    survey["unit"] = survey["district"] + survey["block"].astype(str)
    units = sr.estimate_rates(sr.SampleDesign(survey, weight="wt", clusters="unit"), **ask)
    records = sr.estimate_rates(sr.SampleDesign(survey, weight="wt"), **ask)
    gaps = compare_quietly(sr.estimate_rates(full, **ask))
    sources = gaps.variance_sources()
    apart = records.variance[0] + records.variance[1]
    assert sources["weights"][0] == pytest.approx(apart / gaps.simple_se[0] ** 2, rel=1e-9)
    clustered = units.variance[0] + units.variance[1]
    assert sources["clusters"][0] == pytest.approx(clustered / apart, rel=1e-9)
    together = compare_quietly(units).se[0] ** 2
    assert sources["covariance"][0] == pytest.approx(together / clustered, rel=1e-9)


def test_within_levels_and_across_them() -> None:
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    rates = sr.estimate_rates(design, "damp", by=["terrain", "sex", "age_group"])
    inside = compare_quietly(rates)
    assert inside.held == ("outcome", "terrain", "sex")
    assert len(inside) == 4 * 6
    assert len(compare_quietly(rates, within="terrain")) == 2 * 28
    assert len(compare_quietly(rates, within=[])) == 120
    everyone = compare_quietly(rates, sr.EVERYONE)
    upland = sr.estimate_rates(
        design, "damp", by="sex", where=(survey["terrain"] == "upland").to_numpy()
    )
    row = everyone.find("18-34", terrain="upland", sex="woman")
    assert everyone.versus_rate[row] == pytest.approx(upland.rate[0], rel=1e-12)


def test_masks_leave_everyone_whole() -> None:
    """With masks, everyone includes those in none of them, and leaves out the unknown."""
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    helps = {"grant": "help_grant", "advice": "help_advice"}
    rates = sr.estimate_rates(design, "damp", by=helps)
    known = survey["help_grant"].notna() & survey["help_advice"].notna()
    expected = np.average(survey.loc[known, "damp"], weights=survey.loc[known, "wt"])
    assert compare_quietly(rates, sr.EVERYONE).versus_rate[0] == pytest.approx(expected, rel=1e-12)
    assert rates.coverage.n_group_unknown == (~known).sum()


BAD: list[tuple[dict[str, Any], str]] = [
    ({"versus": "tenant"}, r"versus='tenant' is not a group. The groups are 'owner'"),
    ({"versus": 1.5}, "neither a group nor a proportion between 0 and 1"),
    ({"versus": 0}, "neither a group nor a proportion"),
    ({"versus": True}, "is not a group"),
    ({"within": "sex"}, "within names 'sex'"),
    ({"measure": "diff"}, "measure must be one of"),
    ({"alternative": "larger"}, "alternative must be one of"),
    ({"limits": "exact"}, "limits must be one of"),
    ({"simple": "naive"}, "simple must be one of"),
    ({"level": 1.0}, "level must be a number between 0 and 1"),
    ({"level": 0.4, "alternative": "less"}, "one-sided question needs a level above 0.5"),
    ({"null": 1.0}, "null must be a number between -1 and 1"),
    ({"null": 0.0, "measure": "ratio"}, "null must be a number between 0 and inf"),
    ({"null": "0"}, "null must be a number"),
]


@pytest.mark.parametrize(("options", "message"), BAD)
def test_bad_comparison(rates: sr.RateTable, options: dict[str, Any], message: str) -> None:
    with pytest.raises(sr.ComparisonError, match=message):
        sr.compare_rates(rates, **options)


def test_one_group_has_nothing_to_compare(rates: sr.RateTable) -> None:
    survey = sr.demo_survey(wave="2024")
    whole = sr.estimate_rates(sr.SampleDesign(survey, weight="wt"), "damp")
    with pytest.raises(sr.ComparisonError, match="no pair to compare"):
        sr.compare_rates(whole)
    with pytest.raises(sr.ComparisonError, match="needs groups"):
        sr.compare_rates(whole, sr.EVERYONE)
    with pytest.raises(sr.ComparisonError, match="must be a RateTable; got DataFrame"):
        sr.compare_rates(whole.to_frame())  # type: ignore[arg-type]
    assert len(compare_quietly(whole, 0.3)) == 1


def test_a_number_that_is_a_label_is_the_group() -> None:
    data = pd.DataFrame({"g": [0, 1, 2] * 20, "y": [0, 1, 1, 0, 1, 0] * 10})
    rates = sr.estimate_rates(sr.SampleDesign(data), "y", by="g")
    assert set(compare_quietly(rates, versus=1).versus) == {"1"}
    assert set(compare_quietly(rates, versus=0.5).versus) == {"0.5"}


def test_warning_names_the_comparisons_and_the_line(rates: sr.RateTable) -> None:
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        gaps = sr.compare_rates(rates)
    (warning,) = caught
    assert warning.category is sr.SimpleFormulaWarning
    assert warning.filename == __file__
    text = str(warning.message)
    wrong = [
        row for row, verdict in enumerate(gaps.verdict) if verdict not in ("agrees", "undetermined")
    ]
    assert f"would mislead in {len(wrong)} of 6 comparisons" in text
    for row in wrong:
        assert gaps.title_of(row) in text


def test_no_warning_where_the_formula_serves() -> None:
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        gaps = sr.compare_rates(sr.estimate_rates(design, "thermostat", by="sex"))
    assert list(gaps.verdict) == ["agrees"]


def test_explain_says_both_answers(rates: sr.RateTable) -> None:
    gaps = compare_quietly(rates)
    text = gaps.explain("owner", "rent-free")
    row = gaps.find("rent-free", "owner")
    assert f"{100 * gaps.rate[row]:.1f}% against {100 * gaps.versus_rate[row]:.1f}%" in text
    assert f"Verdict: {gaps.verdict[row]}" in text
    assert "The simple formula claims" in text
    assert text.endswith("A difference between groups is not its cause.")
    with pytest.raises(sr.ComparisonError, match="6 comparisons fit"):
        gaps.explain()
    with pytest.raises(sr.ComparisonError, match="no comparison of 'owner' with 'squatter'"):
        gaps.explain("owner", "squatter")


def test_tables_fit_and_keep_every_digit(rates: sr.RateTable) -> None:
    gaps = compare_quietly(rates)
    for table in (rates, gaps):
        for width in (60, 80, 120, 200):
            assert max(map(len, table.text(width).splitlines())) <= width
    frame = gaps.to_frame()
    assert repr(float(frame["difference"][0])) in gaps.to_csv()
    assert "points" in gaps.text(percent=True)


def test_every_format_to_text_and_to_file(rates: sr.RateTable, tmp_path: Path) -> None:
    for table in (rates, compare_quietly(rates)):
        for kind in ("csv", "json", "html", "markdown", "latex"):
            write = getattr(table, f"to_{kind}")
            text = write()
            assert write(tmp_path / "file") == text
            assert (tmp_path / "file").read_text(encoding="utf-8") == text
            assert "social tenant" in text


def test_percentage_points_are_never_percent(rates: sr.RateTable) -> None:
    gaps = compare_quietly(rates)
    header = gaps.to_markdown(percent=True).splitlines()[2]
    assert "difference (points)" in header
    row = gaps.to_markdown(percent=True).splitlines()[4].split(" | ")
    assert row[2].endswith("%")
    assert not row[4].endswith("%")
    ratio = compare_quietly(rates, measure="ratio").to_markdown(percent=True)
    assert "points" not in ratio
