"""Replicate weights: declaring them, making them, merging them, and what can be wrong."""

from __future__ import annotations

import itertools
import warnings
from typing import Any

import numpy as np
import pandas as pd
import pytest

import svyrates as sr
from svyrates.design.hadamard import hadamard

pl = pytest.importorskip("polars")
R = sr.ReplicateWeights


def _file(n: int = 60, count: int = 8, seed: int = 1) -> pd.DataFrame:
    rng = np.random.default_rng(seed)
    data = pd.DataFrame(
        {"id": np.arange(n), "w": rng.uniform(50, 150, n), "y": rng.integers(0, 2, n)}
    )
    for r in range(1, count + 1):
        data[f"rw_{r}"] = data["w"] * rng.choice([0.5, 1.5], n)
    return data


def _design(data: pd.DataFrame, *arguments: Any, **options: Any) -> sr.SampleDesign:
    return sr.SampleDesign(data, weight="w", replicates=R(*arguments, **options))


@pytest.mark.parametrize("least", range(1, 125))
def test_hadamard_matrices_are_orthogonal(least: int) -> None:
    matrix = hadamard(least).astype(int)
    order = matrix.shape[0]
    assert least <= order <= least + 7
    assert set(np.unique(matrix)) <= {-1, 1}
    np.testing.assert_array_equal(matrix.T @ matrix, order * np.eye(order, dtype=int))
    assert (matrix[:, 0] == 1).all()


def test_hadamard_orders_beyond_powers_of_two_are_at_hand() -> None:
    for order in (4, 8, 12, 16, 20, 24, 28, 32, 36, 40, 44, 48, 60, 64, 72, 80, 84, 104, 108):
        assert hadamard(order).shape == (order, order)


SCHEMES: list[tuple[dict[str, Any], float, float]] = [
    ({"scheme": "delete-one-jackknife"}, 7 / 8, 7),
    ({"scheme": "stratified-jackknife", "units_per_stratum": 2}, 1 / 2, 4),
    ({"scheme": "stratified-jackknife", "units_per_stratum": [4] * 8}, 3 / 4, 6),
    ({"scheme": "paired-jackknife"}, 1.0, 8),
    ({"scheme": "paired-jackknife", "both_halves": True}, 1 / 2, 4),
    ({"scheme": "balanced-repeated-replication"}, 1 / 8, 7),
    ({"scheme": "fay", "fay": 0.5}, 1 / (8 * 0.25), 7),
    ({"scheme": "bootstrap"}, 1 / 8, 7),
    ({"scheme": "bootstrap", "mean_size": 25}, 25 / 8, 7),
    ({"scheme": "successive-difference"}, 4 / 8, 7),
    ({"scheme": "coefficients", "coefficients": 0.3}, 0.3, 7),
]


@pytest.mark.parametrize(("options", "coefficient", "df"), SCHEMES)
def test_coefficients_and_df(options: dict[str, Any], coefficient: float, df: float) -> None:
    """Wolter (2007), chapters 3 to 5; the coefficients as printed there, by hand."""
    design = _design(_file(), "rw_*", options.pop("scheme"), **options)
    assert design.replicates is not None
    np.testing.assert_allclose(design.replicates.coefficients, coefficient)
    assert design.replicates.df == df


def test_coefficients_and_centre_are_always_printed() -> None:
    text = str(_design(_file(), "rw_*", "fay", fay=0.3, centre="replicate-mean"))
    assert "c = 0.255102" in text
    assert "the replicate mean" in text
    assert "fay" in text


def test_degrees_of_freedom_are_at_most_the_rank() -> None:
    data = _file(count=8)
    for r in range(5, 9):
        data[f"rw_{r}"] = data["rw_1"]
    assert _design(data, "rw_*", "bootstrap").replicates.df == 4
    # A replicate that equals the full weight is legitimate, and keeps its place among R.
    data["rw_8"] = data["w"]
    design = _design(data, "rw_*", "bootstrap")
    assert design.replicates.count == 8
    assert design.replicates.coefficients[0] == 1 / 8


