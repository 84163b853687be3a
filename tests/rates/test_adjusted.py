"""Survey-weighted logistic regression and its margins: by statsmodels, by hand, by replicates."""

from __future__ import annotations

import warnings
from typing import Any

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from scipy import special

import svyrates as sr
from tests.quiet import compare_quietly


def _survey(seed: int, n: int = 900) -> pd.DataFrame:
    rng = np.random.default_rng(seed)
    block = rng.integers(0, 30, n)
    group = rng.choice(["p", "q", "r"], n, p=[0.5, 0.3, 0.2])
    age = rng.normal(0, 1, n) + (group == "p")
    effect = rng.normal(0, 0.4, 30)[block]
    chance = special.expit(-0.4 + 0.5 * age + 0.6 * (group == "q") + effect)
    return pd.DataFrame(
        {
            "stratum": block % 5,
            "block": block,
            "g": group,
            "age": age,
            "sex": rng.choice(["w", "m"], n),
            "y": (rng.random(n) < chance).astype(int),
            "w": rng.uniform(0.5, 4.0, n),
        }
    )


def test_cluster_covariance_is_that_of_a_general_library() -> None:
    """One stratum: statsmodels' cluster-robust sandwich, times our factor G/(G-1)."""
    data = _survey(1)
    design = sr.SampleDesign(data, weight="w", clusters="block")
    found = sr.adjusted_rates(design, "y ~ g + age + sex", by="g").model
    assert found is not None
    x = pd.get_dummies(data[["g", "sex"]], dtype=float)
    matrix = np.column_stack((np.ones(len(data)), x["g_q"], x["g_r"], x["sex_w"], data["age"]))
    weights = data["w"].to_numpy()
    model = sm.GLM(data["y"], matrix, family=sm.families.Binomial(), var_weights=weights)
    groups = {"groups": data["block"].to_numpy(), "use_correction": False}
    with warnings.catch_warnings():
        # It says so of its diagnostics; the sandwich itself is of the weighted scores.
        warnings.filterwarnings("ignore", "cov_type not fully supported")
        other = model.fit(tol=1e-14, cov_type="cluster", cov_kwds=groups)
    np.testing.assert_allclose(found.coefficient, np.asarray(other.params), rtol=1e-8)
    g = data["block"].nunique()
    np.testing.assert_allclose(
        found.covariance, np.asarray(other.cov_params()) * g / (g - 1), rtol=1e-7
    )
    assert found.df[0] == g - 1
    np.testing.assert_allclose(found.odds_ratio, np.exp(found.coefficient))
    assert found.terms["g"].df1 == 2
    t = found.statistic[list(found.name).index("age")]
    assert found.terms["age"].f == pytest.approx(t**2, rel=1e-9)


def _margins_by_hand(data: pd.DataFrame, w: np.ndarray) -> np.ndarray:
    """Fit by statsmodels, set every record's group, average; no shared code."""

    def matrix(group: Any) -> np.ndarray:
        g = np.full(len(data), group) if isinstance(group, str) else group
        return np.column_stack(
            (np.ones(len(data)), g == "q", g == "r", data["age"], data["sex"] == "w",
             (g == "q") * data["age"], (g == "r") * data["age"])
        ).astype(float)  # fmt: skip

    kept = w != 0
    model = sm.GLM(
        data["y"][kept], matrix(data["g"].to_numpy())[kept],
        family=sm.families.Binomial(), freq_weights=w[kept],
    ).fit(tol=1e-14, maxiter=200)  # fmt: skip
    beta = np.asarray(model.params)
    return np.array([np.average(special.expit(matrix(g) @ beta), weights=w) for g in "pqr"])


