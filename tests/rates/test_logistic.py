"""Weighted logistic regression against general libraries, and against what has no fit."""

from __future__ import annotations

import warnings
from collections.abc import Sequence

import numpy as np
import pytest
import statsmodels.api as sm
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy import optimize, special

import svyrates as sr
from svyrates.rates.logistic import LogisticFit, fit_logistic, refit
from svyrates.rates.logistic_faults import model_basis
from tests.outside import import_samplics

FloatArray = NDArray[np.float64]
SEEDS = st.integers(0, 2**32 - 1)
NAMES = ("Intercept", "north", "south", "age", "income")


def _data(seed: int, n: int = 400) -> tuple[FloatArray, FloatArray, FloatArray]:
    rng = np.random.default_rng(seed)
    area = rng.integers(0, 3, n)
    numbers = rng.normal(size=(2, n)) * [[3.0], [0.1]]
    x = np.column_stack((np.ones(n), area == 1, area == 2, *numbers)).astype(np.float64)
    y = (rng.random(n) < special.expit(x @ rng.normal(0.0, 0.7, 5))).astype(np.float64)
    for label in range(3):
        # Both outcomes in every area, whatever the seed.
        y[np.flatnonzero(area == label)[:2]] = 0.0, 1.0
    return x, y, rng.uniform(0.2, 4.0, n)


def _fit(
    x: FloatArray, y: FloatArray, w: FloatArray, names: Sequence[str] = NAMES
) -> tuple[FloatArray, LogisticFit]:
    basis = model_basis(x, y, w, names)
    fit = fit_logistic(basis, y, w)
    return basis.coefficients(fit.gamma), fit


@settings(max_examples=25)
@given(SEEDS)
def test_coefficients_are_those_of_a_general_library(seed: int) -> None:
    """Statsmodels' GLM: the same weighted score equations."""
    x, y, w = _data(seed)
    beta, fit = _fit(x, y, w)
    model = sm.GLM(y, x, family=sm.families.Binomial(), freq_weights=w)
    first = model.fit(tol=1e-14, maxiter=200)
    # Its covariance belongs to the coefficients before the last step.
    other = model.fit(tol=1e-14, start_params=first.params)
    np.testing.assert_allclose(beta, other.params, rtol=1e-8, atol=1e-8)
    np.testing.assert_allclose(fit.fitted, other.fittedvalues, rtol=1e-8)
    inverse = np.linalg.inv(fit.information) / w.mean()
    np.testing.assert_allclose(inverse, other.cov_params(), rtol=1e-6, atol=1e-12)


@given(SEEDS, st.floats(1e-9, 1e9))
def test_what_does_not_matter(seed: int, scale: float) -> None:
    """Scale of the weights, order of rows and columns, and which answer is called a success."""
    x, y, w = _data(seed)
    beta, _ = _fit(x, y, w)
    rng = np.random.default_rng(seed)
    rows, columns = rng.permutation(y.size), rng.permutation(5)
    np.testing.assert_allclose(_fit(x, y, scale * w)[0], beta, rtol=1e-8, atol=1e-9)
    turned, _ = _fit(x[rows][:, columns], y[rows], w[rows])
    np.testing.assert_allclose(turned, beta[columns], rtol=1e-8, atol=1e-9)
    np.testing.assert_allclose(_fit(x, 1.0 - y, w)[0], -beta, rtol=1e-8, atol=1e-9)


def test_samplics_finds_the_same_coefficients() -> None:
    """An independent check: its point estimates only, for its covariance has other factors."""
    import_samplics()
    from samplics.regression import SurveyGLM
    from samplics.utils.types import ModelType

    x, y, w = _data(2)
    units = np.arange(y.size) % 40
    other = SurveyGLM(model=ModelType.LOGISTIC)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        other.estimate(
            y=y.astype(int), x=x, samp_weight=w, stratum=units % 5, psu=units,
        )  # fmt: skip
    np.testing.assert_allclose(_fit(x, y, w)[0], other.beta["point_est"], rtol=1e-6)


def test_columns_far_from_zero_lose_no_digits(rng: np.random.Generator) -> None:
    """A cubic in the calendar year, as it is and about its middle; and under replicates."""
    year = rng.integers(1990, 2025, 3_000).astype(np.float64)
    y = (rng.random(3_000) < special.expit(0.05 * (year - 2007))).astype(np.float64)
    w = rng.uniform(1.0, 3.0, 3_000)
    raw = np.vander(year, 4, increasing=True)
    centred = np.vander((year - 2007.0) / 10.0, 4, increasing=True)
    beta, fit = _fit(raw, y, w, NAMES[:4])
    np.testing.assert_allclose(fit.fitted, _fit(centred, y, w, NAMES[:4])[1].fitted, rtol=1e-7)
    np.testing.assert_allclose(special.expit(raw @ beta), fit.fitted, rtol=1e-5)
    basis = model_basis(raw, y, w, NAMES[:4])
    np.testing.assert_allclose(special.expit(basis.of(raw) @ fit.gamma), fit.fitted, rtol=1e-7)
    weights = w * rng.poisson(1.0, (3, 3_000))
    for again, replicate in zip(refit(basis, y, weights, fit.gamma), weights, strict=True):
        assert again is not None
        scratch = _fit(centred, y, replicate, NAMES[:4])[1]
        np.testing.assert_allclose(again.fitted, scratch.fitted, rtol=1e-7)


