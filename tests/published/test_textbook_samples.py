"""Rates and standard errors of textbook samples; each source stands in its fixture."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import pytest

import svyrates as sr
from tests.outside import published

pytestmark = pytest.mark.wheel


def _people(sizes: list[int], successes: list[int]) -> pd.DataFrame:
    """One row per person of each household."""
    rows = [
        (household, int(person < yes))
        for household, (size, yes) in enumerate(zip(sizes, successes, strict=True))
        for person in range(size)
    ]
    return pd.DataFrame(rows, columns=["household", "y"])


def _everyone(data: pd.DataFrame, **design: Any) -> sr.RateTable:
    return sr.estimate_rates(sr.SampleDesign(data, **design), "y")


def test_clusters_with_a_large_design_effect() -> None:
    """Cochran (1977), section 3.12: saw a doctor. Table and answers are from memory."""
    doctor, _ = published("cluster_samples")
    sizes, saw = doctor["inputs"]["persons_m"], doctor["inputs"]["saw_doctor_a"]
    # The recalled table is trusted because it gives the three printed sums.
    assert sum(a * a for a in saw) == doctor["published"]["sum_a2"]
    assert sum(a * m for a, m in zip(saw, sizes, strict=True)) == doctor["published"]["sum_a_m"]
    assert sum(m * m for m in sizes) == doctor["published"]["sum_m2"]
    rates = _everyone(_people(sizes, saw), clusters="household")
    assert round(rates.rate[0], 4) == 0.2885
    # Printed as 0.00520 after intermediate rounding by hand; the last digit may be off by one.
    assert rates.variance[0] == pytest.approx(0.00520, abs=1e-5)
    assert rates.design_effect[0] == pytest.approx(0.00520 / 0.00197, rel=0.005)


def test_clusters_with_a_design_effect_below_one() -> None:
    """Cochran (1977), section 3.12: males. From memory; one cell of the table is uncertain."""
    _, males = published("cluster_samples")
    given = males["inputs"]
    rates = _everyone(_people(given["persons_m"], given["males_recalled"]), clusters="household")
    assert f"{rates.variance[0]:.5f}" == males["published"]["v_cluster"]
    assert rates.design_effect[0] == pytest.approx(0.00114 / 0.00240, rel=0.01)


def test_simple_random_sample_of_counties() -> None:
    """Lohr, chapter 2 (counts seen, answer from memory): finite population correction."""
    _, counties = published("simple_random_samples")
    given = counties["inputs"]
    data = pd.DataFrame(
        {"y": np.arange(given["n"]) < given["count_lt_200000"], "counties": given["N"]}
    )
    rates = _everyone(data, population="counties")
    assert f"{rates.rate[0]:.2f}" == counties["published"]["p"]
    assert f"{rates.se[0]:.4f}" == counties["published"]["se"]


def test_simple_random_sample_of_signatures() -> None:
    """Cochran (1977), section 3.2 (from memory): standard error of a total, N times that of p."""
    addresses, _ = published("simple_random_samples")
    given = addresses["inputs"]
    data = pd.DataFrame({"y": np.arange(given["n"]) < given["a"], "size": given["N"]})
    rates = _everyone(data, population="size")
    assert round(given["N"] * rates.rate[0]) == addresses["published"]["A_hat"]
    assert f"{given['N'] * rates.se[0]:.1f}" == addresses["published"]["se_A"]


def test_stratified_sample_of_counties() -> None:
    """Lohr, chapter 3 (counts seen, answers from memory): four strata, each with its fraction."""
    sample = published("stratified_sample")
    given = sample["inputs"]
    data = pd.DataFrame(
        [
            (region, int(i < given["count_lt_200000"][region]), size, size / given["n_h"][region])
            for region, size in given["N_h"].items()
            for i in range(given["n_h"][region])
        ],
        columns=["region", "y", "counties", "weight"],
    )
    rates = _everyone(data, weight="weight", strata="region", population="counties")
    assert f"{rates.rate[0]:.4f}" == sample["published"]["p"]
    assert f"{rates.se[0]:.4f}" == sample["published"]["se"]


@pytest.fixture
def litters() -> sr.RateTable:
    sample = published("litters")["inputs"]
    frames = []
    for position, group in enumerate(("control", "treated")):
        sizes = [litter[0] for litter in sample[group]]
        alive = [litter[1] for litter in sample[group]]
        frames.append(_people(sizes, alive).assign(group=group, stratum=position))
    data = pd.concat(frames)
    return sr.estimate_rates(
        sr.SampleDesign(data.reset_index(drop=True), strata="stratum", clusters="household"),
        "y",
        by="group",
        df="design",
    )


def test_litters_where_the_simple_formula_misleads(litters: sr.RateTable) -> None:
    """Rao & Scott (1992), Biometrics 48, Table 1: design effects of two groups of litters."""
    source = published("litters")["published"]
    # The paper divides by m/(m-1) as we do, and by p(1-p)/n.
    assert f"{litters.design_effect[0]:.6f}" == source["deff_control"]
    assert f"{litters.design_effect[1]:.6f}" == source["deff_treated"]


def test_litters_verdict(litters: sr.RateTable) -> None:
    """Computed for the collection of examples, a second implementation and not a printed value."""
    with pytest.warns(sr.SimpleFormulaWarning, match="control versus treated: false-alarm"):
        gaps = sr.compare_rates(litters)
    assert gaps.statistic[0] == pytest.approx(1.70296, abs=1e-5)
    assert gaps.df[0] == 30
    assert gaps.p[0] == pytest.approx(0.0989, abs=5e-5)
    assert gaps.simple_p[0] == pytest.approx(0.0029, abs=5e-5)
    assert list(gaps.verdict) == ["false-alarm"]


def test_two_answers_to_one_question() -> None:
    """Charpentier (2010), after Franklin (2007): 46.8 % and 42.7 % of 2,000; margin about 4 points.

    The two shares are negatively correlated; adding the variances as if independent gives 3.1.
    """
    source = published("same_sample_difference")
    n, p1, p2 = (source["inputs"][name] for name in ("n", "p1", "p2"))
    first, second = round(n * p1), round(n * p2)
    data = pd.DataFrame({"vote": ["A"] * first + ["B"] * second + ["C"] * (n - first - second)})
    rates = sr.estimate_rates(
        sr.SampleDesign(data), {"A": ("vote", "A"), "B": ("vote", "B")}, joint=True
    )
    with pytest.warns(sr.SimpleFormulaWarning, match="A versus B: false-alarm"):
        gaps = sr.compare_rates(rates)
    margin = 100 * 1.96 * gaps.se[0]
    assert gaps.correlation[0] < -0.7
    assert margin == pytest.approx(4.142, abs=0.002)
    assert gaps.simple_se[0] * 196 == pytest.approx(3.08, abs=0.01)


def test_aspirin_table() -> None:
    """Physicians' Health Study as in Agresti's textbooks (from memory): difference, ratios."""
    source = published("aspirin")
    given = source["inputs"]
    data = pd.DataFrame(
        {
            "group": ["placebo"] * given["n1"] + ["aspirin"] * given["n2"],
            "y": np.concatenate(
                [np.arange(given[f"n{i}"]) < given[f"x{i}"] for i in (1, 2)]
            ).astype(int),
        }
    )
    rates = sr.estimate_rates(sr.SampleDesign(data), "y", by="group")
    limits = {
        measure: sr.compare_rates(rates, versus="aspirin", measure=measure)
        for measure in ("difference", "ratio", "odds_ratio")
    }
    found = limits["difference"]
    assert (round(found.rate[0], 4), round(found.versus_rate[0], 4)) == (0.0171, 0.0094)
    assert (round(found.low[0], 3), round(found.high[0], 3)) == (0.005, 0.011)
    assert round(limits["ratio"].estimate[0], 2) == 1.82
    # Printed as (1.43, 2.30); the formula gives 2.306, so the last printed digit is off.
    assert (round(limits["ratio"].low[0], 2), limits["ratio"].high[0]) == (
        1.43,
        pytest.approx(2.30, abs=0.01),
    )
    odds = limits["odds_ratio"]
    assert (round(odds.estimate[0], 2), round(odds.low[0], 2), round(odds.high[0], 2)) == (
        1.83,
        1.44,
        2.33,
    )