def test_margins_by_hand_and_by_jackknife() -> None:
    data = _survey(3)
    design = sr.SampleDesign(data, weight="w", strata="stratum", clusters="block")
    formula = "y ~ g*age + sex"
    linear = sr.adjusted_rates(design, formula, by="g")
    w = data["w"].to_numpy()
    full = _margins_by_hand(data, w)
    np.testing.assert_allclose(linear.rate, full, rtol=1e-9)
    total = np.zeros((3, 3))
    for stratum, members in data.groupby("stratum"):
        blocks = members["block"].unique()
        for block in blocks:
            here = (data["stratum"] == stratum).to_numpy()
            out = (data["block"] == block).to_numpy()
            factor = np.where(out, 0.0, np.where(here, len(blocks) / (len(blocks) - 1), 1.0))
            away = _margins_by_hand(data, w * factor) - full
            total += (len(blocks) - 1) / len(blocks) * np.outer(away, away)
    replicated = sr.make_replicates(design, "stratified-jackknife")
    jackknife = sr.adjusted_rates(replicated, formula, by="g")
    np.testing.assert_allclose(jackknife.covariance, total, rtol=1e-6)
    scale = np.sqrt(np.outer(np.diag(total), np.diag(total)))
    np.testing.assert_allclose(linear.covariance / scale, total / scale, atol=0.12)
    gaps = compare_quietly(linear), compare_quietly(jackknife)
    np.testing.assert_allclose(gaps[0].se, gaps[1].se, rtol=0.1)
    np.testing.assert_allclose(gaps[0].shift_p, gaps[1].shift_p, atol=0.05)
    change = [sr.compare_adjustment(rates, "p").change_se for rates in (linear, jackknife)]
    np.testing.assert_allclose(*change, rtol=0.12)


@pytest.mark.parametrize(
    "arguments",
    [
        {"strata": "stratum", "clusters": "block"},
        {"strata": "stratum"},
        {"clusters": "block"},
        {},
        {"strata": "stratum", "clusters": "block", "population": ["n_blocks", "n_people"]},
    ],
)
def test_influence_under_every_design(arguments: dict[str, Any]) -> None:
    """A saturated model's margins are directly standardised rates, variance and all."""
    data = _survey(4).assign(old=lambda d: np.where(d["age"] > 0, "old", "young"))
    data["n_blocks"], data["n_people"] = 20, 400
    design = sr.SampleDesign(data, weight="w", **arguments)
    margins = sr.adjusted_rates(design, "y ~ g*old", by="g")
    standard = sr.standardize_rates(design, "y", "g", "old", "sample")
    np.testing.assert_allclose(margins.rate, standard.rate, rtol=1e-8)
    np.testing.assert_allclose(margins.covariance, standard.covariance, rtol=1e-6)
    np.testing.assert_allclose(margins.crude_rate, standard.crude_rate, rtol=1e-12)
    np.testing.assert_allclose(margins.df, standard.df)
    one, other = compare_quietly(margins), compare_quietly(standard)
    for name in ("se", "p", "simple_p", "shift", "shift_p", "simple_coverage", "variance_ratio"):
        np.testing.assert_allclose(getattr(one, name), getattr(other, name), rtol=1e-5)
    sources = [gaps.variance_sources().drop(columns=["group", "versus"]) for gaps in (one, other)]
    np.testing.assert_allclose(*sources, rtol=1e-5)


def test_a_model_of_the_group_alone_gives_crude_rates() -> None:
    data = _survey(5)
    design = sr.SampleDesign(data, weight="w", strata="stratum", clusters="block")
    margins, crude = (
        sr.adjusted_rates(design, "y ~ g", by="g"),
        sr.estimate_rates(design, "y", by="g"),
    )
    np.testing.assert_allclose(margins.rate, crude.rate, rtol=1e-9)
    np.testing.assert_allclose(margins.covariance, crude.covariance, rtol=1e-8, atol=1e-15)


def test_subpopulations_unknown_values_and_empty_groups() -> None:
    data = _survey(6)
    data.loc[:9, "age"] = np.nan
    data["g"] = pd.Categorical(data["g"], ["p", "q", "r", "none"])
    design = sr.SampleDesign(data, weight="w", strata="stratum", clusters="block")
    inside = (data["sex"] == "w").to_numpy()
    rates = sr.adjusted_rates(design, "y ~ g + age", by="g", where=inside)
    lost = int((inside & data["age"].isna()).sum())
    assert f"{lost} records with an unknown value in the formula are left out." in str(rates)
    assert rates.n.sum() == inside.sum() - lost
    assert rates.coverage is not None
    assert rates.coverage.n_outside == (~inside).sum()
    assert np.isnan(rates.rate[3])
    assert "no members" in rates.notes[3]
    few = data[inside & data["age"].notna().to_numpy()]
    x = np.column_stack((np.ones(len(few)), few["g"] == "q", few["g"] == "r", few["age"])).astype(
        float
    )
    beta = (
        sm.GLM(few["y"], x, family=sm.families.Binomial(), freq_weights=few["w"].to_numpy())
        .fit(tol=1e-14)
        .params
    )
    x[:, 1], x[:, 2] = 1.0, 0.0
    assert rates.rate[1] == pytest.approx(np.average(special.expit(x @ beta), weights=few["w"]))


