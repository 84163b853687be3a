"""The open health survey that the samplics wheel carries, against its Taylor estimates.

samplics is archived and has known faults: an independent check here, and nothing else. The data
are a subset of the second U.S. National Health and Nutrition Examination Survey (public domain).
"""

from __future__ import annotations

import warnings
from typing import Any

import numpy as np
import pandas as pd
import pytest

import svyrates as sr
from tests import reference
from tests.outside import import_samplics
from tests.reference import Record, Survey


@pytest.fixture(scope="module")
def survey() -> pd.DataFrame:
    import_samplics()
    from samplics.datasets import load_nhanes2

    frame: pd.DataFrame = load_nhanes2()["data"]
    return frame


def _taylor(data: pd.DataFrame, outcome: str, by: str) -> tuple[Any, Any]:
    from samplics.estimation import TaylorEstimator
    from samplics.utils.types import PopParam

    known = data[data[outcome].notna()]
    estimator = TaylorEstimator(PopParam.mean)
    with warnings.catch_warnings():
        # Its own use of pandas and numpy is out of date; only its numbers matter here.
        warnings.simplefilter("ignore")
        estimator.estimate(
            y=known[outcome],
            samp_weight=known["finalwgt"],
            stratum=known["stratid"],
            psu=known["psuid"],
            domain=known[by],
            remove_nan=True,
        )
    return estimator.point_est, estimator.stderror


@pytest.mark.parametrize("outcome", ["highbp", "diabetes"])
def test_rates_by_group(survey: pd.DataFrame, outcome: str) -> None:
    design = sr.SampleDesign(survey, weight="finalwgt", strata="stratid", clusters="psuid")
    rates = sr.estimate_rates(design, outcome, by="race")
    point, stderror = _taylor(survey, outcome, "race")
    for row, (race,) in enumerate(rates.groups):
        assert rates.rate[row] == pytest.approx(point[race], rel=1e-9)
        assert rates.se[row] == pytest.approx(stderror[race], rel=1e-9)


def test_covariances(survey: pd.DataFrame) -> None:
    """Between all groups, against the plain loops of the reference."""
    design = sr.SampleDesign(survey, weight="finalwgt", strata="stratid", clusters="psuid")
    rates = sr.estimate_rates(design, "highbp", by="race")
    races = [label[0] for label in rates.groups]
    records = [
        Record(
            float(row.finalwgt),
            (None if np.isnan(row.highbp) else int(row.highbp),),
            tuple(row.race == race for race in races),
            (row.stratid, row.psuid),
        )
        for row in survey.itertuples()
    ]
    plain = Survey(records, n_cluster_stages=1, records_last=False)
    scores = [reference.scores(plain, 0, group) for group in range(len(races))]
    np.testing.assert_allclose(
        rates.covariance.to_numpy(), reference.covariance(plain, scores), rtol=1e-9
    )
