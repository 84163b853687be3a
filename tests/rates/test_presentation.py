"""Presentation standards: every boundary from both sides, and the rules told a second time."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

import svyrates as sr
from svyrates.rates.limits import rate_limits
from svyrates.rates.presentation import (
    STANDARDS,
    Precision,
    Standard,
    Thresholds,
    apply_standard,
    judge_presentation,
)
from tests.outside import published

NAN = float("nan")
NCHS = STANDARDS["nchs-proportions"]
# A row that NCHS shows: each test changes what it is about.
GOOD: dict[str, float] = {
    "rate": 0.4,
    "n": 200.0,
    "effective_n": 150.0,
    "df": 20.0,
    "se": 0.04,
    "width": 0.16,
}


def _judged(standard: Standard = NCHS, **changed: float) -> tuple[str, str]:
    row = GOOD | changed
    precision = Precision(**{name: np.array([value]) for name, value in row.items()})
    status, reason = apply_standard(precision, standard)
    return str(status[0]), str(reason[0])


def test_a_good_rate_is_shown_without_a_word() -> None:
    assert _judged() == ("show", "")


BOUNDARIES: list[tuple[dict[str, float], str, str]] = [
    # Sizes: 30 is enough.
    ({"n": 30.0, "effective_n": 30.0}, "show", ""),
    ({"n": 29.0, "effective_n": 29.0}, "withhold", "sample size below 30"),
    ({"effective_n": 30.0 - 1e-13}, "show", ""),
    ({"effective_n": 29.999}, "withhold", "effective sample size below 30"),
    # Widths: 0.05 is small, 0.30 is large. 0.1 + 0.2 and 1 - 0.7 are 0.30.
    ({"rate": 0.02, "width": 0.05}, "show", ""),
    ({"rate": 0.02, "width": 0.15 - 0.1}, "show", ""),
    ({"rate": 0.02, "width": 0.0501}, "withhold", "95% interval wider than 130% of the rate"),
    ({"width": 0.2999}, "show", ""),
    ({"width": 0.30}, "withhold", "95% interval 30 percentage points wide or more"),
    ({"width": 0.1 + 0.2}, "withhold", "95% interval 30 percentage points wide or more"),
    ({"width": 0.3 - 5e-17}, "withhold", "95% interval 30 percentage points wide or more"),
    # Relative widths: 130% passes, however the last bit falls.
    ({"rate": 0.1, "width": 0.13}, "show", ""),
    ({"rate": 0.07, "width": 0.07 * 1.3}, "show", ""),
    ({"rate": 0.1, "width": 0.1301}, "withhold", "95% interval wider than 130% of the rate"),
    # Degrees of freedom: 8 are enough.
    ({"df": 8.0}, "show", ""),
    ({"df": 8.0 - 1e-14}, "show", ""),
    ({"df": 7.9}, "review", "fewer than 8 degrees of freedom"),
    ({"df": math.inf}, "show", ""),
    ({"rate": 0.02, "width": 0.05, "df": 7.0}, "review", "fewer than 8 degrees of freedom"),
    # The complement: 130% of it passes, more is a note.
    ({"rate": 0.9, "width": 0.13}, "show", ""),
    ({"rate": 0.9, "width": 0.1301}, "show-with-note", "the complement may be unreliable"),
    ({"rate": 0.98, "width": 0.05}, "show", ""),
    ({"rate": 0.98, "width": 0.051}, "show-with-note", "the complement may be unreliable"),
    (
        {"rate": 0.98, "width": 0.051, "df": 7.0},
        "review",
        "fewer than 8 degrees of freedom; the complement may be unreliable",
    ),
]


@pytest.mark.parametrize(("changed", "status", "reason"), BOUNDARIES)
def test_both_sides_of_each_nchs_boundary(
    changed: dict[str, float], status: str, reason: str
) -> None:
    """Parker et al. (2017, as revised), Vital and Health Statistics 2 (175), pp. 2-5."""
    assert _judged(**changed) == (status, reason)


@pytest.mark.parametrize("rate", [0.0, 1.0])
def test_no_events_are_for_review_if_all_else_passes(rate: float) -> None:
    only_once = {"rate": rate, "se": NAN}
    why = "a rate of exactly 0 or 1 has no variance"
    assert _judged(**only_once, width=0.04) == ("review", why)
    # Wider than 130% of nothing: no relative width exists.
    assert _judged(**only_once, width=0.1) == ("review", why)
    assert _judged(**only_once, width=0.04, df=3.0) == (
        "review",
        f"fewer than 8 degrees of freedom; {why}",
    )
    assert _judged(**only_once, width=0.04, n=29.0, effective_n=29.0)[0] == "withhold"
    assert _judged(**only_once, width=0.31)[0] == "withhold"


def test_a_withheld_row_names_only_what_withholds_it() -> None:
    status, reason = _judged(rate=0.95, n=20.0, effective_n=9.0, width=0.35, df=2.0)
    assert status == "withhold"
    assert reason == ("sample size below 30; 95% interval 30 percentage points wide or more")


def test_no_members() -> None:
    empty = {"rate": NAN, "n": 0.0, "effective_n": NAN, "df": NAN, "se": NAN, "width": NAN}
    for standard in (*STANDARDS.values(), Standard()):
        assert _judged(standard, **empty) == ("withhold", "no member with a known answer")


def test_undefined_variance() -> None:
    """Withheld where the standard needs it, for review where it does not."""
    undefined = {"effective_n": NAN, "se": NAN, "width": NAN}
    why = "its variance cannot be estimated"
    for standard in STANDARDS.values():
        assert _judged(standard, **undefined) == ("withhold", why)
    by_size = Standard(withhold=Thresholds(least_n=50))
    assert _judged(by_size, **undefined) == ("review", why)
    assert _judged(by_size, **undefined, n=49.0) == ("withhold", "sample size below 50")


def test_no_degrees_of_freedom() -> None:
    assert _judged(width=NAN, df=0.0) == ("withhold", "its 95% interval cannot be computed")
    ask_df = Standard(review=Thresholds(least_df=8))
    assert _judged(ask_df, df=NAN) == ("review", "its degrees of freedom are unknown")


def test_zero_standard_error_is_for_review() -> None:
    for standard in STANDARDS.values():
        assert _judged(standard, se=0.0) == ("review", "the standard error is zero")


def test_relative_standard_error() -> None:
    rule = STANDARDS["relative-standard-error"]
    why = "relative standard error above 30%"
    assert _judged(rule, rate=0.4, se=0.4 * 0.3) == ("show", "")
    assert _judged(rule, rate=0.1, se=0.1 * 0.3) == ("show", "")
    assert _judged(rule, rate=0.1, se=0.0301) == ("withhold", why)
    assert _judged(rule, n=30.0) == ("show", "")
    assert _judged(rule, n=29.0) == ("withhold", "sample size below 30")


def test_relative_standard_error_is_another_for_the_complement() -> None:
    """2% and 98% are the same information, and fall on two sides of the rule."""
    rule = STANDARDS["relative-standard-error"]
    assert _judged(rule, rate=0.02, se=0.01)[0] == "withhold"
    assert _judged(rule, rate=0.98, se=0.01)[0] == "show"


def test_coefficient_of_variation() -> None:
    bands = STANDARDS["coefficient-of-variation"]
    assert _judged(bands, rate=0.2, se=0.2 * 0.165) == ("show", "")
    assert _judged(bands, rate=0.2, se=0.2 * 0.166) == (
        "show-with-note",
        "relative standard error above 16.5%",
    )
    assert _judged(bands, rate=0.2, se=0.2 * 0.333)[0] == "show-with-note"
    assert _judged(bands, rate=0.2, se=0.2 * 0.334) == (
        "withhold",
        "relative standard error above 33.3%",
    )
    assert _judged(bands, n=10.0)[0] == "show"
    assert _judged(bands, n=9.0) == ("withhold", "sample size below 10")
    assert _judged(bands, rate=1.0, se=NAN)[0] == "review"


def test_own_thresholds() -> None:
    ours = Standard(
        withhold=Thresholds(least_n=25),
        review=Thresholds(large_width=0.25, least_df=12),
        note=Thresholds(least_n=50, largest_relative_width=1.2),
    )
    assert _judged(ours) == ("show", "")
    assert _judged(ours, n=24.0) == ("withhold", "sample size below 25")
    assert _judged(ours, n=25.0) == ("show-with-note", "sample size below 50")
    assert _judged(ours, rate=0.1, width=0.13) == (
        "show-with-note",
        "95% interval wider than 120% of the rate",
    )
    status, reason = _judged(ours, width=0.25, df=11.0, n=49.0)
    assert status == "review"
    assert reason.split("; ") == [
        "95% interval 25 percentage points wide or more",
        "fewer than 12 degrees of freedom",
        "sample size below 50",
    ]


def test_effective_size_alone() -> None:
    ours = Standard(withhold=Thresholds(least_effective_n=30))
    assert _judged(ours, n=29.0, effective_n=29.0) == (
        "withhold",
        "effective sample size below 30",
    )


@pytest.mark.parametrize(
    ("thresholds", "message"),
    [
        ({"least_n": 0}, "least_n must be a positive number; got 0"),
        ({"least_df": -1}, "least_df must be a positive number"),
        ({"largest_rse": "0.3"}, "largest_rse must be a positive number; got '0.3'"),
        ({"largest_rse": True}, "must be a positive number"),
        ({"least_effective_n": NAN}, "must be a positive number"),
        ({"large_width": 30}, "width in proportions, at most 1; got 30"),
        ({"small_width": 0.05}, "give largest_relative_width too"),
    ],
)
def test_bad_thresholds(thresholds: dict[str, Any], message: str) -> None:
    with pytest.raises(sr.QuestionError, match=message):
        Thresholds(**thresholds)


def _told_again(row: dict[str, float]) -> str:
    """The NCHS algorithm as a reader would follow it with a pencil, one question at a time.

    Parker et al. (2017, as revised); the tolerance at the boundaries is left out.
    """
    p, width = row["rate"], row["width"]
    if row["n"] < 30 or row["effective_n"] < 30 or width >= 0.30:
        return "withhold"
    if p in {0.0, 1.0}:
        return "review"
    if width > 0.05 and 100 * width / p > 130:
        return "withhold"
    if row["df"] < 8:
        return "review"
    if width > 0.05 and 100 * width / (1 - p) > 130:
        return "show-with-note"
    return "show"


# Values of two or three decimals: those that lie on a threshold have their own tests.
@given(
    rate=st.sampled_from([0.0, 1.0]) | st.integers(1, 999).map(lambda k: k / 1000),
    n=st.integers(20, 400),
    share=st.floats(0.05, 1.0),
    df=st.integers(1, 40),
    width=st.integers(1, 349).map(lambda k: k / 1000 + 0.000123),
)
def test_nchs_told_again(rate: float, n: int, share: float, df: int, width: float) -> None:
    certain = rate in {0.0, 1.0}
    row = {
        "rate": rate,
        "n": float(n),
        "effective_n": float(n) if certain else n * share,
        "df": float(df),
        "se": NAN if certain else 0.01,
        "width": width,
    }
    assert _judged(**row)[0] == _told_again(row)


def test_decisions_of_a_second_implementation() -> None:
    """Limits and decisions computed elsewhere from the published rules; not printed anywhere."""
    source = published("korn_graubard_second_implementation")
    statuses = {
        "present": ("show", ""),
        "suppress: width>=0.30": ("withhold", "95% interval 30 percentage points wide or more"),
        "review: df<8": ("review", "fewer than 8 degrees of freedom"),
        "present; complement unreliable": ("show-with-note", "the complement may be unreliable"),
    }
    for case in source["published"]["computed"]:
        p, n, df = (float(case[name]) for name in ("p", "n", "df"))
        n_star = n / case["deff"]
        arrays = [np.array([value]) for value in (p, n, n_star, df)]
        low, high = rate_limits(*arrays, "korn-graubard", 0.95)
        found = _judged(
            rate=p,
            n=n,
            effective_n=min(n, n_star),
            df=df,
            se=math.sqrt(p * (1 - p) / n_star),
            width=float(high[0] - low[0]),
        )
        assert found == statuses[case["decision"]], case


@pytest.fixture(scope="module")
def survey() -> pd.DataFrame:
    """Groups that NCHS shows, sends to review and withholds, in 40 sampling units."""
    rng = np.random.default_rng(175)
    unit = np.repeat(np.arange(40), 30)
    group = np.array(["common", "never", "thin", "once"], dtype=object)[
        np.where(unit == 39, 3, rng.choice(3, unit.size, p=[0.6, 0.38, 0.02]))
    ]
    y = np.where(group == "never", 0, rng.random(unit.size) < 0.4)
    return pd.DataFrame({"unit": unit, "group": group, "y": y, "w": rng.uniform(1, 3, unit.size)})


def test_table_of_rates(survey: pd.DataFrame) -> None:
    design = sr.SampleDesign(survey, weight="w", clusters="unit")
    rates = sr.estimate_rates(design, "y", by="group")
    judged = judge_presentation(rates)
    found = dict(
        zip(
            (labels[0] for labels in rates.groups),
            zip(judged.status, judged.reason, strict=True),
            strict=True,
        )
    )
    assert found["common"] == ("show", "")
    assert found["never"] == ("review", "a rate of exactly 0 or 1 has no variance")
    assert found["once"] == ("withhold", "its variance cannot be estimated")
    assert found["thin"][0] == "withhold"
    assert judged.withheld.tolist() == [s == "withhold" for s in judged.status]
    assert judged.standard is NCHS


@pytest.mark.parametrize("standard", STANDARDS)
def test_limits_of_the_table_do_not_matter(survey: pd.DataFrame, standard: str) -> None:
    """The standard's limits are Korn-Graubard's at 95%, whatever the table shows."""
    design = sr.SampleDesign(survey, weight="w", clusters="unit")
    default = sr.estimate_rates(design, "y", by="group")
    other = sr.estimate_rates(design, "y", by="group", interval="wald", level=0.5)
    one, two = judge_presentation(default, standard), judge_presentation(other, standard)
    assert one.status.tolist() == two.status.tolist()
    assert one.reason.tolist() == two.reason.tolist()
    precision = Precision.of(other)
    np.testing.assert_array_equal(precision.width, default.high - default.low)
    assert (precision.effective_n <= other.n)[other.n_effective > 0].all()


def test_effective_size_is_at_most_the_sample_size() -> None:
    """A design effect below 1 earns no more than the members that there are."""
    frame = pd.DataFrame({"s": np.repeat([0, 1], 20), "y": [*[1] * 19, 0, *[0] * 19, 1]})
    rates = sr.estimate_rates(sr.SampleDesign(frame, strata="s"), "y")
    assert rates.n_effective[0] > 40
    assert Precision.of(rates).effective_n[0] == 40


def test_unknown_standard(survey: pd.DataFrame) -> None:
    rates = sr.estimate_rates(sr.SampleDesign(survey, clusters="unit"), "y")
    with pytest.raises(sr.QuestionError, match=r"no standard 'nchs'.*'nchs-proportions'"):
        judge_presentation(rates, "nchs")
    with pytest.raises(sr.QuestionError, match="a name or a Standard; got float"):
        judge_presentation(rates, 0.3)  # type: ignore[arg-type]
