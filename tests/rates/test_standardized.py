"""Directly standardised rates: by hand, by weighting, under replicates, and as published."""

from __future__ import annotations

import itertools
import json
from importlib.resources import files
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import assume, given, settings

import svyrates as sr
from svyrates.rates.standard import NAMED, read_standard
from tests import reference
from tests.outside import published
from tests.quiet import compare_quietly
from tests.reference import Record, Survey
from tests.strategies import frame_of, surveys

STANDARD = {"18-34": 30, "35-54": 30, "55-74": 25, "75 and over": 15}


@pytest.fixture(scope="module")
def design() -> sr.SampleDesign:
    survey = sr.demo_survey(wave="2024")
    return sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")


def _by_hand(data: pd.DataFrame, standard: dict[str, float] | None) -> dict[str, float]:
    """One loop over groups and categories; the sample's shares where no standard is given."""
    known = data[data["tenure"].notna()]
    if standard is None:
        standard = known.groupby("age_group", observed=True)["wt"].sum().to_dict()
    total = sum(standard.values())
    found = {}
    for tenure, group in known.groupby("tenure", observed=True):
        rate = 0.0
        for age, share in standard.items():
            cell = group[group["age_group"] == age]
            rate += share / total * np.average(cell["damp"], weights=cell["wt"])
        found[str(tenure)] = rate
    return found


@pytest.mark.parametrize("standard", ["sample", STANDARD])
def test_rates_by_hand(design: sr.SampleDesign, standard: Any) -> None:
    rates = sr.standardize_rates(design, "damp", "tenure", "age_group", standard)
    expected = _by_hand(design.frame.to_native(), None if standard == "sample" else standard)
    found = {str(label[0]): p for label, p in zip(rates.groups, rates.rate, strict=True)}
    assert found == pytest.approx(expected, rel=1e-12)
    crude = sr.estimate_rates(design, "damp", by="tenure")
    np.testing.assert_allclose(rates.crude_rate, crude.rate, rtol=1e-12)
    np.testing.assert_allclose(rates.unweighted_rate, crude.unweighted_rate, rtol=1e-12)
    np.testing.assert_array_equal(rates.n, crude.n)
    assert "crude_rate" in rates.to_frame()


def _replicate_by_hand(data: pd.DataFrame, standard: dict[str, float] | None) -> np.ndarray:
    return np.array(list(_by_hand(data, standard).values()))


@pytest.mark.parametrize("standard", ["sample", STANDARD])
def test_jackknife_by_hand(design: sr.SampleDesign, standard: Any) -> None:
    """Every block out in turn, all of it computed again, by plain pandas."""
    data = design.frame.to_native()
    given = None if standard == "sample" else standard
    full = _replicate_by_hand(data, given)
    total = np.zeros((full.size, full.size))
    for district, stratum in data.groupby("district"):
        n_blocks = stratum["block"].nunique()
        for block in stratum["block"].unique():
            here = (data["district"] == district).to_numpy()
            out = here & (data["block"] == block).to_numpy()
            factor = np.where(out, 0.0, np.where(here, n_blocks / (n_blocks - 1), 1.0))
            without = data.assign(wt=data["wt"] * factor)
            away = _replicate_by_hand(without[factor > 0], given) - full
            total += (n_blocks - 1) / n_blocks * np.outer(away, away)
    replicated = sr.make_replicates(design, "stratified-jackknife")
    found = sr.standardize_rates(replicated, "damp", "tenure", "age_group", standard)
    np.testing.assert_allclose(found.covariance, total, rtol=1e-9, atol=1e-15)
    linear = sr.standardize_rates(design, "damp", "tenure", "age_group", standard)
    scale = np.sqrt(np.outer(np.diag(total), np.diag(total)))
    np.testing.assert_allclose(linear.covariance / scale, total / scale, atol=0.1)


