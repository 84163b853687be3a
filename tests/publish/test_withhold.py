"""What is withheld is gone: from every column, every format, and every comparison."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pandas as pd
import pytest

import svyrates as sr
from svyrates.publish import WITHHELD
from tests.quiet import compare_quietly


@pytest.fixture(scope="module")
def design() -> sr.SampleDesign:
    survey = sr.demo_survey(wave="2024")
    return sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")


@pytest.fixture(scope="module")
def rates(design: sr.SampleDesign) -> sr.RateTable:
    return sr.estimate_rates(design, "damp", by="dwelling_type")


def _numbers(frame: pd.DataFrame, row: int) -> list[float]:
    return [
        float(value)
        for value in frame.iloc[row]
        if isinstance(value, int | float | np.number) and not isinstance(value, bool)
    ]


def _everywhere(table: Any) -> str:
    texts = (table.to_csv(), table.to_json(), table.to_html(), table.to_markdown(), str(table))
    return "\n".join((*texts, table.to_latex(), table.text(200, percent=True)))


def test_no_withheld_number_is_left(rates: sr.RateTable) -> None:
    public = sr.withhold_rates(rates)
    row = [str(label[0]) for label in rates.groups].index("park home")
    assert np.isnan(_numbers(public.to_frame(), row)).all()
    everywhere = _everywhere(public)
    for number in _numbers(rates.to_frame(), row):
        if np.isfinite(number) and number != round(number):
            assert repr(number) not in everywhere
            assert f"{number:.4f}" not in everywhere
    assert public.notes[row].count("95% interval 30 percentage points wide or more") == 1
    kept = [i for i in range(3) if i != row]
    np.testing.assert_array_equal(public.rate[kept], rates.rate[kept])
    assert "Series 2 No. 175" in str(public)
    assert "data provider's own disclosure" in str(public).replace("\n  ", " ")


def test_nothing_can_be_computed_from_it(rates: sr.RateTable) -> None:
    public = sr.withhold_rates(rates)
    assert public.blocks == ()
    with pytest.raises(sr.ComparisonError):
        sr.compare_rates(public)
    assert public.presentation is None
    assert "presentation" not in public.to_frame()
    assert np.isnan(public.covariance.to_numpy()).all()


@pytest.mark.parametrize("versus", [None, "house", sr.EVERYONE, sr.EVERYONE_ELSE, 0.3])
def test_comparisons_lose_what_the_rates_lost(rates: sr.RateTable, versus: Any) -> None:
    gaps = compare_quietly(rates, versus)
    public = sr.withhold_rates(rates)
    shown = sr.withhold_comparisons(gaps, public)
    frame, full = shown.to_frame(), gaps.to_frame()
    everywhere = _everywhere(shown)
    for row in range(len(gaps)):
        touched = "park home" in (gaps.group[row], gaps.versus[row]) or versus in (
            sr.EVERYONE,
            sr.EVERYONE_ELSE,
        )
        numbers = _numbers(frame, row)
        assert np.isnan(numbers).all() == touched
        if touched:
            assert frame["note"][row] == "a rate in it is withheld"
            assert frame["verdict"][row] == "withheld"
            secret = full.drop(columns=["rate", "versus_rate"])
            for number in _numbers(secret, row):
                if np.isfinite(number) and len(repr(number)) > 8:
                    assert repr(number) not in everywhere
    assert shown.rates is public
    said = shown.sentences(cautions=False)
    assert sum("cannot be compared" in text for text in said) == int(np.isnan(shown.rate).sum())


def test_small_counts_and_what_would_show_them(design: sr.SampleDesign) -> None:
    """One small cell takes others with it, so that no sum gives it away."""
    survey = design.frame.to_native()
    few = survey[(survey["tenure"] != "rent-free") | (survey["terrain"] != "upland")]
    some = survey[(survey["tenure"] == "rent-free") & (survey["terrain"] == "upland")].head(4)
    data = pd.concat([few, some], ignore_index=True)
    small = sr.SampleDesign(data, weight="wt", strata="district", clusters="block")
    rates = sr.estimate_rates(small, "damp", by=["terrain", "tenure"])
    public = sr.withhold_rates(rates, None, disclosure=sr.DisclosureRule(minimum=5))
    hidden = np.isnan(public.n).reshape(2, 4)
    assert hidden[1, 3]
    # In its row and in its column another cell is withheld too.
    assert hidden[1].sum() >= 2
    assert hidden[:, 3].sum() == 2
    assert set(np.array(public.notes)[hidden.ravel()]) == {WITHHELD}


def test_rounded_counts(rates: sr.RateTable) -> None:
    public = sr.withhold_rates(rates, None, round_to=10)
    shown = public.n[~np.isnan(public.n)]
    np.testing.assert_array_equal(shown % 10, 0)
    np.testing.assert_array_equal(np.abs(shown - rates.n) <= 5, True)
    np.testing.assert_array_equal(public.rate, rates.rate)
    assert "Counts are rounded to 10." in public.remarks


def test_standards_and_masks(design: sr.SampleDesign, rates: sr.RateTable) -> None:
    assert not np.isnan(sr.withhold_rates(rates, None).rate).any()
    strict = sr.Standard(withhold=sr.Thresholds(least_n=4000))
    assert np.isnan(sr.withhold_rates(rates, strict).rate).all()
    with pytest.raises(sr.QuestionError, match="There is no standard 'nhcs'"):
        sr.withhold_rates(rates, "nhcs")
    masks = sr.estimate_rates(design, "damp", by={"a": "mould"})
    with pytest.raises(sr.QuestionError, match="masks"):
        sr.withhold_rates(masks, disclosure=sr.DisclosureRule(minimum=5))
    report = pd.DataFrame({"g": ["a"], "p": [0.2], "se": [0.01]})
    published = sr.rates_from_published(report, rate="p", by="g", se="se")
    with pytest.raises(sr.QuestionError, match="needs the counts"):
        sr.withhold_rates(published, disclosure=sr.DisclosureRule(minimum=5))
    other = sr.withhold_rates(sr.estimate_rates(design, "damp", by="sex"))
    with pytest.raises(sr.ComparisonError, match="no published version"):
        sr.withhold_comparisons(compare_quietly(rates), other)


def test_every_row_says_its_standing(rates: sr.RateTable) -> None:
    assert rates.to_frame()["presentation"].tolist() == ["show", "show", "withhold"]
    rows = json.loads(rates.to_json())["rows"]
    assert [row["presentation"] for row in rows] == ["show", "show", "withhold"]


def test_adjusted_and_several_outcomes(design: sr.SampleDesign) -> None:
    both = sr.estimate_rates(design, ["damp", "mould"], by="dwelling_type", joint=True)
    public = sr.withhold_rates(both)
    gaps = sr.withhold_comparisons(compare_quietly(both), public)
    assert np.isnan(gaps.estimate).sum() >= 2
    adjusted = sr.adjusted_rates(design, "damp ~ dwelling_type + age_group", by="dwelling_type")
    shown = sr.withhold_rates(adjusted, disclosure=sr.DisclosureRule(minimum=5))
    assert shown.model is None
    assert shown.crude_rate is not None
    np.testing.assert_array_equal(np.isnan(shown.crude_rate), np.isnan(shown.rate))
