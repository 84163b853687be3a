"""Bad questions: each is refused with its reason; strange but valid ones are answered."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import pytest

import svyrates as sr


@pytest.fixture(scope="module")
def data() -> pd.DataFrame:
    return pd.DataFrame(
        {
            "g": ["a", "a", "b", "b", "c", "c"],
            "h": [1, 2, 1, 2, 1, 2],
            "y": [0, 1, 0, 1, 1, 0],
            "answer": ["yes", "no", None, "yes", "no", "dk"],
            "code": [1, 2, 9, 1, 2, 1],
            "gone": [np.nan] * 6,
            "id": np.arange(6),
        }
    )


@pytest.fixture(scope="module")
def design(data: pd.DataFrame) -> sr.SampleDesign:
    return sr.SampleDesign(data)


BAD: list[tuple[dict[str, Any], str]] = [
    ({"outcome": "yy"}, "outcome 'yy': there is no column 'yy'. Did you mean 'y'"),
    ({"outcome": "answer"}, r"holds String values \('dk', 'no', 'yes'\): say which count"),
    ({"outcome": "code"}, r"values other than 0 and 1 in 3 rows \(2.0, 9.0\)"),
    ({"outcome": "answer", "success": "Yes"}, "values that do not occur: 'Yes'.*'dk', 'no', 'yes'"),
    ({"outcome": "code", "success": "1"}, "do not occur: '1'"),
    ({"outcome": "code", "success": True}, "do not occur: True"),
    ({"outcome": "answer", "success": []}, "success"),
    ({"outcome": ["y", "y"]}, "names a column twice"),
    ({"outcome": []}, "names no column"),
    ({"outcome": {"a": ("answer",)}}, r"give \(column, success values\)"),
    ({"outcome": {"a": np.ones(6, bool)}, "success": 1}, "is a mask already"),
    ({"outcome": {"a": np.ones(5, bool)}}, "has 5 values for 6 records"),
    ({"outcome": 5}, "boolean array"),
    ({"by": "gg"}, "by: there is no column 'gg'"),
    ({"by": ["g", "g"]}, "by names a column twice"),
    ({"by": "gone"}, "by 'gone' has no known values"),
    ({"by": {}}, "empty mapping"),
    ({"by": {"x": "code"}}, "by 'x' must hold true and false"),
    ({"where": np.zeros(6, bool)}, "where selects no records"),
    ({"where": np.ones((6, 2))}, r"of shape \(6, 2\)"),
    ({"where": "code"}, "must hold true and false"),
    ({"where": pd.Series([True] * 6, index=range(1, 7))}, "index differs"),
    ({"interval": "wils"}, "interval must be one of"),
    ({"level": 95}, "level must be a number between 0 and 1"),
    ({"level": "0.95"}, "level must be a number"),
    ({"level": float("nan")}, "level must be a number"),
    ({"df": 0}, "df must be one of"),
    ({"df": "domains"}, "df must be one of"),
    ({"df": True}, "df must be one of"),
]


@pytest.mark.parametrize(("question", "message"), BAD)
def test_bad_question(design: sr.SampleDesign, question: dict[str, Any], message: str) -> None:
    asked = {"outcome": "y", "by": "g", **question}
    with pytest.raises(sr.QuestionError, match=message):
        sr.estimate_rates(design, asked.pop("outcome"), **asked)


def test_all_faults_together(design: sr.SampleDesign) -> None:
    with pytest.raises(sr.QuestionError, match="4 faults") as raised:
        sr.estimate_rates(design, "yy", by="gg", where="zz", level=2)
    assert str(raised.value).count("there is no column") == 3


def test_a_design_is_asked_for(data: pd.DataFrame) -> None:
    with pytest.raises(sr.QuestionError, match="must be a SampleDesign; got DataFrame"):
        sr.estimate_rates(data, "y")  # type: ignore[arg-type]


def test_too_many_groups() -> None:
    many = pd.DataFrame({"y": np.arange(20_002) % 2, "g": np.arange(20_002) // 2})
    with pytest.raises(sr.QuestionError, match=r"makes 10,001 groups.*more than 10,000"):
        sr.estimate_rates(sr.SampleDesign(many), "y", by="g")


def test_missing_answers_are_counted(design: sr.SampleDesign) -> None:
    rates = sr.estimate_rates(design, "answer", success="yes", by="g")
    assert rates.n.tolist() == [2, 1, 2]
    assert rates.n_missing.tolist() == [0, 1, 0]


def test_rates_of_zero_and_one_one_record_and_one_unit() -> None:
    data = pd.DataFrame(
        {
            "c": [1, 1, 2, 2, 3, 3, 4, 4, 4],
            "g": ["all", "all", "all", "none", "none", "none", "unit", "unit", "one"],
            "y": [1, 1, 1, 0, 0, 0, 1, 0, 1],
        }
    )
    rates = sr.estimate_rates(sr.SampleDesign(data, clusters="c"), "y", by="g")
    frame = rates.to_frame().set_index("g")
    assert frame["rate"].to_dict() == {"all": 1.0, "none": 0.0, "unit": 0.5, "one": 1.0}
    assert frame["se"].isna().all()
    assert frame.loc["all", "high"] == 1.0
    assert frame.loc["all", "low"] == pytest.approx(0.025 ** (1 / 3))  # Clopper-Pearson, 3 of 3
    assert frame.loc["none", "high"] == pytest.approx(1 - 0.025 ** (1 / 3))
    assert frame.loc["one", "low"] == pytest.approx(0.025)
    assert "exactly 0 or 1" in frame.loc["all", "note"]
    assert "in one sampling unit" in frame.loc["unit", "note"]
    assert np.isnan(frame.loc["unit", "low"])


def test_no_degrees_of_freedom() -> None:
    """Members in one unit of each of two strata: a variance, but nothing to judge it by."""
    data = pd.DataFrame(
        {
            "s": [1, 1, 1, 2, 2, 2],
            "c": [1, 1, 2, 1, 1, 2],
            "g": ["x", "x", "z", "x", "x", "z"],
            "y": [1, 0, 1, 0, 0, 1],
        }
    )
    design = sr.SampleDesign(data, strata="s", clusters="c")
    frame = sr.estimate_rates(design, "y", by="g").to_frame().set_index("g")
    assert frame.loc["x", "df"] == 0
    assert frame.loc["x", "se"] > 0
    assert np.isnan(frame.loc["x", "low"])
    assert "no degrees of freedom" in frame.loc["x", "note"]


def test_satterthwaite_from_the_strata() -> None:
    """(ΣV_h)² / Σ(V_h²/(n_h - 1)), strata's variances taken apart one stratum at a time."""
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    rates = sr.estimate_rates(design, "damp", by="sex", df="satterthwaite")
    known = survey
    for row, (sex,) in enumerate(rates.groups):
        member = (known["sex"] == sex).to_numpy()
        total = known.loc[member, "wt"].sum()
        z = np.where(member, known["wt"] * (known["damp"] - rates.rate[row]) / total, 0.0)
        units = pd.Series(z).groupby([known["district"], known["block"]]).sum()
        by_stratum = units.groupby(level=0)
        n = by_stratum.size()
        variance = n * by_stratum.var()
        assert variance.sum() == pytest.approx(rates.variance[row], rel=1e-9)
        expected = variance.sum() ** 2 / (variance**2 / (n - 1)).sum()
        assert rates.df[row] == pytest.approx(expected, rel=1e-9)


def test_other_rules_of_degrees_of_freedom() -> None:
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    ask = {"outcome": "damp", "by": "dwelling_type"}
    assert set(sr.estimate_rates(design, df="design", **ask).df) == {112 - 24}
    assert set(sr.estimate_rates(design, df=17, **ask).df) == {17.0}
    sampled = survey[survey["dwelling_type"] == "park home"].groupby("district")["block"].nunique()
    assert sr.estimate_rates(design, **ask).df[2] == (sampled - 1).sum()