def test_known_strata_give_degrees_of_freedom() -> None:
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    boot = sr.make_replicates(design, "bootstrap", count=200, seed=3)
    assert boot.replicates.df == 88
    alone = sr.SampleDesign(
        boot.frame.to_native(), weight="wt", replicates=R("replicate_*", "bootstrap")
    )
    assert alone.replicates.df == 88  # the rank of the weights says so
    assert _design(_file(), "rw_*", "bootstrap", df=5.5).replicates.df == 5.5


def test_pattern_is_read_in_natural_order() -> None:
    design = _design(_file(count=12), "rw_*", "bootstrap")
    assert design.replicates.names == tuple(f"rw_{r}" for r in range(1, 13))


BAD: list[tuple[tuple[Any, ...], dict[str, Any], str]] = [
    (("rx_*", "bootstrap"), {}, "pattern 'rx_\\*' fits 0 columns"),
    ((["rw_1", "rw_1"], "bootstrap"), {}, "name a column twice"),
    ((["rw_1", "rw_99"], "bootstrap"), {}, "no column 'rw_99'. Did you mean"),
    ((["rw_1", "w"], "bootstrap"), {}, "take in the weight 'w' itself as one of 2"),
    (("*w*", "bootstrap"), {}, "take in the weight 'w' itself as one of 9"),
    (("rw_*", "jackknife"), {}, "scheme must be one of"),
    (("rw_*", "fay"), {}, "scheme='fay' needs `fay`"),
    (("rw_*", "fay"), {"fay": 1.0}, "fay must be at least 0 and below 1"),
    (("rw_*", "bootstrap"), {"fay": 0.5}, "fay goes with scheme='fay'"),
    (("rw_*", "stratified-jackknife"), {}, "needs `units_per_stratum`"),
    (("rw_*", "stratified-jackknife"), {"units_per_stratum": [2] * 7}, "7 values for 8 replicates"),
    (("rw_*", "stratified-jackknife"), {"units_per_stratum": 1}, "at least 2 everywhere"),
    (("rw_*", "coefficients"), {"coefficients": [0.1] * 9}, "9 values for 8 replicates"),
    (("rw_*", "coefficients"), {"coefficients": -1.0}, "must not be negative"),
    ((["rw_1", "rw_2", "rw_3"], "paired-jackknife"), {"both_halves": True}, "even number"),
    (("rw_*", "bootstrap"), {"centre": "mean"}, "centre must be"),
    (("rw_*", "bootstrap"), {"mean_size": 0}, "mean_size must be at least 1"),
    (("rw_*", "bootstrap"), {"df": -1}, "df must be positive"),
]


@pytest.mark.parametrize(("arguments", "options", "message"), BAD)
def test_bad_declaration(arguments: tuple[Any, ...], options: dict[str, Any], message: str) -> None:
    with pytest.raises(sr.DesignError, match=message):
        _design(_file(), *arguments, **options)


def test_missing_cells_are_named() -> None:
    data = _file()
    data.loc[[3, 5], "rw_4"] = np.nan
    with pytest.raises(sr.DesignError, match=r"'rw_4' is missing or infinite in 2 of 60 rows"):
        _design(data, "rw_*", "bootstrap")
    with pytest.raises(sr.DesignError, match="must be ReplicateWeights"):
        sr.SampleDesign(data, weight="w", replicates="rw_*")  # type: ignore[arg-type]


def test_factors_are_questioned_and_understood() -> None:
    data = _file()
    factors = data.copy()
    for r in range(1, 9):
        factors[f"rw_{r}"] = data[f"rw_{r}"] / data["w"]
    with pytest.warns(sr.DesignWarning, match="look like factors.*factors=True"):
        _design(factors, "rw_*", "bootstrap")
    with pytest.warns(sr.DesignWarning, match="look like finished weights"):
        _design(data, "rw_*", "bootstrap", factors=True)
    one = sr.estimate_rates(_design(data, "rw_*", "bootstrap"), "y")
    other = sr.estimate_rates(_design(factors, "rw_*", "bootstrap", factors=True), "y")
    np.testing.assert_allclose(one.se, other.se, rtol=1e-12)


