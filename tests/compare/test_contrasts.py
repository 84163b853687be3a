"""Contrasts, trends, differences in differences and common differences by the plain reference."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st
from scipy import stats

import svyrates as sr
from tests import reference
from tests.quiet import compare_quietly
from tests.reference import Survey
from tests.strategies import frame_of, surveys

SCALES = {
    "rate": (lambda p: p, lambda _: 1.0),
    "log": (math.log, lambda p: 1 / p),
    "logit": (lambda p: math.log(p / (1 - p)), lambda p: 1 / (p * (1 - p))),
}


@settings(max_examples=80, suppress_health_check=[HealthCheck.filter_too_much])
@given(
    survey=surveys(),
    scale=st.sampled_from(list(SCALES)),
    weights=st.lists(st.sampled_from([-2.0, -1.0, -0.5, 0.5, 1.0, 3.0]), min_size=3, max_size=3),
)
def test_every_column_of_a_contrast(survey: Survey, scale: str, weights: list[float]) -> None:
    """Weighted and unweighted contrasts, their shift, and the simple formula, record by record."""
    frame, arguments = frame_of(survey)
    present = sorted(frame["group"].dropna().unique().tolist())
    assume(len(present) >= 2)
    given_weights = dict(zip(present, weights, strict=False))
    forward, slope = SCALES[scale]
    p = [reference.rate(survey, 0, g) for g in present]
    u = [reference.rate(survey, 0, g, weighted=False) for g in present]
    assume(all(0.001 < value < 0.999 for value in (*p, *u)))
    df = min(reference.domain_df(survey, 0, g) for g in present)
    assume(df > 0)
    c = np.array(list(given_weights.values()))
    scores = [
        np.array([reference.scores(survey, 0, g, weighted=weighted) for g in present])
        for weighted in (True, False)
    ]
    z_p = (c * [slope(x) for x in p]) @ scores[0]
    z_u = (c * [slope(x) for x in u]) @ scores[1]
    cov = reference.covariance(survey, [z_p.tolist(), z_u.tolist(), (z_u - z_p).tolist()])
    assume(min(cov[0, 0], cov[1, 1], cov[2, 2]) > 1e-10)
    design = sr.SampleDesign(frame, **arguments)
    rates = sr.estimate_rates(design, "y0", by="group", where="inside")
    found = sr.contrast(rates, given_weights, scale=scale).to_frame().iloc[0]
    estimate = float(c @ [forward(x) for x in p])
    plain = float(c @ [forward(x) for x in u])
    n = [len(reference.members(survey, 0, g)) for g in present]
    simple = math.sqrt(
        sum(w**2 * slope(x) ** 2 * x * (1 - x) / k for w, x, k in zip(c, u, n, strict=True))
    )
    se = math.sqrt(cov[0, 0])
    half = stats.t.ppf(0.975, df) * se
    expected = {
        "estimate": estimate,
        "se": se,
        "df": df,
        "statistic": estimate / se,
        "p": 2 * stats.t.sf(abs(estimate / se), df),
        "low": estimate - half,
        "high": estimate + half,
        "simple_estimate": plain,
        "simple_se": simple,
        "simple_p": 2 * stats.norm.sf(abs(plain / simple)),
        "simple_low": plain - 1.959963984540054 * simple,
        "shift": plain - estimate,
        "shift_p": 2 * stats.t.sf(abs(plain - estimate) / math.sqrt(cov[2, 2]), df),
        "variance_ratio": cov[0, 0] / simple**2,
    }
    for name, value in expected.items():
        assert found[name] == pytest.approx(value, rel=1e-6, abs=1e-9), name


@pytest.fixture(scope="module")
def both() -> sr.SampleDesign:
    return sr.SampleDesign(sr.demo_survey(), weight="wt", strata="district", clusters="block")


@pytest.fixture(scope="module", params=["linearized", "jackknife"])
def rates(request: pytest.FixtureRequest, both: sr.SampleDesign) -> sr.RateTable:
    design = both
    if request.param == "jackknife":
        design = sr.make_replicates(both, "stratified-jackknife")
    return sr.estimate_rates(design, "damp", by=["wave", "tenure"])


def test_pairs_are_contrasts(rates: sr.RateTable) -> None:
    gaps = compare_quietly(rates, within="wave")
    for measure, scale in (("difference", "rate"), ("ratio", "log"), ("odds_ratio", "logit")):
        gaps = compare_quietly(rates, measure=measure)
        for row in range(len(gaps)):
            wave = gaps.levels[row][1]
            weights = {(wave, gaps.group[row]): 1, (wave, gaps.versus[row]): -1}
            one = sr.contrast(rates, weights, scale=scale)
            assert one.se[0] == pytest.approx(gaps.se[row], rel=1e-9)
            assert one.p[0] == pytest.approx(gaps.p[row], rel=1e-8)
            assert one.shift_p[0] == pytest.approx(gaps.shift_p[row], rel=1e-6)
            assert one.simple_coverage[0] == pytest.approx(gaps.simple_coverage[row], rel=1e-6)
            assert one.verdict[0] == gaps.verdict[row] or measure != "difference"


def test_difference_in_differences_is_the_difference_of_two(rates: sr.RateTable) -> None:
    did = sr.difference_in_differences(rates, versus="owner")
    change = compare_quietly(rates, within="tenure")
    for row, name in enumerate(did.contrast):
        group = name.split(" − ")[0]
        one = change.find("2024", "2021", tenure=group)
        other = change.find("2024", "2021", tenure="owner")
        signs = [1 if change.group[i] == "2024" else -1 for i in (one, other)]
        expected = signs[0] * change.estimate[one] - signs[1] * change.estimate[other]
        assert did.estimate[row] == pytest.approx(expected, abs=1e-14)
    covariance = rates.covariance
    c = pd.Series(0.0, index=covariance.index)
    for key, sign in ((("2024", "rent-free"), 1), (("2021", "rent-free"), -1),
                      (("2024", "owner"), -1), (("2021", "owner"), 1)):  # fmt: skip
        c[key] = sign
    row = did.contrast.index("rent-free − owner, 2024 − 2021")
    assert did.se[row] ** 2 == pytest.approx(float(c @ covariance @ c), rel=1e-9)
    every = sr.difference_in_differences(rates)
    assert len(every) == 6
    backward = sr.difference_in_differences(rates, "owner", since="2024")
    np.testing.assert_allclose(backward.estimate, -did.estimate, rtol=1e-12)
    np.testing.assert_allclose(backward.se, did.se, rtol=1e-12)


def test_joint_test(rates: sr.RateTable) -> None:
    tenures = [label[1] for label in rates.groups[:4]]
    against = {t: {("2024", t): 1, ("2024", "owner"): -1} for t in tenures if t != "owner"}
    found = sr.contrast(rates, against)
    assert found.joint is not None
    v = rates.covariance.to_numpy()
    c = np.array([
        [{t: 1.0, "owner": -1.0}.get(g, 0.0) * (wave == "2024") for wave, g in rates.groups]
        for t in against
    ])  # fmt: skip
    d = c @ rates.rate
    q, df = len(c), found.df.min()
    f = (df - q + 1) / (df * q) * d @ np.linalg.solve(c @ v @ c.T, d)
    assert found.joint.f == pytest.approx(f, rel=1e-8)
    assert found.joint.p == pytest.approx(stats.f.sf(f, q, df - q + 1), rel=1e-8)
    # Other contrasts of the same space, and contrasts that repeat them, test the same.
    mixed = {
        "a": {("2024", tenures[0]): 1, ("2024", tenures[1]): -1},
        "b": {("2024", tenures[1]): 2, ("2024", tenures[2]): -2},
        "c": {("2024", tenures[2]): 1, ("2024", tenures[3]): -1},
        "d": {("2024", tenures[0]): 1, ("2024", tenures[3]): -1},
    }
    again = sr.contrast(rates, mixed)
    assert again.joint is not None
    if again.df.min() == df:
        assert again.joint.f == pytest.approx(f, rel=1e-7)
        assert again.joint.df1 == q
    single = sr.contrast(rates, {"one": against["rent-free"]})
    assert single.joint is None


def test_trend_is_the_least_squares_line() -> None:
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    rates = sr.estimate_rates(design, "damp", by="age_group")
    scores = [26.0, 45.0, 65.0, 82.0]
    found = sr.trend_test(rates, scores)
    line = np.polyfit(scores, rates.rate, 1)
    assert found.estimate[0] == pytest.approx(line[0], rel=1e-9)
    # The quadratic coefficient of a parabola through the rates, from an outside fit.
    assert found.estimate[1] == pytest.approx(np.polyfit(scores, rates.rate, 2)[0], rel=1e-9)
    c = np.array(scores) - np.mean(scores)
    c /= c @ c
    assert found.se[0] ** 2 == pytest.approx(float(c @ rates.covariance @ c), rel=1e-9)
    for other in (
        [s * 10 + 3 for s in scores],
        dict(zip(survey["age_group"].cat.categories, scores, strict=True)),
    ):
        again = sr.trend_test(rates, other)
        np.testing.assert_allclose(again.p, found.p, rtol=1e-9)
    steps = sr.trend_test(rates)
    np.testing.assert_allclose(steps.p, sr.trend_test(rates, [1, 2, 3, 4]).p)
    numbers = sr.estimate_rates(
        sr.SampleDesign(survey.assign(k=survey["age_group"].cat.codes * 20), weight="wt"),
        "damp",
        by="k",
    )
    assert sr.trend_test(numbers).contrast[0] == "linear, per unit"
    assert sr.trend_test(numbers).estimate[0] == pytest.approx(
        sr.trend_test(numbers, [0, 20, 40, 60]).estimate[0]
    )
    two = sr.trend_test(sr.estimate_rates(design, "damp", by="sex"))
    pair = compare_quietly(sr.estimate_rates(design, "damp", by="sex"))
    assert two.contrast == ("linear, per step",)
    assert two.p[0] == pytest.approx(pair.p[0], rel=1e-9)


def _mantel_haenszel(data: pd.DataFrame, w: np.ndarray) -> float:
    above = below = 0.0
    for _, level in data.assign(w=w).groupby("age_group", observed=True):
        one, other = level[level["sex"] == "woman"], level[level["sex"] == "man"]
        n1, n2 = one["w"].sum(), other["w"].sum()
        weight = n1 * n2 / (n1 + n2)
        above += weight * (
            np.average(one["damp"], weights=one["w"])
            - np.average(other["damp"], weights=other["w"])
        )
        below += weight
    return above / below


def test_common_difference_by_hand_and_by_jackknife() -> None:
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    found = sr.common_difference(sr.estimate_rates(design, "damp", by=["age_group", "sex"]))
    w = survey["wt"].to_numpy()
    assert found.estimate[0] == pytest.approx(_mantel_haenszel(survey, w), rel=1e-10)
    plain = _mantel_haenszel(survey, np.ones(len(survey)))
    assert found.simple_estimate[0] == pytest.approx(plain, rel=1e-10)
    # Linearized by hand: the derivative along each record's weight, by a small step in its block.
    codes = survey.groupby(["district", "block"]).ngroup().to_numpy()
    total = np.zeros(codes.max() + 1)
    for unit in range(total.size):
        step = 1e-5 * (codes == unit)
        up, down = (
            _mantel_haenszel(survey, w * (1 + step)),
            _mantel_haenszel(survey, w * (1 - step)),
        )
        total[unit] = (up - down) / 2e-5
    district = survey.groupby(codes)["district"].first()
    variance = 0.0
    for _, units in pd.Series(total).groupby(district.to_numpy()):
        variance += len(units) / (len(units) - 1) * ((units - units.mean()) ** 2).sum()
    assert found.se[0] == pytest.approx(np.sqrt(variance), rel=1e-6)
    jackknife = sr.make_replicates(design, "stratified-jackknife")
    again = sr.common_difference(sr.estimate_rates(jackknife, "damp", by=["age_group", "sex"]))
    assert again.se[0] == pytest.approx(found.se[0], rel=0.05)
    assert again.estimate[0] == pytest.approx(found.estimate[0], rel=1e-12)
    # The joint test: differences at every level against the first one.
    rates = sr.estimate_rates(design, "damp", by=["age_group", "sex"])
    ages = list(survey["age_group"].cat.categories)
    weights = {
        str(age): {(age, "woman"): 1, (age, "man"): -1, (ages[0], "woman"): -1, (ages[0], "man"): 1}
        for age in ages[1:]
    }
    joint = sr.contrast(rates, weights).joint
    assert found.joint is not None
    assert joint is not None
    assert found.joint.f == pytest.approx(joint.f, rel=1e-8)


def test_two_outcomes_of_the_same_people(both: sr.SampleDesign) -> None:
    """A share less another share: the outcome y1 - y2 of every record, by hand."""
    data = both.frame.to_native()
    rates = sr.estimate_rates(both, ["damp", "mould"], joint=True)
    found = sr.contrast(rates, {"damp": 1, "mould": -1})
    w, d = data["wt"].to_numpy(), (data["damp"] - data["mould"]).to_numpy()
    mean = np.average(d, weights=w)
    z = pd.Series(w * (d - mean) / w.sum()).groupby([data["district"], data["block"]]).sum()
    variance = sum(
        len(units) / (len(units) - 1) * ((units - units.mean()) ** 2).sum()
        for _, units in z.groupby(level=0)
    )
    assert found.estimate[0] == pytest.approx(mean, rel=1e-12)
    assert found.se[0] == pytest.approx(np.sqrt(variance), rel=1e-10)
    apart = sr.estimate_rates(both, ["damp", "mould"])
    with pytest.raises(sr.ComparisonError, match="joint=True"):
        sr.contrast(apart, {"damp": 1, "mould": -1})


def test_part_and_whole_by_masks(both: sr.SampleDesign) -> None:
    """Overlapping masks: a part against a union that holds it, by record-level values."""
    data = both.frame.to_native()
    part = (data["sex"] == "woman").to_numpy() & (data["age_group"] == "18-34").to_numpy()
    whole = (data["sex"] == "woman").to_numpy()
    rates = sr.estimate_rates(both, "damp", by={"part": part, "whole": whole})
    found = sr.contrast(rates, {"part": 1, "whole": -1})
    w, y = data["wt"].to_numpy(), data["damp"].to_numpy()
    z = np.zeros(len(data))
    for mask, sign in ((part, 1), (whole, -1)):
        p = np.average(y[mask], weights=w[mask])
        z += sign * mask * w * (y - p) / w[mask].sum()
    units = pd.Series(z).groupby([data["district"], data["block"]]).sum()
    variance = sum(
        len(each) / (len(each) - 1) * ((each - each.mean()) ** 2).sum()
        for _, each in units.groupby(level=0)
    )
    assert found.se[0] == pytest.approx(np.sqrt(variance), rel=1e-10)
    assert found.se[0] == pytest.approx(compare_quietly(rates).se[0], rel=1e-12)


def test_order_of_groups_and_signs(rates: sr.RateTable) -> None:
    weights = {("2024", "owner"): 1, ("2021", "rent-free"): -0.5, ("2021", "owner"): -0.5}
    one = sr.contrast(rates, weights)
    for other in (dict(reversed(weights.items())), {k: -v for k, v in weights.items()}):
        again = sr.contrast(rates, other)
        assert abs(again.estimate[0]) == pytest.approx(abs(one.estimate[0]))
        for name in ("se", "p", "df", "simple_p", "shift_p"):
            assert getattr(again, name)[0] == pytest.approx(getattr(one, name)[0], rel=1e-9)
    scaled = sr.contrast(rates, {k: 7 * v for k, v in weights.items()})
    assert scaled.p[0] == pytest.approx(one.p[0], rel=1e-9)
    assert scaled.verdict[0] == one.verdict[0]


def test_satterthwaite_of_a_contrast() -> None:
    """(ΣV_h)²/Σ(V_h²/(n_h - 1)) of the contrast's own strata, by hand."""
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    rates = sr.estimate_rates(design, "damp", by="sex", df="satterthwaite")
    weights = {"woman": 1.0, "man": -0.4}
    z = np.zeros(len(survey))
    for sex, c in weights.items():
        mask = (survey["sex"] == sex).to_numpy()
        w, y = survey["wt"].to_numpy(), survey["damp"].to_numpy()
        p = np.average(y[mask], weights=w[mask])
        z += c * mask * w * (y - p) / w[mask].sum()
    parts = []
    for _, stratum in survey.groupby("district"):
        units = pd.Series(z[stratum.index]).groupby(stratum["block"].to_numpy()).sum()
        variance = len(units) / (len(units) - 1) * ((units - units.mean()) ** 2).sum()
        parts.append((variance, len(units) - 1))
    df = sum(v for v, _ in parts) ** 2 / sum(v**2 / k for v, k in parts)
    assert sr.contrast(rates, weights).df[0] == pytest.approx(df, rel=1e-9)


