"""How long it takes, as ratios measured side by side in one run.

Run `python -m tests.benchmarks.speed` from the checkout. Each ratio is the median of several pairs
timed in turn, so that a machine that slows down slows both. Nothing is asserted: the tests hold
memory, which does not depend on the machine (`test_memory.py`).
"""

from __future__ import annotations

import statistics
import subprocess
import sys
import time
import warnings
from collections.abc import Callable

import numpy as np
import pandas as pd

import svyrates as sr

N = 1_000_000


def survey(n: int = N, *, groups: int = 8, kind: str = "integer") -> pd.DataFrame:
    """Records in 100 strata of 10 clusters; labels as integers, text or categories."""
    rng = np.random.default_rng(1)
    data = pd.DataFrame(
        {
            "s": rng.integers(0, 100, n),
            "c": rng.integers(0, 10, n),
            "g": rng.integers(0, groups, n),
            "w": rng.uniform(0.5, 3.0, n),
            "y": rng.integers(0, 2, n),
            "y2": rng.integers(0, 2, n),
        }
    )
    if kind != "integer":
        for name in ("s", "c", "g"):
            data[name] = "label " + data[name].astype(str)
            data[name] = data[name].astype("category" if kind == "category" else object)
    return data


def group_by(data: pd.DataFrame) -> object:
    """The plain job: weighted sums by group."""
    return data.assign(wy=data["w"] * data["y"]).groupby("g", observed=True)[["w", "wy"]].sum()


def design_of(data: pd.DataFrame) -> sr.SampleDesign:
    return sr.SampleDesign(data, weight="w", strata="s", clusters="c")


def first_call(data: pd.DataFrame) -> object:
    return second_call(design_of(data), "y")


def second_call(design: sr.SampleDesign, outcome: str = "y2") -> object:
    return sr.compare_rates(sr.estimate_rates(design, outcome, by="g"))


def _seconds(job: Callable[[], object]) -> float:
    start = time.perf_counter()
    job()
    return time.perf_counter() - start


def ratio(job: Callable[[], object], base: Callable[[], object], rounds: int = 7) -> float:
    """Median of job over base, timed in turn after a warm-up."""
    job()
    base()
    return statistics.median(_seconds(job) / _seconds(base) for _ in range(rounds))


def taylor(data: pd.DataFrame) -> object:
    """The domain estimate of samplics, which gives no covariances."""
    from samplics.estimation import TaylorEstimator
    from samplics.utils.types import PopParam

    estimator = TaylorEstimator(PopParam.mean)
    estimator.estimate(
        y=data["y"], samp_weight=data["w"], stratum=data["s"], psu=data["c"], domain=data["g"]
    )
    return estimator


def replicated(n: int = N, count: int = 80, *, by_rows: bool = False) -> pd.DataFrame:
    """A file with bootstrap-like weights, whose block in memory runs by columns or by rows."""
    data = survey(n)
    noise = np.random.default_rng(4)
    matrix = np.empty((n, count), order="C" if by_rows else "F")
    for position in range(count):
        matrix[:, position] = data["w"] * noise.uniform(0.0, 2.0, n)
    names = [f"rw_{position}" for position in range(1, count + 1)]
    return pd.concat([data, pd.DataFrame(matrix, columns=names, copy=False)], axis=1)


def replicate_design(data: pd.DataFrame) -> sr.SampleDesign:
    weights = sr.ReplicateWeights("rw_*", scheme="bootstrap")
    return sr.SampleDesign(data, weight="w", replicates=weights)


def replicate_rates(design: sr.SampleDesign) -> object:
    return sr.estimate_rates(design, "y", by="g")


def replicate_estimator(data: pd.DataFrame) -> object:
    """The domain estimate of samplics under replicate weights, without covariances."""
    from samplics.estimation import ReplicateEstimator
    from samplics.utils.types import PopParam, RepMethod

    estimator = ReplicateEstimator(RepMethod.bootstrap, PopParam.mean)
    names = [name for name in data if str(name).startswith("rw_")]
    estimator.estimate(
        y=data["y"].to_numpy(),
        samp_weight=data["w"].to_numpy(),
        rep_weights=data[names].to_numpy(),
        domain=data["g"].to_numpy(),
    )
    return estimator