def test_implied_decimals() -> None:
    data = _file()
    scaled = data.copy()
    for r in range(1, 9):
        scaled[f"rw_{r}"] = (data[f"rw_{r}"] * 10_000).round().astype(np.int64)
    with pytest.warns(sr.DesignWarning, match="implied decimals"):
        _design(scaled, "rw_*", "bootstrap")
    one = sr.estimate_rates(_design(data, "rw_*", "bootstrap"), "y")
    other = sr.estimate_rates(_design(scaled, "rw_*", "bootstrap", decimals=4), "y")
    np.testing.assert_allclose(one.se, other.se, rtol=1e-6)


def test_implied_decimals_of_the_weight() -> None:
    data = _file()
    scaled = data.assign(w=(data["w"] * 10_000).round().astype(np.int64))
    declared = sr.ReplicateWeights("rw_*", "bootstrap")
    with pytest.warns(sr.DesignWarning, match="implied decimals"):
        sr.SampleDesign(scaled, weight="w", replicates=declared)
    design = sr.SampleDesign(scaled, weight="w", weight_decimals=4, replicates=declared)
    assert design.sum_of_weights == pytest.approx(data["w"].sum(), rel=1e-4)
    assert "w, 4 implied decimals" in str(design)
    with pytest.raises(sr.DesignError, match="weight_decimals must be a whole number"):
        sr.SampleDesign(scaled, weight="w", weight_decimals=-1)


def test_replicates_of_another_weight_are_questioned() -> None:
    """Their sums look right, but the rates under them do not lie about the estimate."""
    data = _file(n=400, count=40)
    tilted = data["w"] * np.where(data["y"] == 1, 1.6, 1.0)
    wrong = data.assign(w=tilted * data["w"].sum() / tilted.sum())
    with pytest.warns(sr.DesignWarning, match="1 of 1 rates differ from the mean of their"):
        sr.estimate_rates(_design(wrong, "rw_*", "bootstrap"), "y")
    sr.estimate_rates(_design(data, "rw_*", "bootstrap"), "y")


@pytest.mark.parametrize("scheme", ["stratified-jackknife", "bootstrap"])
def test_replicates_of_small_groups_are_not_questioned(scheme: Any) -> None:
    """Rates of a few people move far, and only some replicates move them at all."""
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    count = {"count": 200, "seed": 3} if scheme == "bootstrap" else {}
    replicated = sr.make_replicates(design, scheme, **count)
    few = np.zeros(len(survey), dtype=bool)
    few[::150] = True
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        warnings.filterwarnings("ignore", "1 rates are undefined|.* rates are undefined")
        sr.estimate_rates(replicated, "damp", by=["sex", "tenure"], where=few)


def test_negative_replicate_weights_are_kept_and_counted() -> None:
    data = _file()
    data.loc[:4, "rw_2"] *= -1
    design = _design(data, "rw_*", "successive-difference")
    assert design.replicates.n_negative == 5
    assert "5, kept" in str(design)


def test_an_odd_number_of_half_samples_is_questioned() -> None:
    with pytest.warns(sr.DesignWarning, match="balanced sets have a multiple of 4"):
        _design(_file(count=6), "rw_*", "balanced-repeated-replication")


@pytest.mark.parametrize("rule", ["domain", "design", "satterthwaite"])
def test_rules_of_degrees_of_freedom_that_do_not_fit(rule: str) -> None:
    with pytest.raises(sr.QuestionError, match=f"df='{rule}'"):
        sr.estimate_rates(_design(_file(), "rw_*", "bootstrap"), "y", df=rule)
    with pytest.raises(sr.QuestionError, match="df='scheme' goes with replicate weights"):
        sr.estimate_rates(sr.SampleDesign(_file()), "y", df="scheme")


def _pairs_design(equal: bool = True) -> sr.SampleDesign:
    """Six strata of two clusters; equal cluster sizes make a rate a linear statistic."""
    rng = np.random.default_rng(8)
    rows = [
        (s, c, 1.0 + s, g, int(rng.random() < 0.4))
        for s, c in itertools.product(range(6), range(2))
        for g in "ab"
        for _ in range(5 if equal else int(rng.integers(3, 9)))
    ]
    data = pd.DataFrame(rows, columns=["s", "c", "w", "g", "y"])
    return sr.SampleDesign(data, weight="w", strata="s", clusters="c")