def test_a_year_and_its_square_can_adjust() -> None:
    """The margins do not depend on where the calendar begins."""
    survey = sr.demo_survey(wave="2024")
    survey["year"] = np.random.default_rng(1).integers(1950, 2024, len(survey))
    survey["since"] = survey["year"] - 1990
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    raw, moved = (
        sr.adjusted_rates(design, f"damp ~ tenure + {name} + I({name}**2)", by="tenure")
        for name in ("year", "since")
    )
    np.testing.assert_allclose(raw.rate, moved.rate, rtol=1e-9)
    np.testing.assert_allclose(raw.se, moved.se, rtol=1e-7)
    assert raw.model is not None
    assert moved.model is not None
    square = len(raw.model.name) - 1
    assert raw.model.name[square] == "I(year ** 2)"
    np.testing.assert_allclose(
        raw.model.covariance[square, square], moved.model.covariance[square, square], rtol=1e-5
    )


def test_steps_that_lead_down_are_halved() -> None:
    """From here the whole step overshoots to where the likelihood is flat for good."""
    x = np.column_stack((np.ones(100), np.linspace(-4.0, 4.0, 100)))
    y = (x[:, 1] + np.resize([1.5, -1.5, 0.3], 100) > 0).astype(np.float64)
    w = np.ones(100)
    basis = model_basis(x, y, w, NAMES[:2])
    far = fit_logistic(basis, y, w, start=np.array([4.0, 3.0]))
    np.testing.assert_allclose(far.gamma, fit_logistic(basis, y, w).gamma, rtol=1e-8)


@given(SEEDS)
def test_refit_equals_a_fit_from_scratch(seed: int) -> None:
    x, y, w = _data(seed)
    weights = w * np.random.default_rng(seed).poisson(1.0, (4, y.size))
    weights[3, (x[:, 1] == 1.0) & (y == 0.0)] = 0.0
    basis = model_basis(x, y, w, NAMES)
    seen: list[int] = []
    found = list(refit(basis, y, weights, fit_logistic(basis, y, w).gamma, seen.append))
    assert seen == [1] * 4
    assert found[3] is None
    for again, replicate in zip(found[:3], weights[:3], strict=True):
        assert again is not None
        np.testing.assert_allclose(again.gamma, _fit(x, y, replicate)[0], rtol=1e-8, atol=1e-9)


def test_collinear_columns_are_named() -> None:
    x, y, w = _data(7)
    x[:, 4] = 3.0 * x[:, 0] - 2.0 * x[:, 1]
    with pytest.raises(sr.QuestionError, match="columns 'Intercept', 'north', 'income' are coll"):
        _fit(x, y, w)
    x, y, w = _data(7)
    w[(x[:, 1] == 0.0) & (x[:, 2] == 0.0)] = 0.0
    with pytest.raises(sr.QuestionError, match="columns 'Intercept', 'north', 'south' are coll"):
        _fit(x, y, w)


@given(SEEDS, st.booleans(), st.sampled_from([1, 2]))
def test_a_level_with_one_outcome_is_named(seed: int, success: bool, level: int) -> None:
    x, y, w = _data(seed)
    y[x[:, level] == 1.0] = float(success)
    with pytest.raises(sr.QuestionError) as caught:
        _fit(x, y, w)
    n = int(x[:, level].sum())
    assert f"in {n} of 400 records the columns {NAMES[level]!r} tell" in str(caught.value)


@given(SEEDS, st.integers(8, 40))
def test_separation_is_found_where_linear_programming_finds_it(seed: int, n: int) -> None:
    """Small samples are separated, in full or in part, about as often as not."""
    rng = np.random.default_rng(seed)
    x = np.column_stack((np.ones(n), rng.integers(0, 2, n), rng.integers(-2, 3, n))).astype(float)
    y = (rng.random(n) < special.expit(1.5 * x[:, 2])).astype(np.float64)
    if np.linalg.matrix_rank(x) < 3 or y.min() == y.max():
        return
    signed = np.where(y == 1.0, 1.0, -1.0)[:, None] * x
    # Largest gain in the direction of a separation; 0 if there is none.
    gain = -optimize.linprog(
        -signed.sum(axis=0), A_ub=-signed, b_ub=np.zeros(n), bounds=(-1, 1)
    ).fun
    if gain > 1e-9:
        with pytest.raises(sr.QuestionError, match="separated"):
            _fit(x, y, np.ones(n), NAMES[:3])
    else:
        beta, _ = _fit(x, y, np.ones(n), NAMES[:3])
        other = sm.GLM(y, x, family=sm.families.Binomial()).fit(tol=1e-14, maxiter=200)
        np.testing.assert_allclose(beta, other.params, rtol=1e-5, atol=1e-6)


def test_nearly_separated_is_fitted() -> None:
    """One record on the wrong side is enough for a maximum, however far away it is."""
    z = np.linspace(-50.0, 50.0, 1_001)
    y = (z > 0.0).astype(np.float64)
    y[520] = 0.0
    x = np.column_stack((np.ones(z.size), z))
    beta, _ = _fit(x, y, np.ones(z.size), NAMES[:2])
    other = sm.GLM(y, x, family=sm.families.Binomial()).fit(tol=1e-12, maxiter=200)
    np.testing.assert_allclose(beta, other.params, rtol=1e-6)


def test_weights_without_a_maximum() -> None:
    """Negative replicate weights can leave the likelihood without one."""
    x, y, w = _data(3)
    basis = model_basis(x, y, w, NAMES)
    with pytest.raises(sr.QuestionError, match="has no maximum"):
        fit_logistic(basis, y, -w)
