"""Where the design is simple, general-purpose libraries give the same numbers."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import scipy.stats
import statsmodels.api as sm
from statsmodels.stats.proportion import proportion_confint, proportions_ztest

import svyrates as sr
from svyrates.rates import rate_limits


@pytest.fixture
def sample(rng: np.random.Generator) -> pd.DataFrame:
    n = 900
    cluster = rng.integers(0, 40, n)
    group = rng.choice(["a", "b"], n, p=[0.4, 0.6])
    chance = 0.3 + 0.1 * (group == "a") + 0.25 * (rng.random(40)[cluster] - 0.5)
    weight = rng.uniform(0.5, 4.0, n)
    return pd.DataFrame(
        {"cluster": cluster, "g": group, "y": (rng.random(n) < chance).astype(int), "w": weight}
    )


def test_binomial_standard_error(sample: pd.DataFrame) -> None:
    """One group, equal weights, no clusters: p(1-p)/(n-1)."""
    rates = sr.estimate_rates(sr.SampleDesign(sample), "y")
    n, p = len(sample), sample["y"].mean()
    assert rates.rate[0] == pytest.approx(p, rel=1e-14)
    assert rates.variance[0] == pytest.approx(p * (1 - p) / (n - 1), rel=1e-12)
    assert rates.df[0] == n - 1
    assert rates.design_effect[0] == pytest.approx(n / (n - 1), rel=1e-12)
    assert rates.kish_factor[0] == pytest.approx(1.0, rel=1e-14)


def test_difference_in_a_simple_random_sample(sample: pd.DataFrame) -> None:
    """Two domains of one sample: the unpooled variance, up to n/(n-1), and no covariance."""
    rates = sr.estimate_rates(sr.SampleDesign(sample), "y", by="g")
    gaps = sr.compare_rates(rates)
    n = len(sample)
    by_group = sample.groupby("g")["y"].agg(["mean", "size"])
    unpooled = (by_group["mean"] * (1 - by_group["mean"]) / by_group["size"]).sum()
    assert gaps.se[0] ** 2 == pytest.approx(unpooled * n / (n - 1), rel=1e-12)
    assert gaps.correlation[0] == pytest.approx(0.0, abs=1e-12)
    assert gaps.simple_se[0] ** 2 == pytest.approx(unpooled, rel=1e-12)
    _, p = proportions_ztest(sample.groupby("g")["y"].sum(), by_group["size"])
    assert gaps.simple_p[0] == pytest.approx(p, rel=1e-10)
    assert gaps.verdict[0] == "agrees"


def test_design_test_collapses_to_the_textbook(sample: pd.DataFrame) -> None:
    """Up to n/(n-1) and t for z, the design-based p is that of the unpooled test."""
    gaps = sr.compare_rates(sr.estimate_rates(sr.SampleDesign(sample), "y", by="g"))
    n = len(sample)
    statistic = gaps.estimate[0] / gaps.simple_se[0] * np.sqrt((n - 1) / n)
    assert gaps.statistic[0] == pytest.approx(statistic, rel=1e-12)
    df = min((sample["g"] == group).sum() - 1 for group in "ab")
    assert gaps.df[0] == df
    assert gaps.p[0] == pytest.approx(2 * scipy.stats.t.sf(abs(statistic), df), rel=1e-10)


@pytest.mark.parametrize(
    ("ours", "theirs"),
    [
        ("wilson", "wilson"),
        ("jeffreys", "jeffreys"),
        ("agresti-coull", "agresti_coull"),
        ("korn-graubard", "beta"),
        ("wald", "normal"),
    ],
)
def test_limits_without_a_design(ours: str, theirs: str) -> None:
    """At n_star = n and infinite df every method is the textbook's (statsmodels)."""
    for successes, n in ((3, 40), (17, 200), (499, 1000)):
        size = np.array([float(n)])
        # The df-adjusted sizes equal n at n - 1 degrees of freedom; t becomes z without a limit.
        df = np.array([np.inf if ours in ("wilson", "wald") else n - 1.0])
        low, high = rate_limits(np.array([successes / n]), size, size, df, ours, 0.95)
        expected = proportion_confint(successes, n, alpha=0.05, method=theirs)
        # statsmodels cuts Wald's limits at 0 and 1; ours stay what p ± t se says.
        assert (max(low[0], 0.0), min(high[0], 1.0)) == pytest.approx(expected, abs=1e-9)


def test_clusters_equal_the_cluster_robust_covariance(sample: pd.DataFrame) -> None:
    """Weighted rates by group with clusters and no strata: a weighted regression on dummies.

    statsmodels multiplies by G/(G-1) (N-1)/(N-K); ours by G/(G-1).
    """
    rates = sr.estimate_rates(sr.SampleDesign(sample, weight="w", clusters="cluster"), "y", by="g")
    dummies = pd.get_dummies(sample["g"]).astype(float)
    fit = sm.WLS(sample["y"], dummies, weights=sample["w"]).fit(
        cov_type="cluster", cov_kwds={"groups": sample["cluster"], "use_correction": True}
    )
    n, k = dummies.shape
    factor = (n - 1) / (n - k)
    np.testing.assert_allclose(rates.rate, fit.params, rtol=1e-10)
    np.testing.assert_allclose(
        rates.covariance.to_numpy() * factor, fit.cov_params().to_numpy(), rtol=1e-9
    )


def test_unequal_weights_equal_the_robust_covariance(sample: pd.DataFrame) -> None:
    """Records as units: White's covariance of the weighted regression, up to n/(n-1)."""
    rates = sr.estimate_rates(sr.SampleDesign(sample, weight="w"), "y", by="g")
    dummies = pd.get_dummies(sample["g"]).astype(float)
    fit = sm.WLS(sample["y"], dummies, weights=sample["w"]).fit(cov_type="HC0")
    n = len(sample)
    np.testing.assert_allclose(
        rates.covariance.to_numpy() * (n - 1) / n,
        fit.cov_params().to_numpy(),
        rtol=1e-9,
        atol=1e-15,
    )
