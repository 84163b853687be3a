"""What must not matter does not matter."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

import svyrates as sr
from tests.reference import Survey
from tests.strategies import frame_of, surveys

NUMBERS = [
    "n",
    "rate",
    "se",
    "low",
    "high",
    "df",
    "design_effect",
    "kish_factor",
    "unweighted_rate",
]


def _asked(survey: Survey) -> tuple[pd.DataFrame, dict[str, object]]:
    assume(any(r.weight > 0 and r.inside and r.groups is not None for r in survey.records))
    return frame_of(survey)


def _table(frame: pd.DataFrame, arguments: dict[str, object]) -> pd.DataFrame:
    design = sr.SampleDesign(frame, **arguments)
    return sr.estimate_rates(design, "y0", by="group", where="inside").to_frame()


def _same(one: pd.DataFrame, other: pd.DataFrame) -> None:
    np.testing.assert_allclose(one[NUMBERS], other[NUMBERS], rtol=1e-9, atol=1e-12)


@given(surveys(), st.randoms(use_true_random=False))
def test_row_order(survey: Survey, random: object) -> None:
    frame, arguments = _asked(survey)
    order = list(range(len(frame)))
    random.shuffle(order)  # type: ignore[attr-defined]
    _same(_table(frame, arguments), _table(frame.iloc[order].reset_index(drop=True), arguments))


@given(surveys(), st.sampled_from([1e-9, 0.37, 12.0, 1e9]))
def test_scale_of_the_weights(survey: Survey, scale: float) -> None:
    frame, arguments = _asked(survey)
    _same(_table(frame, arguments), _table(frame.assign(w=frame["w"] * scale), arguments))


@given(surveys())
def test_labels_of_units(survey: Survey) -> None:
    frame, arguments = _asked(survey)
    renamed = frame.copy()
    for name in ("stratum", "unit1", "unit2"):
        if name in renamed:
            renamed[name] = "u" + (99 - renamed[name]).astype(str)
    _same(_table(frame, arguments), _table(renamed, arguments))


@given(surveys())
def test_success_and_failure(survey: Survey) -> None:
    frame, arguments = _asked(survey)
    first, second = _table(frame, arguments), _table(frame.assign(y0=1 - frame["y0"]), arguments)
    np.testing.assert_allclose(first["rate"], 1 - second["rate"], rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(first["se"], second["se"], rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(first["low"], 1 - second["high"], rtol=1e-8, atol=1e-9)


@given(surveys())
def test_a_record_of_weight_zero_is_no_member(survey: Survey) -> None:
    """Where records are not the sampling units, one more of weight zero changes nothing."""
    assume(survey.n_cluster_stages == 1 and not survey.records_last)
    frame, arguments = _asked(survey)
    more = frame.iloc[[0]].assign(w=0.0, y0=1)
    _same(_table(frame, arguments), _table(pd.concat([frame, more], ignore_index=True), arguments))


def test_a_subpopulation_is_not_a_filter() -> None:
    """Units without a member stay in the variance; filtering loses them and their strata."""
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    park = survey["dwelling_type"] == "park home"
    whole = sr.estimate_rates(design, "damp", where=park)
    filtered = sr.SampleDesign(survey[park], weight="wt", strata="district", clusters="block")
    cut = sr.estimate_rates(filtered, "damp")
    assert whole.rate[0] == pytest.approx(cut.rate[0], rel=1e-12)
    assert whole.se[0] != pytest.approx(cut.se[0], rel=1e-3)