@settings(max_examples=60)
@given(survey=surveys(kinds=("clusters", "records", "two-stage", "records-last", "no-strata")))
def test_linearization_against_records(survey: Survey) -> None:
    """Linearized values record by record, in every kind of design."""
    rng = np.random.default_rng(len(survey.records))
    age = rng.integers(0, 2, len(survey.records))
    n_groups = max((len(r.groups) for r in survey.records if r.groups is not None), default=0)
    assume(n_groups >= 1)
    shares = np.array([0.3, 0.7])
    columns, rates = [], []
    for group in range(n_groups):
        split = []
        for r, category in zip(survey.records, age, strict=True):
            groups = r.groups
            if groups is not None:
                member = groups[group]
                groups = (member and category == 0, member and category == 1)
            split.append(Record(r.weight, r.outcomes, groups, r.units, r.population, r.inside))
        half = Survey(split, survey.n_cluster_stages, survey.records_last, survey.n_populations)
        assume(all(len(reference.members(half, 0, a)) > 0 for a in (0, 1)))
        scores = np.array([reference.scores(half, 0, a) for a in (0, 1)])
        columns.append((shares @ scores).tolist())
        rates.append(float(shares @ [reference.rate(half, 0, a) for a in (0, 1)]))
    frame, arguments = frame_of(survey)
    frame["age"] = np.where(age == 0, "young", "old")
    design = sr.SampleDesign(frame, **arguments)
    found = sr.standardize_rates(
        design, "y0", "group", "age", {"young": 30, "old": 70}, where="inside"
    )
    np.testing.assert_allclose(found.rate, rates, rtol=1e-9)
    expected = reference.covariance(survey, columns)
    variance = np.diag(expected)
    known = ~np.isnan(found.se)
    np.testing.assert_allclose(found.variance[known], variance[known], rtol=1e-7, atol=1e-12)


def test_a_standard_of_the_group_itself_changes_nothing(design: sr.SampleDesign) -> None:
    """One group standardised to its own shares is its crude rate, with its crude variance."""
    crude = sr.estimate_rates(design, "damp")
    own = sr.standardize_rates(design, "damp", None, "age_group", "sample")
    assert own.rate[0] == pytest.approx(crude.rate[0], rel=1e-12)
    assert own.se[0] == pytest.approx(crude.se[0], rel=1e-9)


def test_everyone_else_and_wide_comparisons(design: sr.SampleDesign) -> None:
    """A union has its categories added up before it is standardised."""
    rates = sr.standardize_rates(design, "damp", "tenure", "age_group", STANDARD)
    rest = compare_quietly(rates, sr.EVERYONE_ELSE)
    data = design.frame.to_native()
    joined = data.assign(
        tenure=data["tenure"]
        .astype(object)
        .where(data["tenure"].isna() | (data["tenure"] == "owner"), "other")
    )
    merged = sr.SampleDesign(joined, weight="wt", strata="district", clusters="block")
    two = sr.standardize_rates(merged, "damp", "tenure", "age_group", STANDARD)
    row = rest.find("owner")
    pair = compare_quietly(two, "other")
    assert rest.versus_rate[row] == pytest.approx(pair.versus_rate[0], rel=1e-12)
    assert rest.se[row] == pytest.approx(pair.se[0], rel=1e-9)
    product = rest.variance_sources()[["weights", "clusters", "covariance", "strata"]].prod(axis=1)
    np.testing.assert_allclose(product, rest.variance_ratio, rtol=1e-9)
    for measure in ("ratio", "odds_ratio", "relative_difference"):
        assert np.isfinite(compare_quietly(rates, measure=measure).p).all()
    assert np.isfinite(sr.homogeneity_test(rates, method="wald").p[0])
    with pytest.raises(sr.ComparisonError, match="use method='wald'"):
        sr.homogeneity_test(rates)


def test_the_simple_formula_is_of_crude_rates(design: sr.SampleDesign) -> None:
    rates = sr.standardize_rates(design, "damp", "tenure", "age_group", STANDARD)
    found = compare_quietly(rates)
    crude = compare_quietly(sr.estimate_rates(design, "damp", by="tenure"))
    np.testing.assert_allclose(found.simple_p, crude.simple_p, rtol=1e-9)
    assert "the weights and the adjustment" in found.explain("owner", "rent-free") or (
        found.shift_p[found.find("owner", "rent-free")] >= 0.05
    )


def test_several_factors_and_masks_of_cells(design: sr.SampleDesign) -> None:
    survey = design.frame.to_native()
    counts = survey.groupby(["age_group", "sex"], observed=True)["wt"].sum()
    standard = {(age, sex): size for (age, sex), size in counts.items()}
    crossed = sr.standardize_rates(design, "damp", "terrain", ["age_group", "sex"], standard)
    by_hand = []
    for _, group in survey.groupby("terrain"):
        cells = [
            group[(group["age_group"] == age) & (group["sex"] == sex)] for age, sex in standard
        ]
        rate = sum(
            size * np.average(cell["damp"], weights=cell["wt"])
            for cell, size in zip(cells, standard.values(), strict=True)
        )
        by_hand.append(rate / sum(standard.values()))
    np.testing.assert_allclose(crossed.rate, by_hand, rtol=1e-12)


