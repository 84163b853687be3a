"""Published figures of a national survey, through the public face.

National Health Statistics Reports 158 (NCHS 2021, doi 10.15620/cdc:106273): obesity among adults in
the U.S. National Health and Nutrition Examination Survey, 2017-March 2020.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import svyrates as sr
from tests.outside import open_data

pytestmark = pytest.mark.open_data

PUBLISHED = {"20-39": "39.8", "40-59": "44.3", "60 and over": "41.5"}


@pytest.fixture(scope="module")
def adults() -> sr.RateTable:
    data = pd.read_csv(open_data("nhanes_2017_2020.csv"))
    data["age"] = pd.cut(data["RIDAGEYR"], [20, 40, 60, 200], right=False, labels=list(PUBLISHED))
    data["obese"] = np.where(data["BMXBMI"].isna(), np.nan, data["BMXBMI"] >= 30)
    asked = (data["RIDAGEYR"] >= 20) & (data["RIDEXPRG"] != 1)
    design = sr.SampleDesign(data, weight="WTMECPRP", strata="SDMVSTRA", clusters="SDMVPSU")
    return sr.estimate_rates(design, "obese", by="age", where=asked)


def test_crude_figures_by_age(adults: sr.RateTable) -> None:
    found = {
        str(label[0]): f"{100 * p:.1f}" for label, p in zip(adults.groups, adults.rate, strict=True)
    }
    assert found == PUBLISHED


def test_degrees_of_freedom(adults: sr.RateTable) -> None:
    """NHANES tutorial, "Reliability of Estimates": units minus strata with sampled members."""
    data = pd.read_csv(open_data("nhanes_2017_2020.csv"))
    asked = data[
        (data["WTMECPRP"] > 0)
        & data["BMXBMI"].notna()
        & (data["RIDAGEYR"] >= 60)
        & (data["RIDEXPRG"] != 1)
    ]
    units = asked.groupby(["SDMVSTRA", "SDMVPSU"]).ngroups
    assert adults.df[2] == units - asked["SDMVSTRA"].nunique()


AGE_ADJUSTED = {"W": "41.4", "B": "49.9", "A": "16.1", "H": "45.6"}


def test_age_adjusted_figures() -> None:
    """All five published percents, standardised to the 2000 population, to the printed digit."""
    data = pd.read_csv(open_data("nhanes_2017_2020.csv"))
    ages = ["20-39", "40-59", "60 and over"]
    data["age"] = pd.cut(data["RIDAGEYR"], [20, 40, 60, 200], right=False, labels=ages)
    data["obese"] = np.where(data["BMXBMI"].isna(), np.nan, data["BMXBMI"] >= 30)
    data["group"] = data["RIDRETH3"].map({1: "H", 2: "H", 3: "W", 4: "B", 6: "A", 7: "O"})
    asked = ((data["RIDAGEYR"] >= 20) & (data["RIDEXPRG"] != 1)).to_numpy()
    design = sr.SampleDesign(data, weight="WTMECPRP", strata="SDMVSTRA", clusters="SDMVPSU")
    everyone = sr.standardize_rates(design, "obese", None, "age", "us-2000", where=asked)
    assert f"{100 * everyone.rate[0]:.1f}" == "41.9"
    groups = sr.standardize_rates(design, "obese", "group", "age", "us-2000", where=asked)
    found = {
        str(label[0]): f"{100 * p:.1f}" for label, p in zip(groups.groups, groups.rate, strict=True)
    }
    assert {name: found[name] for name in AGE_ADJUSTED} == AGE_ADJUSTED