BAD: list[tuple[Any, dict[str, Any], str]] = [
    ({}, {}, "must be a dict of group label"),
    ([1, -1], {}, "must be a dict of group label"),
    ({"owner": 1}, {}, "'contrast' names 'owner', which is no group of"),
    ({("2024", "owner"): "1"}, {}, "the weight '1', not a number"),
    ({("2024", "owner"): True}, {}, "not a number"),
    ({("2024", "owner"): 0}, {}, "no weight other than 0"),
    ({"a": {("2024", "owner"): 1}, "b": 2}, {}, "mixes named contrasts and single weights"),
    ({("2024", "owner"): 1}, {"scale": "probit"}, "scale must be one of"),
    ({("2024", "owner"): 1}, {"null": np.inf}, "null must be a finite number"),
    ({("2024", "owner"): 1}, {"level": 2}, "level must be a number"),
    ({("2024", "owner"): 1}, {"alternative": "equivalent"}, "alternative must be one of"),
    ({("2024", "owner"): 1}, {"multiplicity": "all"}, "multiplicity must be one of"),
]


@pytest.mark.parametrize(("weights", "options", "message"), BAD)
def test_bad_contrast(both: sr.SampleDesign, weights: Any, options: Any, message: str) -> None:
    rates = sr.estimate_rates(both, "damp", by=["wave", "tenure"])
    with pytest.raises(sr.ComparisonError, match=message):
        sr.contrast(rates, weights, **options)