@pytest.mark.parametrize(
    ("scheme", "options"),
    [
        ("balanced-repeated-replication", {}),
        ("fay", {"fay": 0.3}),
        ("fay", {"fay": 0.5}),
        ("paired-jackknife", {}),
        ("paired-jackknife", {"both_halves": True}),
        ("stratified-jackknife", {}),
    ],
)
def test_linear_statistics_have_the_linearized_variance(scheme: Any, options: Any) -> None:
    """Wolter (2007), sections 3.2 and 4.2: equality, whatever Fay's factor."""
    design = _pairs_design()
    exact = sr.estimate_rates(design, "y", by="g")
    made = sr.estimate_rates(sr.make_replicates(design, scheme, **options), "y", by="g")
    np.testing.assert_allclose(made.covariance, exact.covariance, rtol=1e-10, atol=1e-16)


def test_delete_one_jackknife_of_a_mean_is_the_textbook_variance() -> None:
    """Under a simple random sample, exactly p(1 - p)/(n - 1)."""
    y = np.array([1, 0, 0, 1, 1, 0, 1, 0, 0, 0, 1, 1, 0])
    design = sr.SampleDesign(pd.DataFrame({"y": y}))
    rates = sr.estimate_rates(sr.make_replicates(design, "stratified-jackknife"), "y")
    p, n = y.mean(), y.size
    assert rates.variance[0] == pytest.approx(p * (1 - p) / (n - 1), rel=1e-12)


def test_bootstrap_converges_to_the_linearized_variance() -> None:
    """Rao & Wu (1988): 4,000 draws, so that a variance has a standard error of about 2.3 %."""
    design = _pairs_design()
    exact = sr.estimate_rates(design, "y", by="g")
    boot = sr.estimate_rates(
        sr.make_replicates(design, "bootstrap", count=4000, seed=11), "y", by="g"
    )
    np.testing.assert_allclose(boot.variance, exact.variance, rtol=4 * np.sqrt(2 / 4000))


def test_bootstrap_with_a_finite_population() -> None:
    data = _pairs_design().frame.to_native().assign(N=3)
    design = sr.SampleDesign(data, weight="w", strata="s", clusters="c", population="N")
    exact = sr.estimate_rates(design, "y", by="g")
    boot = sr.make_replicates(design, "bootstrap", count=4000, seed=12, finite_population=True)
    found = sr.estimate_rates(boot, "y", by="g")
    np.testing.assert_allclose(found.variance, exact.variance, rtol=4 * np.sqrt(2 / 4000))


def test_bootstrap_repeats_with_its_seed() -> None:
    design = _pairs_design()
    one, two = (sr.make_replicates(design, "bootstrap", count=5, seed=4) for _ in range(2))
    pd.testing.assert_frame_equal(one.frame.to_native(), two.frame.to_native())
    assert [name for name in one.frame.columns if name.startswith("replicate_")] == [
        f"replicate_{i}" for i in range(1, 6)
    ]


@pytest.mark.parametrize(
    ("scheme", "options", "message"),
    [
        ("delete", {}, "scheme must be one of"),
        ("bootstrap", {}, "count goes with scheme='bootstrap'"),
        ("stratified-jackknife", {"count": 5}, "count goes with scheme='bootstrap'"),
        ("bootstrap", {"count": 1}, "at least 2"),
        ("fay", {}, "fay goes with scheme='fay'"),
        ("stratified-jackknife", {"both_halves": True}, "both_halves goes with"),
        ("stratified-jackknife", {"finite_population": True}, "finite_population goes with"),
    ],
)
def test_making_what_does_not_fit(scheme: Any, options: Any, message: str) -> None:
    with pytest.raises(sr.DesignError, match=message):
        sr.make_replicates(_pairs_design(), scheme, **options)