def test_empty_cells_are_named_and_can_be_merged(design: sr.SampleDesign) -> None:
    survey = design.frame.to_native()
    gone = (survey["tenure"] == "rent-free") & (survey["age_group"] == "75 and over")
    few = sr.SampleDesign(
        survey[~gone].reset_index(drop=True), weight="wt", strata="district", clusters="block"
    )
    with pytest.raises(sr.QuestionError, match="rent-free in 75 and over"):
        sr.standardize_rates(few, "damp", "tenure", "age_group", STANDARD)
    merge = {"age_group": {"75 and over": "55-74"}}
    standard = {"18-34": 30, "35-54": 30, "55-74": 40}
    merged = sr.standardize_rates(few, "damp", "tenure", "age_group", standard, merge=merge)
    joined = survey[~gone].assign(
        age_group=lambda d: d["age_group"].astype(object).replace("75 and over", "55-74")
    )
    again = sr.SampleDesign(
        joined.reset_index(drop=True), weight="wt", strata="district", clusters="block"
    )
    expected = sr.standardize_rates(again, "damp", "tenure", "age_group", standard)
    np.testing.assert_allclose(merged.rate, expected.rate, rtol=1e-12)
    np.testing.assert_allclose(merged.se, expected.se, rtol=1e-12)
    zero = {**STANDARD, "75 and over": 0}
    assert np.isfinite(sr.standardize_rates(few, "damp", "tenure", "age_group", zero).rate).all()


def test_a_certain_rate_has_no_variance(design: sr.SampleDesign) -> None:
    survey = design.frame.to_native().assign(
        never=lambda d: np.where(d["tenure"] == "owner", 0, d["damp"])
    )
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    rates = sr.standardize_rates(design, "never", "tenure", "age_group", STANDARD)
    assert rates.rate[0] == 0.0
    assert np.isnan(rates.se[0])
    assert rates.high[0] > 0


@pytest.mark.parametrize("name", NAMED)
def test_named_standards_are_whole(name: str) -> None:
    """Bands follow each other without gaps, from birth on."""
    text = files("svyrates.rates").joinpath("standards", f"{name}.json").read_text("utf-8")
    whole = json.loads(text)
    bands = whole["bands"]
    assert bands[0][0] == 0
    assert bands[-1][1] is None
    assert all(one[1] + 1 == other[0] for one, other in itertools.pairwise(bands))
    totals = {"us-2000": 1_000_000, "european-2013": 100_000, "who-2000-2025": 100.035}
    assert sum(band[2] for band in bands) == pytest.approx(totals[name])
    assert whole["source"]


def test_standard_million_against_the_published_groups() -> None:
    """Klein & Schoenborn (2001); Anderson & Rosenberg (1998): weights as printed."""
    three = published("standard_three_groups")["published"]["weights"]
    shares, _ = read_standard("us-2000", ["age"], [(label,) for label in three])
    # The printed weights come from counts in thousands, the standard million is rounded to ones.
    assert shares == pytest.approx([float(x) for x in three.values()], abs=2e-6)
    eleven = published("standard_eleven_groups")
    labels = [("under 1",) if g == "<1" else (g,) for g in eleven["inputs"]["groups"]]
    shares, _ = read_standard("us-2000", ["age"], labels)
    assert shares == pytest.approx(eleven["published"]["weights"], abs=1.1e-6)


@pytest.mark.parametrize("name", ["age_adjusted_2018", "age_adjusted_2016"])
def test_published_age_adjusted_percents(name: str) -> None:
    """NCHS Data Briefs 360 and 288: rounded percents by age, standardised to 2000 (0.1 point)."""
    case = published(name)
    ages = case["inputs"]["ages"]
    shares, _ = read_standard("us-2000", ["age"], [(age,) for age in ages])
    for group, percents in case["inputs"]["percent"].items():
        report = pd.DataFrame({"age": ages, "p": percents, "se": [1.0] * len(ages)})
        rates = sr.rates_from_published(report, rate="p", by="age", percent=True, se="se")
        weights = dict(zip(ages, shares.tolist(), strict=True))
        adjusted = sr.contrast(rates, weights)
        said = case["published"]["age_adjusted_percent"][group]
        assert 100 * adjusted.estimate[0] == pytest.approx(said, abs=0.1)
        assert adjusted.se[0] == pytest.approx(0.01 * np.sqrt((shares**2).sum()))


