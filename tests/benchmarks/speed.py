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
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

import svyrates as sr
from tests.outside import import_samplics

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
    import_samplics()
    from samplics.estimation import TaylorEstimator
    from samplics.utils.types import PopParam

    estimator = TaylorEstimator(PopParam.mean)
    estimator.estimate(
        y=data["y"], samp_weight=data["w"], stratum=data["s"], psu=data["c"], domain=data["g"]
    )
    return estimator


def replicated(
    n: int = N, count: int = 80, *, by_rows: bool = False, precision: type = np.float64
) -> pd.DataFrame:
    """A file with bootstrap-like weights, whose block in memory runs by columns or by rows."""
    data = survey(n)
    noise = np.random.default_rng(4)
    # Made in its final type: a frame that is converted afterwards loses the layout of its block.
    matrix = np.empty((n, count), dtype=precision, order="C" if by_rows else "F")
    for position in range(count):
        matrix[:, position] = data["w"] * noise.uniform(0.0, 2.0, n)
    names = [f"rw_{position}" for position in range(1, count + 1)]
    return pd.concat([data, pd.DataFrame(matrix, columns=names, copy=False)], axis=1)


def weight_matrix(data: pd.DataFrame) -> NDArray[Any]:
    """The replicate weights where they lie in the frame, shape (records, replicates)."""
    matrix: NDArray[Any] = data.filter(like="rw_").to_numpy()
    if not np.shares_memory(matrix, data["rw_1"].to_numpy()):
        raise RuntimeError("the matrix is a copy, so its layout may not be that of the frame")
    return matrix


def replicate_design(data: pd.DataFrame) -> sr.SampleDesign:
    weights = sr.ReplicateWeights("rw_*", scheme="bootstrap")
    return sr.SampleDesign(data, weight="w", replicates=weights)


def replicate_rates(design: sr.SampleDesign) -> object:
    """All from the columns to the rates, weighted and not, on a design that is there already."""
    return sr.estimate_rates(design, "y", by="g")


def replicate_arrays(data: pd.DataFrame) -> dict[str, NDArray[Any]]:
    """What samplics asks for, as its user would take it from the frame."""
    names = [name for name in data if str(name).startswith("rw_")]
    return {
        "y": data["y"].to_numpy(),
        "samp_weight": data["w"].to_numpy(),
        "rep_weights": data[names].to_numpy(),
        "domain": data["g"].to_numpy(),
    }


def replicate_estimator(arrays: dict[str, NDArray[Any]]) -> object:
    """The domain estimate of samplics under replicate weights, weighted and without covariances.

    Its `conservative` means about the full-sample estimate, as ours: the errors are the same.
    """
    import_samplics()
    from samplics.estimation import ReplicateEstimator
    from samplics.utils.types import PopParam, RepMethod

    estimator = ReplicateEstimator(RepMethod.bootstrap, PopParam.mean)
    estimator.estimate(**arrays, conservative=True)
    return estimator


def _rates_over_sum(by_rows: bool, precision: type) -> None:
    """Rates, and the design on its own, over one sum of the same matrix in the same layout."""
    data = replicated(by_rows=by_rows, precision=precision)
    design, matrix = replicate_design(data), weight_matrix(data)
    what = f"{np.dtype(precision).name} by {'rows' if by_rows else 'columns'}"
    _report(
        f"rates, 80 replicates, {what}, over sum(axis=0) of them",
        ratio(lambda: replicate_rates(design), lambda: matrix.sum(axis=0)),
    )
    _report(
        "- the design itself, built once, over the same sum",
        ratio(lambda: replicate_design(data), lambda: matrix.sum(axis=0), rounds=3),
    )


def _estimator_over_rates(n: int, by_rows: bool) -> None:
    """Estimation alone, from ready arrays and a ready design; then all from the same frame."""
    data = replicated(n, by_rows=by_rows)
    design = replicate_design(data)
    # The matrix is not copied here, whereas choosing columns from a frame would.
    arrays = replicate_arrays(data) | {"rep_weights": weight_matrix(data)}
    _report(
        f"samplics' replicate estimate over ours, {n:,}, by {'rows' if by_rows else 'columns'}",
        ratio(lambda: replicate_estimator(arrays), lambda: replicate_rates(design), rounds=3),
    )
    _report(
        "- both from the frame: taking arrays out, over building the design",
        ratio(
            lambda: replicate_estimator(replicate_arrays(data)),
            lambda: replicate_rates(replicate_design(data)),
            rounds=3,
        ),
    )


def _replicates() -> None:
    for precision in (np.float64, np.float32):
        for by_rows in (False, True):
            _rates_over_sum(by_rows, precision)
    for n, by_rows in ((N // 10, False), (N, False), (N, True)):
        _estimator_over_rates(n, by_rows)


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
