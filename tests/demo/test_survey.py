"""What the demo survey promises: its design, its weights, its missing answers, its stability."""

from __future__ import annotations

import hashlib

import numpy as np
import pandas as pd
import pytest

import svyrates as sr
from svyrates.demo import WAVES, build
from svyrates.demo.places import ADULTS, DISTRICTS

# SHA-256 of the CSV text. It guards against a survey that changes unnoticed, between versions of
# numpy and pandas above all; after a change on purpose, put in what the test shows.
CHECKSUM = "68832ab552b9a60786ac9e14fbf2ae98e22685e4144bdb2a86fad63dc706bd4d"

BINARY = [
    "draught", "damp", "condensation", "arrears", "smoky", "mould", "thermostat", "disconnected",
]  # fmt: skip
DWELLING = ["wave", "district", "block", "dwelling"]


@pytest.fixture(scope="module")
def both() -> pd.DataFrame:
    return sr.demo_survey()


def test_two_waves_stacked_are_the_two_waves(both: pd.DataFrame) -> None:
    parts = [sr.demo_survey(wave=wave) for wave in WAVES]
    assert both.equals(pd.concat(parts, ignore_index=True))
    for part in parts:
        assert 5_800 <= len(part) <= 6_300
        assert part["wave"].nunique() == 1


def test_an_unknown_wave_is_refused() -> None:
    with pytest.raises(sr.QuestionError, match=r"one of '2021', '2024'; got '2022'"):
        sr.demo_survey(wave="2022")


def test_every_call_gives_a_copy() -> None:
    spoilt = sr.demo_survey()
    spoilt["wt"] = 0.0
    spoilt.loc[0, "help_grant"] = pd.NA
    assert (sr.demo_survey()["wt"] > 0).all()
    assert sr.demo_survey().equals(build.__wrapped__(2024))


def test_it_is_the_same_everywhere(both: pd.DataFrame) -> None:
    text = both.to_csv(index=False, lineterminator="\n")
    assert hashlib.sha256(text.encode()).hexdigest() == CHECKSUM


@pytest.mark.parametrize("wave", WAVES)
def test_the_design(wave: str) -> None:
    survey = sr.demo_survey(wave=wave)
    blocks = survey.groupby("district")["block"].agg(["nunique", "min", "max"])
    assert len(blocks) == 24
    assert blocks["nunique"].between(2, 8).all()
    # Blocks are numbered 1, 2, ... within districts, so their codes repeat across strata.
    assert (blocks["min"] == 1).all()
    assert (blocks["max"] == blocks["nunique"]).all()
    population = survey.groupby("district")["blocks_in_district"].agg(["nunique", "first"])
    assert (population["nunique"] == 1).all()
    assert (population["first"] > blocks["nunique"]).all()
    within = survey.groupby(["district", "block"])
    assert (within["dwellings_in_block"].nunique() == 1).all()
    assert (within["dwellings_in_block"].first() > within["dwelling"].nunique()).all()


def test_waves_share_blocks_but_not_dwellings(both: pd.DataFrame) -> None:
    blocks = both.groupby(["district", "block"])
    assert (blocks["wave"].nunique() == 2).all()
    dwellings = both.groupby(["district", "block", "dwelling"])
    assert (dwellings["wave"].nunique() == 1).all()
    sampled = both.drop_duplicates(DWELLING).groupby(["district", "block"]).size()
    assert (sampled < blocks["dwellings_in_block"].first()).all()


def test_adults_of_a_dwelling_share_what_belongs_to_it(both: pd.DataFrame) -> None:
    dwellings = both.groupby(DWELLING)
    assert dwellings.size().between(1, 3).all()
    for column in ("tenure", "dwelling_type", "heating", "disconnected"):
        assert (dwellings[column].nunique(dropna=False) == 1).all(), column


def test_weights_sum_to_the_adults_of_every_district(both: pd.DataFrame) -> None:
    assert ADULTS == 694_000
    known = pd.Series({name: float(adults) for name, adults, _ in DISTRICTS})
    for _, survey in both.groupby("wave"):
        np.testing.assert_allclose(survey["wt"].sum(), ADULTS, rtol=1e-12)
        sums = survey.groupby("district")["wt"].sum()
        np.testing.assert_allclose(sums[known.index], known, rtol=1e-12)
        women = survey.loc[survey["sex"] == "woman", "wt"].sum()
        np.testing.assert_allclose(women, 0.515 * ADULTS, rtol=1e-12)


def test_weights_are_unequal_between_districts_and_within(both: pd.DataFrame) -> None:
    mean = both.groupby("terrain")["wt"].mean()
    assert mean["lowland"] > 5 * mean["upland"]
    assert (both.groupby(["wave", "district", "block"])["wt"].nunique() > 2).all()


@pytest.mark.parametrize(
    ("column", "low", "high"),
    [("cold_home", 0.03, 0.06), ("help_grant", 0.01, 0.03), ("tenure", 0.002, 0.009)],
)
def test_some_answers_are_missing(both: pd.DataFrame, column: str, low: float, high: float) -> None:
    assert (both.groupby("wave")[column].apply(lambda c: c.isna().mean()).between(low, high)).all()


def test_only_answers_are_missing(both: pd.DataFrame) -> None:
    helps = ["help_grant", "help_advice", "help_family"]
    gaps = both.isna().any()
    assert set(gaps.index[gaps]) == {"cold_home", "tenure", *helps}
    skipped = both[helps].isna()
    assert (skipped.all(axis=1) == skipped.any(axis=1)).all()


def test_kinds_of_columns(both: pd.DataFrame) -> None:
    for column in ("age_group", "cold_home"):
        assert both[column].cat.ordered, column
    assert list(both["cold_home"].cat.categories) == ["never", "sometimes", "often", "always"]
    assert list(both["tenure"].cat.categories) == [
        "owner",
        "social tenant",
        "private tenant",
        "rent-free",
    ]
    assert str(both["help_grant"].dtype) == "Int64"
    assert both["block"].dtype == np.int64
    for column in BINARY:
        assert both[column].dtype == np.int64, column
        assert set(both[column]) == {0, 1}, column


def test_a_rare_outcome_and_a_group_in_few_blocks(both: pd.DataFrame) -> None:
    assert 0.003 < both["disconnected"].mean() < 0.015
    for _, survey in both.groupby("wave"):
        parks = survey[survey["dwelling_type"] == "park home"]
        assert len(parks) > 150
        assert len(parks.drop_duplicates(["district", "block"])) == 6
        network = survey[survey["heating"] == "heat network"]
        assert len(network) >= 10
        assert len(network.drop_duplicates(["district", "block"])) == 1


def test_blocks_keep_their_character_from_wave_to_wave(both: pd.DataFrame) -> None:
    for column, least, most in (("condensation", 0.9, 1.0), ("thermostat", -0.3, 0.3)):
        shares = both.pivot_table(index=["district", "block"], columns="wave", values=column)
        assert least < np.corrcoef(shares["2021"], shares["2024"])[0, 1] < most, column