def test_questions_that_do_not_fit_the_table(both: sr.SampleDesign) -> None:
    one = sr.estimate_rates(both, "damp", by="tenure")
    whole = sr.estimate_rates(both, "damp")
    crossed = sr.estimate_rates(both, "damp", by=["wave", "tenure"])
    with pytest.raises(sr.ComparisonError, match="two grouping columns, the period"):
        sr.difference_in_differences(one)
    with pytest.raises(sr.ComparisonError, match="since='2030' is none of"):
        sr.difference_in_differences(crossed, since="2030")
    with pytest.raises(sr.ComparisonError, match="A trend needs two groups"):
        sr.trend_test(whole)
    with pytest.raises(sr.ComparisonError, match="scores has 2 values for 4 groups"):
        sr.trend_test(one, [1, 2])
    with pytest.raises(sr.ComparisonError, match="scores has none for"):
        sr.trend_test(one, {"owner": 1})
    with pytest.raises(sr.ComparisonError, match="finite numbers that differ"):
        sr.trend_test(one, [1, 1, 1, 1])
    with pytest.raises(sr.ComparisonError, match="two grouping columns at least"):
        sr.common_difference(one)
    with pytest.raises(sr.ComparisonError, match="is not a group"):
        sr.common_difference(crossed, "nobody")


def test_undefined_rates_are_said() -> None:
    survey = sr.demo_survey(wave="2024")
    survey["heating"] = survey["heating"].cat.add_categories(["peat"])
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    rates = sr.estimate_rates(design, "draught", by="heating")
    labels = [str(label[0]) for label in rates.groups]
    found = sr.contrast(
        rates, {"x": {labels[0]: 1, "peat": -1}, "y": {labels[0]: 1, labels[1]: -1}}
    )
    assert "a group is empty" in found.note[0]
    assert found.verdict[0] == "undetermined"
    assert np.isfinite(found.p[1])
    assert found.joint is not None
    assert np.isnan(found.joint.p)
