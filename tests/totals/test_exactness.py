"""Digits: against exact rational arithmetic, under extreme weights, rare rates and many records."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pandas as pd
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

import svyrates as sr

RECORDS = st.lists(
    st.tuples(
        st.integers(0, 1),  # stratum
        st.integers(0, 2),  # cluster
        st.integers(1, 50),  # weight
        st.integers(0, 1),  # group
        st.integers(0, 1),  # outcome
    ),
    min_size=4,
    max_size=30,
)
Row = tuple[int, int, int, int, int]


def _exact(rows: list[Row]) -> tuple[list[Fraction], list[list[Fraction]]]:
    """Rates and their covariance in fractions, with replacement at the first stage."""
    rates = []
    for group in (0, 1):
        members = [row for row in rows if row[3] == group]
        total = sum(Fraction(row[2]) for row in members)
        rates.append(sum((Fraction(row[2]) * row[4] for row in members), Fraction()) / total)
    units: dict[tuple[int, int], list[Fraction]] = {}
    for stratum, cluster, weight, group, outcome in rows:
        z = units.setdefault((stratum, cluster), [Fraction(), Fraction()])
        total = sum(Fraction(row[2]) for row in rows if row[3] == group)
        z[group] += Fraction(weight) * (outcome - rates[group]) / total
    cov = [[Fraction(), Fraction()], [Fraction(), Fraction()]]
    for stratum in {key[0] for key in units}:
        inside = [z for key, z in units.items() if key[0] == stratum]
        m = len(inside)
        mean = [sum(z[i] for z in inside) / m for i in (0, 1)]
        for i in (0, 1):
            for j in (0, 1):
                square = sum((z[i] - mean[i]) * (z[j] - mean[j]) for z in inside)
                cov[i][j] += Fraction(m, m - 1) * square
    return rates, cov


def _usable(rows: list[Row]) -> None:
    for stratum in {row[0] for row in rows}:
        assume(len({row[1] for row in rows if row[0] == stratum}) > 1)
    for group in (0, 1):
        answers = {row[4] for row in rows if row[3] == group}
        assume(answers == {0, 1})
        assume(len({row[:2] for row in rows if row[3] == group}) > 1)


def _table(rows: list[Row], scale: float = 1.0) -> sr.RateTable:
    data = pd.DataFrame(rows, columns=["s", "c", "w", "g", "y"])
    data["w"] = data["w"] * scale
    design = sr.SampleDesign(data, weight="w", strata="s", clusters="c")
    return sr.estimate_rates(design, "y", by="g")


@given(RECORDS, st.sampled_from([1.0, 1e9, 1e-9]))
def test_against_fractions(rows: list[Row], scale: float) -> None:
    _usable(rows)
    rates, exact = _exact(rows)
    found = _table(rows, scale)
    np.testing.assert_allclose(found.rate, [float(rate) for rate in rates], rtol=1e-14)
    cov = found.covariance.to_numpy()
    largest = max(float(exact[0][0]), float(exact[1][1]))
    for i in (0, 1):
        for j in (0, 1):
            assert cov[i, j] == pytest.approx(float(exact[i][j]), rel=1e-12, abs=1e-13 * largest)


def test_a_large_common_part_of_the_weights_costs_no_digits() -> None:
    """Weights near 1e9 that differ in the last places: centred before squared."""
    rng = np.random.default_rng(5)
    rows = [
        (s, c, int(10**9 + rng.integers(0, 9)), int(rng.integers(0, 2)), int(rng.random() < 0.4))
        for s in (0, 1)
        for c in range(3)
        for _ in range(40)
    ]
    _, exact = _exact(rows)
    cov = _table(rows).covariance.to_numpy()
    np.testing.assert_allclose(cov, [[float(x) for x in row] for row in exact], rtol=1e-11)


@pytest.mark.slow
def test_rare_rate_among_ten_million_records() -> None:
    """Ten successes in ten million: a rate of 1e-6 with its Poisson-like standard error."""
    n = 10_000_000
    y = np.zeros(n, dtype=np.int8)
    y[:: n // 10] = 1
    rates = sr.estimate_rates(sr.SampleDesign(pd.DataFrame({"y": y})), "y")
    p = Fraction(10, n)
    assert rates.rate[0] == pytest.approx(float(p), rel=1e-14)
    assert rates.variance[0] == pytest.approx(float(p * (1 - p) / (n - 1)), rel=1e-9)


@given(st.integers(0, 2**32 - 1))
def test_row_order_moves_the_last_bits_only(seed: int) -> None:
    """Sums are taken in row order, so that only rounding changes: some 1e-15 of a rate."""
    survey = sr.demo_survey(wave="2024").iloc[::9]
    order = np.random.default_rng(seed).permutation(len(survey))

    def ask(data: pd.DataFrame) -> sr.RateTable:
        design = sr.SampleDesign(
            data, weight="wt", strata="district", clusters="block", single_cluster_strata="collapse"
        )
        return sr.estimate_rates(design, "damp", by="sex")

    one, other = ask(survey), ask(survey.iloc[order])
    np.testing.assert_allclose(one.rate, other.rate, rtol=2e-13)
    np.testing.assert_allclose(one.se, other.se, rtol=1e-12)
