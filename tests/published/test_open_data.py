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