@pytest.mark.parametrize(
    ("labels", "bands"),
    [
        (["under 5", "5 to 14", "15–24 years", "25 and over"], [0, 2, 4, 6, 19]),
        (["<1", "1-4", "ages 5-84", "85+"], [0, 1, 2, 18, 19]),
        (["0", "1-19", "20 years and older"], [0, 1, 5, 19]),
        (["20-39", ">= 40"], [5, 9, 19]),
    ],
)
def test_age_labels_are_summed_from_bands(labels: list[str], bands: list[int]) -> None:
    text = files("svyrates.rates").joinpath("standards", "us-2000.json").read_text("utf-8")
    sizes = [band[2] for band in json.loads(text)["bands"]]
    expected = np.array([sum(sizes[a:b]) for a, b in itertools.pairwise(bands)], dtype=float)
    shares, called = read_standard("us-2000", ["age"], [(label,) for label in labels])
    np.testing.assert_allclose(shares, expected / expected.sum(), rtol=1e-12)
    assert called == "the 2000 U.S. standard million"


BAD: list[tuple[Any, str]] = [
    ("us-2020", "standard must be 'sample', 'us-2000'"),
    (3, "standard must be 'sample'"),
    ("us-2000", "the age group '18-34' cannot be summed from its bands"),
    ({"18-34": 1}, "has no share for '35-54'"),
    ({**STANDARD, "child": 3}, "names 'child', which do not occur"),
    ({**STANDARD, "18-34": -1}, "must be a number from 0 on"),
    ({**STANDARD, "18-34": "many"}, "must be a number from 0 on"),
    (dict.fromkeys(STANDARD, 0), "shares are all zero"),
]


@pytest.mark.parametrize(("standard", "message"), BAD)
def test_bad_standard(design: sr.SampleDesign, standard: Any, message: str) -> None:
    with pytest.raises(sr.QuestionError, match=message):
        sr.standardize_rates(design, "damp", "tenure", "age_group", standard)


def test_bad_question(design: sr.SampleDesign) -> None:
    ask = sr.standardize_rates
    with pytest.raises(sr.QuestionError, match="both `by` and `adjust_for`"):
        ask(design, "damp", "sex", "sex", "sample")
    with pytest.raises(sr.QuestionError, match="adjust_for names no column"):
        ask(design, "damp", "sex", [], "sample")
    with pytest.raises(sr.QuestionError, match="give one outcome"):
        ask(design, ["damp", "mould"], "sex", "age_group", "sample")
    with pytest.raises(sr.QuestionError, match="is one of ages; adjust_for names"):
        ask(design, "damp", "tenure", ["age_group", "sex"], "us-2000")
    with pytest.raises(sr.QuestionError, match="does not read as an age group"):
        ask(design, "damp", "tenure", "sex", "us-2000")
    with pytest.raises(sr.QuestionError, match="merge names 'age'"):
        ask(design, "damp", "sex", "age_group", "sample", merge={"age": {}})
    with pytest.raises(sr.QuestionError, match="are no levels"):
        ask(design, "damp", "sex", "age_group", "sample", merge={"age_group": {"old": "18-34"}})
    chain = {"18-34": "35-54", "35-54": "55-74"}
    with pytest.raises(sr.QuestionError, match="both joins a level and takes one in"):
        ask(design, "damp", "sex", "age_group", "sample", merge={"age_group": chain})


def test_crude_beside_adjusted(design: sr.SampleDesign) -> None:
    rates = sr.standardize_rates(design, "damp", "tenure", "age_group", STANDARD)
    both = sr.compare_adjustment(rates, "owner")
    adjusted, crude = (
        compare_quietly(rates, "owner"),
        compare_quietly(sr.estimate_rates(design, "damp", by="tenure"), "owner"),
    )
    np.testing.assert_allclose(both.adjusted, adjusted.estimate, rtol=1e-12)
    np.testing.assert_allclose(both.adjusted_se, adjusted.se, rtol=1e-9)
    np.testing.assert_allclose(both.adjusted_p, adjusted.p, rtol=1e-9)
    np.testing.assert_allclose(both.crude, crude.estimate, rtol=1e-12)
    np.testing.assert_allclose(both.crude_se, crude.se, rtol=1e-9)
    np.testing.assert_allclose(both.change, both.adjusted - both.crude, atol=1e-15)
    assert (both.change_se < 0.5 * np.hypot(both.crude_se, both.adjusted_se)).all()
    jack = sr.standardize_rates(
        sr.make_replicates(design, "stratified-jackknife"), "damp", "tenure", "age_group", STANDARD
    )
    np.testing.assert_allclose(
        sr.compare_adjustment(jack, "owner").change_se, both.change_se, rtol=0.1
    )
    plain = sr.estimate_rates(design, "damp", by="tenure")
    with pytest.raises(sr.ComparisonError, match="must be a table of adjusted rates"):
        sr.compare_adjustment(plain)
