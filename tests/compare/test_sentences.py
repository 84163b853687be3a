"""Sentences say what the table says: direction, size, unit, evidence, the simple claim."""

from __future__ import annotations

import re

import numpy as np
import pandas as pd
import pytest

import svyrates as sr
from tests.quiet import compare_quietly


@pytest.fixture(scope="module")
def design() -> sr.SampleDesign:
    survey = sr.demo_survey(wave="2024")
    return sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")


@pytest.fixture(scope="module")
def cold(design: sr.SampleDesign) -> sr.RateTable:
    return sr.estimate_rates(design, "cold_home", success=["often", "always"], by="tenure")


def _percent(value: float) -> str:
    return f"{100 * value:.1f}%"


def test_direction_and_size(cold: sr.RateTable) -> None:
    for table in (
        compare_quietly(cold),
        compare_quietly(cold, "owner"),
        compare_quietly(cold, sr.EVERYONE_ELSE),
    ):
        said = table.sentences(cautions=False)
        assert len(said) == len(table)
        for row, text in enumerate(said):
            assert _percent(table.rate[row]) in text
            assert _percent(table.versus_rate[row]) in text
            size = re.search(r"a difference of ([+-][\d.]+) percentage points", text)
            assert size is not None
            assert float(size[1]) == pytest.approx(100 * table.estimate[row], abs=0.051)
            if table.p[row] < 0.05:
                word = "higher" if table.estimate[row] > 0 else "lower"
                assert f"is {word} in" in text
                assert "no evidence" not in text
            else:
                assert text.startswith("There is no evidence of a difference")
            assert ("The simple formula" in text) == (
                table.verdict[row] not in ("agrees", "undetermined")
            )


def test_points_and_percent_are_never_confused(cold: sr.RateTable) -> None:
    relative = compare_quietly(cold, measure="relative_difference").sentences(cautions=False)
    assert all("a relative difference of" in text for text in relative)
    assert not any("points" in text for text in relative)
    ratio = compare_quietly(cold, measure="ratio").sentences(cautions=False)
    assert all(re.search(r"a ratio of \d+\.\d\d", text) for text in ratio)
    odds = compare_quietly(cold, measure="odds_ratio").sentences(cautions=False)
    assert all("an odds ratio of" in text for text in odds)
    difference = compare_quietly(cold).sentences(cautions=False)
    assert not any(re.search(r"difference of [+-][\d.]+%", text) for text in difference)


def test_what_the_simple_formula_would_have_claimed(design: sr.SampleDesign) -> None:
    damp = compare_quietly(sr.estimate_rates(design, "damp", by="dwelling_type"), "park home")
    text = damp.sentences()[0]
    assert "would have claimed a difference (p = 0.0003; verdict: false-alarm)" in text
    assert text.startswith("There is no evidence of a difference")


def test_margins_adjustment_and_one_side(cold: sr.RateTable) -> None:
    near = compare_quietly(cold, alternative="equivalent", margin=0.1)
    for row, text in enumerate(near.sentences(cautions=False)):
        assert f"conclusion: {near.conclusion[row]}." in text
        assert "90% limits" in text
    holm = compare_quietly(cold, multiplicity="holm").sentences()
    assert all("Adjusted by Holm's method" in text for text in holm[:6])
    assert "A family of 6 comparisons, adjusted by Holm's method." in holm
    greater = compare_quietly(cold, "owner", alternative="greater").sentences(cautions=False)
    assert all("95% limits: at least" in text for text in greater)
    moved = compare_quietly(cold, "owner", null=0.2).sentences(cautions=False)
    assert all("evidence that it departs from +20.0 points" in text for text in moved)


def test_cautions_come_last(cold: sr.RateTable) -> None:
    said = compare_quietly(cold).sentences()
    assert said[-1] == "A difference between groups is not its cause."
    assert "6 comparisons, no adjustment for their number" in said[-2]
    report = pd.DataFrame({"g": ["a", "b"], "p": [0.2, 0.3], "se": [0.01, 0.02]})
    published = compare_quietly(sr.rates_from_published(report, rate="p", by="g", se="se"))
    assert any("taken as independent" in text for text in published.sentences())


def test_levels_numbers_and_everyone(design: sr.SampleDesign) -> None:
    crossed = compare_quietly(sr.estimate_rates(design, "damp", by=["terrain", "sex"]))
    assert crossed.sentences()[0].startswith("Within terrain lowland, ")
    number = compare_quietly(sr.estimate_rates(design, "damp", by="sex"), 0.2).sentences()
    assert "than the 20.0% it is compared with" in number[0]
    everyone = compare_quietly(sr.estimate_rates(design, "damp", by="sex"), sr.EVERYONE).sentences()
    assert "in everyone" in everyone[0]
    assert '"everyone"' not in everyone[0]


def test_what_cannot_be_compared_is_said(design: sr.SampleDesign) -> None:
    survey = design.frame.to_native()
    survey = survey.assign(heating=survey["heating"].cat.add_categories(["peat"]))
    again = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    gaps = compare_quietly(sr.estimate_rates(again, "draught", by="heating"), "gas boiler")
    text = gaps.sentences()[gaps.find("peat")]
    assert text.startswith('"peat" and "gas boiler" cannot be compared')
    assert "a group is empty" in text


def test_hostile_labels_are_harmless() -> None:
    rng = np.random.default_rng(3)
    labels = ["\x1b[31mred", "a\nb", "<b>bold</b>", "\u202eabc"]
    data = pd.DataFrame({"g": rng.choice(labels, 400), "y": rng.integers(0, 2, 400)})
    gaps = compare_quietly(sr.estimate_rates(sr.SampleDesign(data), "y", by="g"))
    for text in gaps.sentences():
        assert "\x1b" not in text
        assert "\n" not in text
        assert "\u202e" not in text