def test_making_asks_for_two_units_and_for_no_lone_ones() -> None:
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    with pytest.raises(sr.DesignError, match="needs two units in every stratum"):
        sr.make_replicates(design, "balanced-repeated-replication")
    data = pd.DataFrame({"s": [1, 1, 2], "c": [1, 2, 1], "y": [0, 1, 1]})
    lone = sr.SampleDesign(data, strata="s", clusters="c", single_cluster_strata="grand-mean")
    with pytest.raises(sr.DesignError, match="1 strata hold a single unit"):
        sr.make_replicates(lone, "stratified-jackknife")
    made = sr.make_replicates(_pairs_design(), "bootstrap", count=3, seed=1)
    with pytest.raises(sr.DesignError, match="replicate weights already"):
        sr.make_replicates(made, "bootstrap", count=3)


@pytest.mark.parametrize("backend", ["pandas", "polars"])
def test_merging_a_file_of_weights(backend: str) -> None:
    data = _file()
    survey = data[["id", "w", "y"]].set_index(np.arange(60)[::-1])
    file = data.drop(columns=["w", "y"]).sample(frac=1, random_state=3)
    if backend == "polars":
        survey, file = pl.from_pandas(survey), pl.from_pandas(file)
    merged = sr.merge_replicates(survey, file, on="id")
    one = sr.estimate_rates(_design(merged, "rw_*", "bootstrap"), "y")
    other = sr.estimate_rates(_design(data, "rw_*", "bootstrap"), "y")
    assert one.se[0] == pytest.approx(other.se[0], rel=1e-12)
    assert [int(i) for i in merged["id"]] == list(range(60))


def test_merging_reports_every_mismatch() -> None:
    data = _file()
    survey, file = data[["id", "w", "y"]], data.drop(columns=["w", "y"])
    with pytest.raises(
        sr.DesignError, match=r"2 of 60 records find no weights by id \(such as 0, 1"
    ):
        sr.merge_replicates(survey, file.iloc[2:], on="id")
    with pytest.raises(sr.DesignError, match="1 rows of weights repeat a key"):
        sr.merge_replicates(survey, pd.concat([file, file.iloc[:1]]), on="id")
    with pytest.raises(sr.DesignError, match="on, in weights: there is no column 'key'"):
        sr.merge_replicates(survey.assign(key=1), file, on="key")
    with pytest.raises(sr.DesignError, match="both frames have columns 'y'"):
        sr.merge_replicates(survey, file.assign(y=1), on="id")
    with pytest.warns(sr.DesignWarning, match="3 of 60 rows of weights belong to no record"):
        sr.merge_replicates(survey.iloc[3:], file, on="id")


def test_undefined_replicates() -> None:
    """A group that a replicate leaves without weight: left out, or NaN for a jackknife."""
    data = _file(n=400, count=40)
    data["g"] = np.where(np.arange(400) < 20, "small", "large")
    data.loc[:19, ["rw_1", "rw_2"]] = 0.0
    design = _design(data, "rw_*", "bootstrap")
    with pytest.warns(
        sr.DesignWarning, match=r"1 rates are undefined in some replicates \(at most 2"
    ):
        rates = sr.estimate_rates(design, "y", by="g")
    small = data[data["g"] == "small"]
    theta = [np.average(small["y"], weights=small[f"rw_{r}"]) for r in range(3, 41)]
    full = np.average(small["y"], weights=small["w"])
    expected = sum((t - full) ** 2 for t in theta) / 40 * (40 / 38)
    assert rates.variance[1] == pytest.approx(expected, rel=1e-12)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", sr.DesignWarning)
        jack = sr.estimate_rates(_design(data, "rw_*", "delete-one-jackknife"), "y", by="g")
        gaps = sr.compare_rates(jack)
    assert np.isnan(jack.se[1])
    assert "undefined in too many replicates" in jack.notes[1]
    assert gaps.verdict[0] == "undetermined"
    assert "undefined in too many replicates" in gaps.note[0]
    data.loc[:19, [f"rw_{r}" for r in range(1, 6)]] = 0.0
    assert np.isnan(sr.estimate_rates(_design(data, "rw_*", "bootstrap"), "y", by="g").se[1])
