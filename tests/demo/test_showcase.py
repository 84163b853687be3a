"""Every verdict has its comparison, through the public face, the long way, and for other seeds."""

from __future__ import annotations

import dataclasses
import warnings
from collections import Counter
from collections.abc import Iterable

import pandas as pd
import pytest

import svyrates as sr
from svyrates.compare.verdict import VERDICTS
from svyrates.demo import SHOWCASE, WAVES, Showcase, build
from tests.demo.reference import answer


def compared(survey: pd.DataFrame, show: Showcase) -> pd.Series:
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    success = list(show.success) if show.success else None
    rates = sr.estimate_rates(design, outcome=show.outcome, success=success, by=show.by)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
        gaps = sr.compare_rates(rates, versus=show.versus).to_frame()
    return gaps[gaps["group"] == show.group].iloc[0]


def hits(seeds: Iterable[int]) -> Counter[tuple[str, str]]:
    """How many seeds give each comparison its verdict, by verdict and wave."""
    found: Counter[tuple[str, str]] = Counter({(v, wave): 0 for v in SHOWCASE for wave in WAVES})
    for seed in seeds:
        both = build.__wrapped__(seed)
        for wave in WAVES:
            survey = both[both["wave"] == wave]
            for verdict, show in SHOWCASE.items():
                found[verdict, wave] += answer(survey, show).verdict == verdict
    return found


def test_there_is_one_for_every_verdict() -> None:
    assert set(SHOWCASE) == set(VERDICTS)


def test_it_cannot_be_changed_by_accident() -> None:
    with pytest.raises(TypeError):
        SHOWCASE["agrees"] = SHOWCASE["missed"]  # type: ignore[index]
    with pytest.raises(dataclasses.FrozenInstanceError):
        SHOWCASE["agrees"].group = "man"  # type: ignore[misc]


@pytest.mark.parametrize("wave", WAVES)
@pytest.mark.parametrize("verdict", SHOWCASE)
def test_the_comparison_has_its_verdict(verdict: str, wave: str) -> None:
    assert compared(sr.demo_survey(wave=wave), SHOWCASE[verdict])["verdict"] == verdict


@pytest.mark.parametrize("verdict", SHOWCASE)
def test_the_package_and_the_long_way_agree(verdict: str) -> None:
    show = SHOWCASE[verdict]
    survey = sr.demo_survey(wave=show.wave)
    ours, other = compared(survey, show), answer(survey, show)
    assert ours["verdict"] == other.verdict
    expected = {
        "difference": other.difference,
        "df": other.df,
        "p": other.p,
        "simple_estimate": other.simple_difference,
        "simple_se": other.simple_se,
        "simple_p": other.simple_p,
        "shift_p": other.shift_p,
    }
    if verdict != "undetermined":
        expected["se"] = other.se
        # A difference of two probabilities: near zero only its absolute size means anything.
        assert ours["simple_coverage"] == pytest.approx(other.coverage, abs=1e-12)
    for column, value in expected.items():
        assert ours[column] == pytest.approx(value, rel=1e-8, abs=1e-300, nan_ok=True), column


def test_verdicts_do_not_hang_on_the_seed() -> None:
    found = hits(range(20))
    assert {key: count for key, count in found.items() if count < 18} == {}


@pytest.mark.simulation
def test_verdicts_hold_for_nearly_every_seed() -> None:
    found = hits(range(200))
    assert {key: count for key, count in found.items() if count < 190} == {}
