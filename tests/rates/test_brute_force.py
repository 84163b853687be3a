"""Rates, covariances and degrees of freedom against plain loops over records."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

import svyrates as sr
from svyrates.errors import QuestionError
from tests import reference
from tests.reference import Survey
from tests.strategies import frame_of, surveys

CLOSE = {"rtol": 1e-9, "atol": 1e-13}


def _usable(survey: Survey) -> None:
    assume(any(record.weight > 0 for record in survey.records))
    assume(any(record.inside for record in survey.records))
    assume(any(r.groups is not None and any(r.groups) for r in survey.records))


def _rates(survey: Survey, by: object, **options: object) -> sr.RateTable:
    frame, arguments = frame_of(survey)
    design = sr.SampleDesign(frame, **arguments)
    outcomes = [name for name in frame if name.startswith("y")]
    return sr.estimate_rates(design, outcomes, by=by, where="inside", **options)


def _check(survey: Survey, rates: sr.RateTable, groups: list[int], n_outcomes: int) -> None:
    cells = list(itertools.product(range(n_outcomes), groups))
    columns = [reference.scores(survey, outcome, group) for outcome, group in cells]
    truth = reference.covariance(survey, columns)
    found = rates.covariance.to_numpy()
    for row, (outcome, group) in enumerate(cells):
        expected = reference.rate(survey, outcome, group)
        np.testing.assert_allclose(rates.rate[row], expected, **CLOSE)
        assert rates.n[row] == len(reference.members(survey, outcome, group))
        if rates.n[row]:
            assert rates.df[row] == reference.domain_df(survey, outcome, group)
        plain = reference.rate(survey, outcome, group, weighted=False)
        np.testing.assert_allclose(rates.unweighted_rate[row], plain, **CLOSE)
    defined = ~np.isnan(rates.se)
    assert np.array_equal(np.isnan(np.diag(found)), ~defined)
    inside = np.ix_(defined, defined)
    np.testing.assert_allclose(found[inside], truth[inside], rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(
        rates.se[defined] ** 2, np.diag(truth)[defined], rtol=1e-9, atol=1e-12
    )


@settings(max_examples=150)
@given(surveys())
def test_one_grouping_column(survey: Survey) -> None:
    _usable(survey)
    rates = _rates(survey, "group")
    _check(survey, rates, [int(label[0]) for label in rates.groups], 1)


@settings(max_examples=100)
@given(surveys(overlapping=True))
def test_overlapping_masks(survey: Survey) -> None:
    _usable(survey)
    n_groups = max(len(r.groups) for r in survey.records if r.groups is not None)
    rates = _rates(survey, {f"g{i}": f"in{i}" for i in range(n_groups)})
    _check(survey, rates, list(range(n_groups)), 1)


@settings(max_examples=100)
@given(surveys(n_outcomes=2, overlapping=True))
def test_two_outcomes_on_the_same_people(survey: Survey) -> None:
    _usable(survey)
    n_groups = max(len(r.groups) for r in survey.records if r.groups is not None)
    rates = _rates(survey, {f"g{i}": f"in{i}" for i in range(n_groups)}, joint=True)
    _check(survey, rates, list(range(n_groups)), 2)


@settings(max_examples=60)
@given(surveys(kinds=("clusters",)), st.sampled_from(["grand-mean", "collapse"]))
def test_single_cluster_strata(survey: Survey, policy: str) -> None:
    """One more stratum with a single cluster, under the two policies that keep the clusters."""
    _usable(survey)
    n_strata = max(record.units[0] for record in survey.records) + 1
    extra = [
        reference.Record(1.5, (i % 2,), survey.records[0].groups, (n_strata, 0), (9.0,))
        for i in range(3)
    ]
    if not survey.n_populations:
        extra = [reference.Record(r.weight, r.outcomes, r.groups, r.units) for r in extra]
    survey.records.extend(extra)
    if policy == "collapse":
        survey.joined = {n_strata: n_strata - 1}
    else:
        survey.lone = "grand-mean"
    frame, arguments = frame_of(survey)
    with pytest.raises(sr.DesignError, match="single cluster"):
        sr.SampleDesign(frame, **arguments)
    design = sr.SampleDesign(frame, single_cluster_strata=policy, **arguments)
    rates = sr.estimate_rates(design, "y0", by="group", where="inside")
    _check(survey, rates, [int(label[0]) for label in rates.groups], 1)


@settings(max_examples=60)
@given(surveys(kinds=("two-stage",)))
def test_self_representing_strata(survey: Survey) -> None:
    """The next stage takes the place of a single cluster, for variance and df."""
    _usable(survey)
    n_strata = max(record.units[0] for record in survey.records) + 1
    finite = survey.n_populations > 0
    for i in range(6):
        survey.records.append(
            reference.Record(
                1.0 + i,
                (i % 2,),
                survey.records[0].groups,
                (n_strata, 0, i // 2),
                (7.0, 11.0) if finite else (),
            )
        )
    frame, arguments = frame_of(survey)
    design = sr.SampleDesign(frame, single_cluster_strata="self-representing", **arguments)
    rates = sr.estimate_rates(design, "y0", by="group", where="inside")
    # The reference sees a stratum whose first-stage units are the dwellings, with their population.
    moved = Survey(
        [
            reference.Record(
                r.weight, r.outcomes, r.groups,
                (r.units[0], r.units[2], "whole") if r.units[0] == n_strata else r.units,
                ((11.0, 1.0) if finite else ()) if r.units[0] == n_strata else r.population,
                r.inside,
            )
            for r in survey.records
        ],
        survey.n_cluster_stages, survey.records_last, survey.n_populations,
    )  # fmt: skip
    _check(moved, rates, [int(label[0]) for label in rates.groups], 1)


def test_a_question_about_nobody_is_an_error() -> None:
    survey = Survey(
        [reference.Record(1.0, (i % 2,), (True,), (0, i % 2), (), False) for i in range(6)],
        1,
        False,
    )
    with pytest.raises(QuestionError, match="selects no records"):
        _rates(survey, "group")