def test_groups_may_be_numbers_and_other_frames() -> None:
    polars = pytest.importorskip("polars")
    data = _survey(7).assign(k=lambda d: d["g"].map({"p": 1, "q": 2, "r": 3}))
    expected = sr.adjusted_rates(
        sr.SampleDesign(data, weight="w", clusters="block"), "y ~ g + age", by="g"
    )
    for frame in (data, polars.from_pandas(data)):
        design = sr.SampleDesign(frame, weight="w", clusters="block")
        found = sr.adjusted_rates(design, "y ~ k + age", by="k")
        np.testing.assert_allclose(found.rate, expected.rate, rtol=1e-10)
        np.testing.assert_allclose(found.se, expected.se, rtol=1e-8)


def test_what_comparisons_of_margins_cannot_do() -> None:
    design = sr.SampleDesign(_survey(8), weight="w", clusters="block")
    rates = sr.adjusted_rates(design, "y ~ g + age", by="g")
    with pytest.raises(sr.ComparisonError, match="needs the totals behind the rates"):
        sr.compare_rates(rates, sr.EVERYONE)
    assert np.isfinite(compare_quietly(rates, versus=0.4).p).all()
    assert np.isfinite(sr.trend_test(rates).p).all()
    assert np.isfinite(sr.contrast(rates, {"p": 1, "q": -1}, scale="logit").p).all()


BROKEN: list[tuple[str, dict[str, Any], str]] = [
    ("y ~ age", {}, "by='g' is no column of the formula"),
    ("y ~ g + y", {}, "on both sides"),
    ("y ~ g + missing", {}, "there is no column 'missing'"),
    ("y ~ g + age + twice", {}, r"columns 'twice', 'age' are collinear|'age', 'twice' are"),
    ("y ~ g + zero", {}, "columns 'zero' are zero in every record|collinear"),
    ("y ~ g + perfect", {}, "in 900 of 900 records .*'perfect'"),
    ("y ~ g + leaky", {}, "separated: in [0-9]+ of 900 records the columns 'leaky = other'"),
    ("one ~ g + age", {}, "is 1 in all 900 records of the model"),
    ("y ~ g + age", {"where": "nobody"}, "where selects no records"),
    ("y ~ g + age", {"where": "three"}, "coefficients for 3 records"),
    ("y ~ g + age", {"interval": "exact"}, "interval must be one of"),
    ("y ~ g + nothing", {}, "No record has a known outcome"),
]


@pytest.mark.parametrize(("formula", "options", "message"), BROKEN)
def test_models_that_cannot_be_fitted(formula: str, options: Any, message: str) -> None:
    data = _survey(9).assign(one=1, zero=0.0, nobody=False, nothing=np.nan)
    data["twice"] = 2 * data["age"]
    data["perfect"] = data["y"] * 2.0 - 1 + 0.1 * data["age"].clip(-1, 1)
    data["leaky"] = np.where((data["y"] == 1) & (data["age"] > 1), "only", "other")
    data["three"] = np.arange(len(data)) < 3
    design = sr.SampleDesign(data, weight="w", clusters="block")
    with pytest.raises(sr.QuestionError, match=message):
        sr.adjusted_rates(design, formula, by="g", **options)


def test_replicates_in_which_the_model_fails_are_left_out() -> None:
    """A bootstrap replicate with one outcome in a level has no fit; few enough are left out."""
    data = _survey(10, n=400)
    rng = np.random.default_rng(1)
    for r in range(40):
        data[f"rw_{r}"] = data["w"] * rng.poisson(1.0, len(data))
    rare = np.zeros(len(data), dtype=bool)
    rare[:6] = True
    data["level"] = np.where(rare, "rare", "usual")
    data.loc[rare, "y"] = [0, 1, 0, 1, 0, 0]
    for r in range(2):
        data.loc[rare & (data["y"] == 1), f"rw_{r}"] = 0.0
        data.loc[rare & (data["y"] == 0), f"rw_{r}"] = 1.0
    for r in range(2, 40):
        data.loc[rare, f"rw_{r}"] = data.loc[rare, "w"]
    design = sr.SampleDesign(data, weight="w", replicates=sr.ReplicateWeights("rw_*", "bootstrap"))
    with pytest.warns(sr.DesignWarning, match=r"undefined in some replicates \(at most 2 of 40"):
        rates = sr.adjusted_rates(design, "y ~ g + level", by="g")
    assert np.isfinite(rates.se).all()
