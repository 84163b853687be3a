"""One-sided questions, margins, and relative differences."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import pytest
from scipy import stats

import svyrates as sr
from svyrates.compare.hypothesis import Hypothesis
from svyrates.compare.simple import real_error_rate
from tests.quiet import compare_quietly


@pytest.fixture(scope="module")
def rates() -> sr.RateTable:
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    return sr.estimate_rates(design, "damp", by="tenure")


MARGINS: list[tuple[str, Any, tuple[float, float]]] = [
    ("difference", 0.05, (-0.05, 0.05)),
    ("difference", (-0.02, 0.08), (-0.02, 0.08)),
    ("ratio", 1.25, (0.8, 1.25)),
    ("odds_ratio", (0.7, 1.5), (0.7, 1.5)),
    ("relative_difference", 0.25, (-0.2, 0.25)),
]


@pytest.mark.parametrize(("measure", "margin", "ends"), MARGINS)
def test_equivalence_is_two_one_sided_tests(
    rates: sr.RateTable, measure: str, margin: Any, ends: tuple[float, float]
) -> None:
    gaps = compare_quietly(rates, measure=measure, alternative="equivalent", margin=margin)
    assert gaps.margin == pytest.approx(ends)
    above = compare_quietly(rates, measure=measure, alternative="greater", null=ends[0])
    below = compare_quietly(rates, measure=measure, alternative="less", null=ends[1])
    np.testing.assert_allclose(gaps.p, np.maximum(above.p, below.p), rtol=1e-12)
    np.testing.assert_allclose(gaps.simple_p, np.maximum(above.simple_p, below.simple_p))
    # Limits at 1 - 2α lie inside the margin exactly where equivalence is found.
    np.testing.assert_allclose(gaps.low, above.low, rtol=1e-12)
    np.testing.assert_allclose(gaps.high, below.high, rtol=1e-12)
    inside = (gaps.low > ends[0]) & (gaps.high < ends[1])
    np.testing.assert_array_equal(inside, gaps.p < 0.05)
    assert np.isnan(gaps.null)


@pytest.mark.parametrize(("measure", "margin", "ends"), MARGINS)
def test_non_inferiority_is_one_of_them(
    rates: sr.RateTable, measure: str, margin: Any, ends: tuple[float, float]
) -> None:
    not_lower = compare_quietly(rates, measure=measure, alternative="not-lower", margin=margin)
    above = compare_quietly(rates, measure=measure, alternative="greater", null=ends[0])
    not_higher = compare_quietly(rates, measure=measure, alternative="not-higher", margin=margin)
    below = compare_quietly(rates, measure=measure, alternative="less", null=ends[1])
    for name in ("p", "simple_p", "low", "simple_error_rate", "simple_coverage"):
        np.testing.assert_allclose(getattr(not_lower, name), getattr(above, name), rtol=1e-9)
        np.testing.assert_allclose(getattr(not_higher, name), getattr(below, name), rtol=1e-9)


def test_conclusions_of_equivalence_in_words(rates: sr.RateTable) -> None:
    """Difference and equivalence are asked together: four answers (Keppel & Pearcy 2004)."""
    seen = set()
    for margin in np.linspace(0.005, 0.4, 80):
        gaps = compare_quietly(rates, alternative="equivalent", margin=float(margin), level=0.6)
        differs = compare_quietly(rates, level=0.6).p < 0.4
        for row in range(len(gaps)):
            found = bool(gaps.p[row] < 0.4)
            expected = {
                (True, True): "different, but within the margin",
                (True, False): "equivalent within the margin",
                (False, True): "different",
                (False, False): "inconclusive",
            }[found, bool(differs[row])]
            assert gaps.conclusion[row] == expected
            seen.add(expected)
    assert len(seen) == 4
    gaps = compare_quietly(rates, alternative="equivalent", margin=0.3)
    text = gaps.explain("owner", "rent-free")
    assert "90% limits" in text
    assert "The margin is -30.0 to +30.0 points; conclusion: equivalent within the margin" in text
    assert "evidence of equivalence" in text
    assert "two one-sided t tests of equivalence between -30.0 points and" in gaps.text(160)
    lower = compare_quietly(rates, alternative="not-lower", margin=0.3)
    assert set(lower.conclusion) == {"evidence that it is not lower by the margin"}
    assert "The margin is -30.0 points" in lower.explain("owner", "rent-free")
    assert "non-inferiority" in lower.explain("owner", "rent-free")


def test_relative_difference_is_the_ratio_less_one(rates: sr.RateTable) -> None:
    relative = compare_quietly(rates, measure="relative_difference")
    ratio = compare_quietly(rates, measure="ratio")
    for name in ("estimate", "low", "high", "simple_estimate", "simple_low", "simple_high"):
        np.testing.assert_allclose(getattr(relative, name), getattr(ratio, name) - 1, rtol=1e-9)
    for name in ("se", "p", "simple_p", "shift", "simple_coverage", "variance_ratio"):
        np.testing.assert_allclose(getattr(relative, name), getattr(ratio, name), rtol=1e-12)
    assert "relative_difference" in relative.to_frame()
    null = compare_quietly(rates, measure="relative_difference", null=0.1)
    np.testing.assert_allclose(
        null.p, compare_quietly(rates, measure="ratio", null=1.1).p, rtol=1e-9
    )
    assert "relative difference of +" in relative.explain("social tenant", "rent-free")


@pytest.mark.parametrize("bias", [-0.03, 0.0, 0.02])
@pytest.mark.parametrize("se", [0.01, 0.04])
def test_error_rate_of_an_equivalence_test_by_simulation(bias: float, se: float) -> None:
    """At the worse end of the margin, with a biased estimate whose true spread differs."""
    asked = Hypothesis("equivalent", -0.08, 0.05, 0.95)
    deviation = 0.025
    found = real_error_rate(asked, np.array([se]), np.array([bias]), np.array([deviation]))[0]
    rng = np.random.default_rng(3)
    noise = rng.normal(0.0, deviation, 200_000) + bias
    z = stats.norm.ppf(0.95)
    rates = [
        (((end + noise - z * se) > -0.08) & ((end + noise + z * se) < 0.05)).mean()
        for end in (-0.08, 0.05)
    ]
    assert found == pytest.approx(max(rates), abs=0.004)


BAD: list[tuple[dict[str, Any], str]] = [
    ({"alternative": "equivalent"}, r"needs a margin, such as margin=0.05"),
    ({"alternative": "equivalent", "measure": "ratio"}, r"needs a margin, such as margin=1.25"),
    ({"alternative": "equivalent", "margin": -0.1}, "margin must be a number above 0"),
    ({"alternative": "equivalent", "margin": 1.5}, "margin must be a number above 0"),
    ({"alternative": "equivalent", "margin": (0.1, 0.2)}, "a pair around 0"),
    ({"alternative": "equivalent", "margin": True}, "margin must be a number"),
    ({"alternative": "not-lower", "margin": 0.9, "measure": "ratio"}, "above 1"),
    ({"alternative": "not-lower", "margin": 0.1, "null": 0.1}, "takes a margin, not a null"),
    ({"margin": 0.1}, "margin goes with alternative 'equivalent'"),
    ({"alternative": "equivalent", "margin": 0.1, "multiplicity": "max-t"}, "take 'holm'"),
    ({"multiplicity": "tukey"}, "multiplicity must be one of"),
    ({"family": "all"}, "family must be one of"),
    ({"measure": "relative_difference", "null": -1.0}, "null must be a number between -1"),
]


@pytest.mark.parametrize(("options", "message"), BAD)
def test_bad_question(rates: sr.RateTable, options: dict[str, Any], message: str) -> None:
    with pytest.raises(sr.ComparisonError, match=message):
        sr.compare_rates(rates, **options)


def test_a_certain_rate_has_equivalence_limits_of_its_own() -> None:
    data = pd.DataFrame({"g": ["a"] * 300 + ["b"] * 300, "y": [0] * 300 + [1] + [0] * 299})
    rates = sr.estimate_rates(sr.SampleDesign(data), "y", by="g")
    gaps = compare_quietly(rates, alternative="equivalent", margin=0.05)
    above = compare_quietly(rates, alternative="greater", null=-0.05)
    below = compare_quietly(rates, alternative="less", null=0.05)
    assert gaps.p[0] == pytest.approx(max(above.p[0], below.p[0]))
    assert gaps.p[0] < 0.05
