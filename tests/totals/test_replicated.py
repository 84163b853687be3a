"""Replicated variances against plain loops, against linearization, and on open files."""

from __future__ import annotations

import warnings
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

import svyrates as sr
from svyrates.tally import replicates as tally
from tests.outside import import_samplics

FILES: list[tuple[str, dict[str, Any]]] = [
    ("load_nhanes2brr", {"scheme": "balanced-repeated-replication"}),
    ("load_nhanes2jk", {"scheme": "stratified-jackknife", "units_per_stratum": 2}),
    ("load_nmihs", {"scheme": "bootstrap"}),
]


def _plain(
    data: pd.DataFrame,
    weight: str,
    columns: list[str],
    outcome: str,
    groups: list[np.ndarray],
    coefficients: np.ndarray,
    *,
    on_mean: bool = False,
) -> np.ndarray:
    """Covariance of weighted and unweighted rates: every rate under every replicate, by hand."""
    known = data[outcome].notna().to_numpy() & (data[weight] > 0).to_numpy()
    y = data[outcome].to_numpy(dtype=float)
    w = data[weight].to_numpy(dtype=float)

    def rates(replicate: np.ndarray) -> list[float]:
        found = []
        for use in (replicate, replicate / np.where(w > 0, w, np.nan)):
            for group in groups:
                chosen = group & known
                found.append(float((use * y)[chosen].sum() / use[chosen].sum()))
        return found

    full = np.array(rates(w))
    every = np.array([rates(data[name].to_numpy(dtype=float)) for name in columns])
    centre = every.mean(axis=0) if on_mean else full
    total = np.zeros((full.size, full.size))
    for c, row in zip(coefficients, every, strict=True):
        total += c * np.outer(row - centre, row - centre)
    return total


@given(seed=st.integers(0, 2**32 - 1), factors=st.booleans(), on_mean=st.booleans())
def test_against_plain_loops(seed: int, factors: bool, on_mean: bool) -> None:
    rng = np.random.default_rng(seed)
    n, count = 90, 12
    data = pd.DataFrame(
        {
            "w": np.where(rng.random(n) < 0.05, 0.0, rng.uniform(1, 9, n)),
            "y": np.where(rng.random(n) < 0.1, np.nan, rng.random(n) < 0.5),
            "g": rng.choice(["a", "b", "c"], n),
        }
    )
    names = [f"r{i}" for i in range(count)]
    factor = rng.choice([-0.2, 0.4, 1.0, 1.8], (n, count))
    for i, name in enumerate(names):
        data[name] = data["w"] * factor[:, i]
    given_columns = data.copy()
    if factors:
        given_columns[names] = factor
    coefficients = rng.uniform(0.01, 0.2, count)
    groups = [(data["g"] == label).to_numpy() for label in "abc"]
    expected = _plain(data, "w", names, "y", groups, coefficients, on_mean=on_mean)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", sr.RatesWarning)
        design = sr.SampleDesign(
            given_columns,
            weight="w",
            replicates=sr.ReplicateWeights(
                names,
                "coefficients",
                coefficients=coefficients.tolist(),
                centre="replicate-mean" if on_mean else "full-sample",
                factors=factors,
            ),
        )
        rates = sr.estimate_rates(design, "y", by="g")
        gaps = sr.compare_rates(rates, versus="c")
    if rates.se.size and not np.isnan(rates.se).any():
        np.testing.assert_allclose(rates.covariance, expected[:3, :3], rtol=1e-9, atol=1e-12)
        shift = np.array([-1, 0, 1, 1, 0, -1])
        s_u = np.array([0, 0, 0, 1, 0, -1])
        row = gaps.find("a", "c")
        variance = shift @ expected @ shift
        if variance > 1e-12:
            statistic = gaps.shift[row] / np.sqrt(variance)
            p = 2 * stats.t.sf(abs(statistic), gaps.df[row])
            assert gaps.shift_p[row] == pytest.approx(p, rel=1e-6, abs=1e-12)
        assert s_u @ expected @ s_u > 0


@pytest.mark.parametrize(("loader", "options"), FILES)
def test_open_files(loader: str, options: dict[str, Any]) -> None:
    """Replicate files of open health surveys in the samplics wheel (public domain)."""
    import_samplics()
    from samplics import datasets

    data: pd.DataFrame = getattr(datasets, loader)()["data"]
    columns = [name for name in data if name.lower().startswith(("brr", "jkw", "bsrw", "jk"))]
    columns = [name for name in columns if name[-1].isdigit()]
    weight = next(name for name in data if name in ("finalwgt", "finwgt"))
    rng = np.random.default_rng(2)
    data = data.assign(
        g=rng.choice(["a", "b"], len(data)), y=(rng.random(len(data)) < 0.3).astype(float)
    )
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", sr.DesignWarning)
        design = sr.SampleDesign(
            data, weight=weight, replicates=sr.ReplicateWeights(columns, **options)
        )
    assert design.replicates is not None
    rates = sr.estimate_rates(design, "y", by="g")
    groups = [(data["g"] == label).to_numpy() for label in "ab"]
    expected = _plain(data, weight, columns, "y", groups, design.replicates.coefficients)
    np.testing.assert_allclose(rates.covariance, expected[:2, :2], rtol=1e-9, atol=1e-15)


@pytest.fixture(scope="module")
def both() -> tuple[sr.SampleDesign, sr.SampleDesign]:
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    return design, sr.make_replicates(design, "stratified-jackknife")


