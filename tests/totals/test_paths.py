"""The fast paths and the frugal ones give the same numbers."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import HealthCheck, assume, given, settings

import svyrates as sr
from svyrates.rates import crude
from svyrates.tally import memory
from svyrates.totals import matrices
from tests.reference import Survey
from tests.strategies import frame_of, surveys


@settings(max_examples=60, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(survey=surveys(n_outcomes=2, overlapping=True))
def test_sparse_and_hashed_equal_dense(survey: Survey, monkeypatch: pytest.MonkeyPatch) -> None:
    """Sparse rows, hashed pairs: what large designs use, forced on small ones."""
    assume(any(r.weight > 0 and r.inside and r.groups is not None for r in survey.records))
    frame, arguments = frame_of(survey)
    design = sr.SampleDesign(frame, **arguments)
    masks = {name: name for name in frame if name.startswith("in") and name != "inside"}

    def ask() -> sr.RateTable:
        return sr.estimate_rates(design, ["y0", "y1"], by=masks, where="inside", joint=True)

    dense = ask()
    with monkeypatch.context() as patch:
        patch.setattr(matrices, "DENSE_ELEMENTS", -1)
        patch.setattr(matrices, "DENSE_SHARE", 2.0)
        patch.setattr(crude, "_SMALL_SIDES", -1)
        patch.setattr(memory, "_DENSE_CELLS", -1)
        frugal = ask()
        sparse_covariance = frugal.covariance.to_numpy()
    np.testing.assert_allclose(frugal.se, dense.se, rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(
        sparse_covariance, dense.covariance.to_numpy(), rtol=1e-8, atol=1e-12
    )


def test_many_joint_outcomes_equal_one_by_one() -> None:
    """Beyond a few outcomes only the patterns that occur are numbered."""
    survey = sr.demo_survey(wave="2024")
    names = ["draught", "damp", "condensation", "arrears", "smoky", "mould", "thermostat"]
    survey.loc[::11, "damp"] = np.nan
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    apart = sr.estimate_rates(design, names, by="sex")
    together = sr.estimate_rates(design, names, by="sex", joint=True)
    np.testing.assert_allclose(together.rate, apart.rate, rtol=1e-12)
    np.testing.assert_allclose(together.se, apart.se, rtol=1e-10)
    assert np.isnan(apart.covariance.to_numpy()).any()
    assert not np.isnan(together.covariance.to_numpy()).any()