def _rates_over_sum(data: pd.DataFrame, what: str) -> None:
    design, matrix = replicate_design(data), data.filter(like="rw_").to_numpy()
    _report(
        f"rates under 80 replicates, {what}, over one sum(axis=0) of them",
        ratio(lambda: replicate_rates(design), lambda: matrix.sum(axis=0)),
    )
    if what == "block by columns":
        _report(
            "declaring and checking them over the same sum",
            ratio(lambda: replicate_design(data), lambda: matrix.sum(axis=0), rounds=3),
        )


def _replicates() -> None:
    _rates_over_sum(replicated(), "block by columns")
    _rates_over_sum(replicated(by_rows=True), "block by rows")
    single = dict.fromkeys([f"rw_{i}" for i in range(1, 81)], np.float32)
    _rates_over_sum(replicated().astype(single), "single precision")
    data = replicated()
    design = replicate_design(data)
    _report(
        "samplics' replicate estimate over ours",
        ratio(lambda: replicate_estimator(data), lambda: replicate_rates(design), rounds=1),
    )


def _margins() -> None:
    """Margins of a logistic regression over the plain fit of statsmodels, 12 columns."""
    import statsmodels.api as sm

    n = 200_000
    data = survey(n, groups=4, kind="category")
    noise = np.random.default_rng(5).normal(size=(n, 8))
    names = [f"x{i}" for i in range(8)]
    data = pd.concat([data, pd.DataFrame(noise, columns=names)], axis=1)
    design = design_of(data)
    dummies = pd.get_dummies(data["g"], drop_first=True, dtype=float).to_numpy()
    matrix = np.column_stack((np.ones(n), dummies, noise))
    outcome, weights = data["y"].to_numpy(), data["w"].to_numpy()
    formula = f"y ~ g + {' + '.join(names)}"

    def plain() -> object:
        return sm.GLM(outcome, matrix, family=sm.families.Binomial(), freq_weights=weights).fit()

    _report(
        "margins with their covariance over statsmodels' GLM, 200,000 × 12",
        ratio(lambda: sr.adjusted_rates(design, formula, by="g"), plain, rounds=5),
    )


def _import_ratio() -> float:
    """Importing the package with all it needs, over pandas and scipy.stats."""

    def run(code: str) -> Callable[[], object]:
        return lambda: subprocess.run([sys.executable, "-c", code], check=True)

    names = "import svyrates; svyrates.compare_rates, svyrates.SampleDesign"
    return ratio(run(names), run("import pandas, scipy.stats"))


def _report(name: str, value: float, unit: str = "×") -> None:
    sys.stdout.write(f"{name:<72} {value:8.2f} {unit}\n")
    sys.stdout.flush()


def _labels(kind: str) -> None:
    data = survey(kind=kind)
    design = design_of(data)
    _report(
        f"{kind} labels: design, rates and all pairs over a group-by",
        ratio(lambda: first_call(data), lambda: group_by(data)),
    )
    _report(
        f"{kind} labels: another outcome on the same design",
        ratio(lambda: second_call(design), lambda: group_by(data)),
    )


def main() -> None:
    """Print every ratio."""
    warnings.simplefilter("ignore")
    for kind in ("integer", "category", "text"):
        _labels(kind)
    data = survey()
    texts = survey(kind="text")
    _report(
        "factorizing three text columns over a group-by of integers",
        ratio(
            lambda: [pd.factorize(texts[name]) for name in "scg"],
            lambda: group_by(data),
            rounds=3,
        ),
    )
    many = design_of(survey(groups=500))
    _report("500 groups, 124,750 pairs, seconds", _seconds(lambda: second_call(many)), "s")
    outcomes = pd.DataFrame({f"o{i}": data["y"].to_numpy() for i in range(200)})
    wide = design_of(pd.concat([data, outcomes], axis=1))
    _report(
        "200 outcomes on one design over one outcome",
        _seconds(lambda: sr.estimate_rates(wide, list(outcomes), by="g"))
        / _seconds(lambda: sr.estimate_rates(wide, "y", by="g")),
    )
    usual = survey()
    _report(
        "samplics' domain estimate over design, rates and all pairs",
        ratio(lambda: taylor(usual), lambda: first_call(usual), rounds=1),
    )
    _replicates()
    _margins()
    _report("import over pandas and scipy.stats", _import_ratio())


if __name__ == "__main__":
    main()