def _quietly(design: sr.SampleDesign, **options: Any) -> sr.ComparisonTable:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
        return sr.compare_rates(sr.estimate_rates(design, "damp", by="tenure"), **options)


@pytest.mark.parametrize("versus", [None, sr.EVERYONE, sr.EVERYONE_ELSE, 0.3])
@pytest.mark.parametrize("measure", ["difference", "odds_ratio"])
def test_jackknife_agrees_with_linearization(
    both: tuple[sr.SampleDesign, sr.SampleDesign], versus: Any, measure: str
) -> None:
    """They differ by terms of order 1/n; on the demo survey by some percent of a variance."""
    linear, jackknife = (_quietly(d, versus=versus, measure=measure) for d in both)
    np.testing.assert_allclose(jackknife.se, linear.se, rtol=0.05)
    np.testing.assert_allclose(jackknife.estimate, linear.estimate, rtol=1e-9)
    # The unweighted difference and the shift have variances of their own, and not zero.
    np.testing.assert_allclose(jackknife.simple_coverage, linear.simple_coverage, atol=0.02)
    np.testing.assert_allclose(jackknife.simple_error_rate, linear.simple_error_rate, atol=0.02)
    np.testing.assert_allclose(jackknife.shift_p, linear.shift_p, atol=0.05)
    assert (jackknife.simple_error_rate > 0).all()


def test_satterthwaite_over_the_replicates_strata(
    both: tuple[sr.SampleDesign, sr.SampleDesign],
) -> None:
    linear, jackknife = (
        sr.estimate_rates(d, "damp", by="sex", df="satterthwaite").df for d in both
    )
    np.testing.assert_allclose(jackknife, linear, rtol=0.05)


def test_overlapping_groups_and_joint_outcomes(
    both: tuple[sr.SampleDesign, sr.SampleDesign],
) -> None:
    helps = {"grant": "help_grant", "advice": "help_advice", "family": "help_family"}
    linear, jackknife = (
        sr.estimate_rates(d, ["damp", "mould"], by=helps, joint=True).covariance.to_numpy()
        for d in both
    )
    scale = np.sqrt(np.outer(np.diag(linear), np.diag(linear)))
    np.testing.assert_allclose(jackknife / scale, linear / scale, atol=0.05)


def test_scans_equal_products(
    both: tuple[sr.SampleDesign, sr.SampleDesign], monkeypatch: pytest.MonkeyPatch
) -> None:
    one = sr.estimate_rates(both[1], "damp", by="tenure", where="mould")
    monkeypatch.setattr(tally, "_PRODUCT_ATOMS", 0)
    other = sr.estimate_rates(both[1], "damp", by="tenure", where="mould")
    np.testing.assert_allclose(one.covariance, other.covariance, rtol=1e-10)


def _kinds(data: pd.DataFrame, names: list[str]) -> dict[str, Any]:
    rows, columns = np.ascontiguousarray(data[names]), np.asfortranarray(data[names])
    rest = data.drop(columns=names)
    pyarrow = pytest.importorskip("pyarrow")
    polars = pytest.importorskip("polars")
    return {
        "block by rows": pd.concat([pd.DataFrame(rows, columns=names), rest], axis=1),
        "block by columns": pd.DataFrame(
            {name: columns[:, i] for i, name in enumerate(names)}
        ).assign(**rest),
        "apart": pd.DataFrame({name: data[name].to_numpy().copy() for name in names[::-1]}).assign(
            **rest
        ),
        "single precision": data.astype(dict.fromkeys(names, np.float32)),
        "polars": polars.from_pandas(data),
        "pyarrow": pyarrow.Table.from_pandas(data),
    }


@pytest.mark.parametrize("kind", _kinds(pd.DataFrame({"a": [1.0]}), ["a"]))
def test_every_layout_in_memory(kind: str) -> None:
    """More records than a chunk; blocks are read in place, other columns chunk by chunk."""
    rng = np.random.default_rng(6)
    n, names = 9_000, [f"rw_{i}" for i in range(20)]
    w = rng.uniform(0.5, 3.0, n)
    data = pd.DataFrame({x: (w * rng.uniform(0.5, 1.5, n)).astype(np.float32) for x in names})
    data = data.astype(np.float64)
    data["w"], data["y"] = w, rng.integers(0, 2, n)
    data["g"] = rng.choice(["a", "b"], n)
    weights = sr.ReplicateWeights("rw_*", "bootstrap")

    def ask(frame: Any) -> np.ndarray:
        design = sr.SampleDesign(frame, weight="w", replicates=weights)
        return sr.estimate_rates(design, "y", by="g").covariance.to_numpy()

    groups = [(data["g"] == label).to_numpy() for label in "ab"]
    expected = _plain(data, "w", names, "y", groups, np.full(20, 1 / 20))
    np.testing.assert_allclose(ask(_kinds(data, names)[kind]), expected[:2, :2], rtol=1e-9)


def test_sources_of_the_variance(both: tuple[sr.SampleDesign, sr.SampleDesign]) -> None:
    gaps = _quietly(both[1])
    sources = gaps.variance_sources()
    assert sources["strata"].isna().all()
    product = sources[["weights", "clusters", "covariance"]].prod(axis=1)
    np.testing.assert_allclose(product, gaps.variance_ratio, rtol=1e-9)
    assert "clustering and stratification" in gaps.explain("owner", "rent-free")
