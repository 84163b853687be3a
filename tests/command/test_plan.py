"""The analysis plan: the same numbers as Python, faults with their lines, no harm."""

from __future__ import annotations

import hashlib
import json
import shutil
import subprocess
import sys
import tomllib
import warnings
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import svyrates as sr
from svyrates.command.plan import PlanError, read_plan
from svyrates.command.plan_text import lines_of
from tests.command.asked import run

HEAD = """\
title = "Winter homes"
[data]
file = "survey.csv"
[design]
weight = "wt"
strata = "district"
clusters = "block"
"""
COLD = """\
[[question]]
title = "Who lives in a cold home?"
outcome = "cold_home"
success = ["often", "always"]
by = "tenure"
"""


@pytest.fixture
def folder(file: Path, tmp_path: Path) -> Path:
    shutil.copy(file, tmp_path / "survey.csv")
    return tmp_path


def _plan(folder: Path, text: str) -> Path:
    path = folder / "plan.toml"
    path.write_text(text, encoding="utf-8")
    return path


def _rows(folder: Path, name: str) -> pd.DataFrame:
    whole = json.loads((folder / "results" / name).read_text(encoding="utf-8"))
    return pd.DataFrame(whole["rows"])


@pytest.fixture(scope="module")
def design(survey: pd.DataFrame) -> sr.SampleDesign:
    text = survey.astype({"tenure": object, "sex": object, "age_group": object})
    return sr.SampleDesign(text, weight="wt", strata="district", clusters="block")


def _gaps(
    rates: sr.RateTable, *arguments: Any, public: Any = "nchs-proportions", **options: Any
) -> pd.DataFrame:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
        gaps = sr.compare_rates(rates, *arguments, **options)
    return sr.withhold_comparisons(gaps, sr.withhold_rates(rates, public)).to_frame()


def test_a_plan_gives_what_python_gives(folder: Path, design: sr.SampleDesign) -> None:
    text = HEAD + COLD + 'versus = "everyone else"\nmultiplicity = "holm"\nhomogeneity = true\n'
    text += '[publication]\nstandard = "none"\n'
    assert run("run", _plan(folder, text)) == 0
    rates = sr.estimate_rates(design, "cold_home", success=["often", "always"], by="tenure")
    name = "01-who-lives-in-a-cold-home"
    found = _rows(folder, f"{name}-rates.json")
    np.testing.assert_allclose(found["se"], rates.se, rtol=1e-9)
    gaps = _rows(folder, f"{name}-comparisons.json")
    expected = _gaps(rates, sr.EVERYONE_ELSE, public=None, multiplicity="holm")
    np.testing.assert_allclose(gaps["p_adjusted"].astype(float), expected["p_adjusted"], rtol=1e-9)
    test = _rows(folder, f"{name}-1-homogeneity.json")
    assert test["p"][0] == pytest.approx(sr.homogeneity_test(rates).p[0], rel=1e-9)
    whole = json.loads((folder / "results" / "results.json").read_text(encoding="utf-8"))
    assert whole["schema"] == 1
    data = (folder / "survey.csv").read_bytes()
    assert whole["data"]["sha256"] == hashlib.sha256(data).hexdigest()
    assert set(whole["questions"][0]["tables"]) == {"rates", "comparisons", "1-homogeneity"}
    page = (folder / "results" / "report.html").read_text(encoding="utf-8")
    assert "Who lives in a cold home?" in page
    assert "multiplicity = &#34;holm&#34;" in page


def test_filters_groupings_margins_and_adjustment(folder: Path, design: sr.SampleDesign) -> None:
    text = (
        HEAD
        + """
[[filter]]
name = "older"
column = "age_group"
values = ["55-74", "75 and over"]
[[filter]]
name = "light"
column = "wt"
max = 150
[[question]]
title = "Damp"
outcome = "damp"
by = ["sex", ["terrain", "sex"]]
where = ["older", "light"]
alternative = "equivalent"
margin = [-0.1, 0.2]
[[question]]
title = "Of the same age"
formula = "damp ~ tenure + age_group"
by = "tenure"
versus = "owner"
[[question]]
title = "Standardised"
outcome = "damp"
by = "sex"
adjust_for = "age_group"
standard = "sample"
gap = true
[publication]
standard = "none"
"""
    )
    text = text.replace('["sex", ["terrain", "sex"]]', '[["sex"], ["terrain", "sex"]]')
    assert run("run", _plan(folder, text)) == 0
    data = design.frame.to_native()
    inside = (data["age_group"].isin(["55-74", "75 and over"]) & (data["wt"] <= 150)).to_numpy()
    rates = sr.estimate_rates(design, "damp", by="sex", where=inside)
    found = _rows(folder, "01-damp-by-sex-comparisons.json")
    expected = _gaps(rates, public=None, alternative="equivalent", margin=(-0.1, 0.2))
    np.testing.assert_allclose(found["p"].astype(float), expected["p"], rtol=1e-9)
    assert len(_rows(folder, "02-damp-by-terrain-sex-rates.json")) == 4
    adjusted = sr.adjusted_rates(design, "damp ~ tenure + age_group", by="tenure")
    model = _rows(folder, "03-of-the-same-age-2-model.json")
    assert adjusted.model is not None
    np.testing.assert_allclose(model["odds_ratio"], adjusted.model.odds_ratio, rtol=1e-7)
    both = _rows(folder, "03-of-the-same-age-1-adjustment.json")
    expected = sr.compare_adjustment(adjusted, "owner").to_frame()
    np.testing.assert_allclose(both["change_se"].astype(float), expected["change_se"], rtol=1e-6)
    assert (folder / "results" / "04-standardised-2-decomposition.csv").exists()


def test_replicates_in_a_plan(folder: Path, survey: pd.DataFrame) -> None:
    plain = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    replicated = sr.make_replicates(plain, "bootstrap", count=30, seed=2)
    replicated.frame.to_native().to_csv(folder / "survey.csv", index=False)
    text = HEAD.replace('strata = "district"\nclusters = "block"\n', "") + (
        '[design.replicates]\ncolumns = "replicate_*"\nscheme = "bootstrap"\n'
    )
    assert run("run", _plan(folder, text + COLD)) == 0
    declared = sr.ReplicateWeights("replicate_*", "bootstrap")
    again = sr.SampleDesign(replicated.frame.to_native(), weight="wt", replicates=declared)
    rates = sr.estimate_rates(again, "cold_home", success=["often", "always"], by="tenure")
    found = _rows(folder, "01-who-lives-in-a-cold-home-rates.json").set_index("tenure")
    labels = [str(label[0]) for label in rates.groups]
    public = sr.withhold_rates(rates)
    np.testing.assert_allclose(found.loc[labels, "se"].astype(float), public.se, rtol=1e-8)


def test_a_failed_question_does_not_lose_the_others(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    broken = '[[question]]\ntitle = "Peat?"\noutcome = "peat"\nby = "tenure"\n'
    odd = '[[question]]\ntitle = "Odd"\noutcome = "damp"\nby = "sex"\nversus = "nobody"\n'
    assert run("run", _plan(folder, HEAD + broken + COLD + odd)) == 3
    shown = capsys.readouterr()
    assert "No answer to Peat?" in shown.err
    assert "versus='nobody' is not a group" in shown.err
    whole = json.loads((folder / "results" / "results.json").read_text(encoding="utf-8"))
    assert [each["title"] for each in whole["failed"]] == ["Peat?", "Odd"]
    assert len(whole["questions"]) == 1
    assert "Peat?" in (folder / "results" / "report.html").read_text(encoding="utf-8")


def test_the_same_bytes_on_every_run(folder: Path) -> None:
    pytest.importorskip("matplotlib")
    text = HEAD + COLD + '[output]\nfigures = ["svg", "png"]\ntables = ["csv", "html", "latex"]\n'
    path = _plan(folder, text)
    digests = []
    for _ in range(2):
        code = f"from svyrates.command import main; main(['run', {str(path)!r}])"
        subprocess.run([sys.executable, "-c", code], check=False, capture_output=True)
        digests.append(
            {
                each.name: hashlib.sha256(each.read_bytes()).hexdigest()
                for each in sorted((folder / "results").iterdir())
            }
        )
        shutil.rmtree(folder / "results")
    assert digests[0] == digests[1]
    assert len(digests[0]) == 2 + 6 + 4


def test_withheld_rates_are_in_no_file(folder: Path, design: sr.SampleDesign) -> None:
    text = HEAD + '[[question]]\ntitle = "Damp"\noutcome = "damp"\nby = "dwelling_type"\n'
    assert run("run", _plan(folder, text + "homogeneity = true\n")) == 0
    rates = sr.estimate_rates(design, "damp", by="dwelling_type")
    hidden = np.isnan(sr.withhold_rates(rates).rate)
    assert hidden.any()
    secrets = [repr(float(rates.rate[row])) for row in np.flatnonzero(hidden)]
    for each in (folder / "results").iterdir():
        content = each.read_text(encoding="utf-8")
        assert not any(secret in content for secret in secrets)
    assert not (folder / "results" / "01-damp-1-homogeneity.csv").exists()


def test_check_estimates_nothing(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert run("check", _plan(folder, HEAD + COLD)) == 0
    shown = capsys.readouterr().out
    assert "degrees of freedom" in shown
    assert "outcome cold_home: always" in shown
    assert shown.rstrip().endswith("The plan can be run.")
    assert not (folder / "results").exists()
    bad = HEAD + COLD.replace('"tenure"', '"tenur"')
    assert run("check", _plan(folder, bad)) == 2
    assert "Did you mean 'tenure'?" in capsys.readouterr().err


BAD: list[tuple[str, str]] = [
    ("", "'title', 'data', 'question' is missing"),
    (HEAD, "'question' is missing"),
    (
        HEAD.replace("weight", "wieght") + COLD,
        r"line 5, [design]: there is no key 'wieght'; did you",
    ),
    (HEAD + COLD + "measure = 3\n", "line 13, [question]: measure must be a text"),
    (HEAD + COLD + 'margin = "5%"\n', "margin must be a number or a list of numbers"),
    (HEAD + COLD + "homogeneity = 1\n", "homogeneity must be true or false"),
    (HEAD + COLD + 'where = "old"\n', "there is no filter 'old'; the plan has none"),
    (HEAD + COLD + 'standard = "us-2000"\n', "standard and gap need adjust_for"),
    (HEAD + COLD + 'adjust_for = "sex"\n', "adjust_for needs standard"),
    (HEAD + COLD + 'formula = "y ~ a"\n', "give either an outcome or a formula"),
    (HEAD + '[[question]]\ntitle = "x"\nformula = "y ~ a"\n', "a formula needs `by`"),
    (HEAD + '[[question]]\ntitle = "x"\nby = "a"\nformula = "y ~ eval(a)"\n', "not allowed"),
    (HEAD + "[[filter]]\nname = 'a'\ncolumn = 'b'\n" + COLD, "give either values, or min and max"),
    (HEAD + COLD + '[publication]\nstandard = "nhcs"\n', "standard must be one of"),
    (HEAD + COLD + '[output]\ntables = ["xlsx"]\n', "tables may be 'csv', 'json'"),
    (HEAD + COLD + "[extra]\na = 1\n", "there is no key 'extra'"),
    (HEAD + "title = 'again'\n" + COLD, "there is no key 'title'"),
    ("title = \n", "this is no TOML"),
    ("title = 'x'\ntitle = 'y'\n", "this is no TOML"),
    (
        HEAD + COLD + '[output]\nfolder = "../elsewhere"\n',
        "must be a folder inside that of the plan",
    ),
    (HEAD + COLD + '[output]\nfolder = "."\n', "must be a folder inside that of the plan"),
    (HEAD + COLD + '[output]\nfolder = "/etc"\n', "must be a folder inside that of the plan"),
    (HEAD.replace("survey.csv", "nothing.csv") + COLD, "there is no such file"),
    (HEAD.replace('"wt"', '"wgt"') + COLD, "no column 'wgt'"),
]


@pytest.mark.parametrize(("text", "message"), BAD, ids=range(len(BAD)))
def test_faults(folder: Path, text: str, message: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert run("run", _plan(folder, text)) == 2
    shown = capsys.readouterr().err
    assert message in shown
    assert "Traceback" not in shown
    assert not (folder / "results").exists()


def test_every_fault_at_once(folder: Path) -> None:
    text = HEAD.replace("weight", "wait") + COLD.replace("outcome", "outcum") + 'by_the_way = "x"\n'
    with pytest.raises(PlanError) as problem:
        read_plan(_plan(folder, text))
    said = str(problem.value)
    for line, key in ((5, "wait"), (10, "outcum"), (13, "by_the_way")):
        assert f"line {line}" in said
        assert f"'{key}'" in said


def test_plans_that_are_no_files(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert run("run", folder / "none.toml") == 2
    assert "there is no such file" in capsys.readouterr().err
    assert run("run", folder) == 2
    assert "this is a folder" in capsys.readouterr().err
    (folder / "plan.toml").write_bytes(b"\xff\xfe\x00bad")
    assert run("run", folder / "plan.toml") == 2
    assert "text in UTF-8" in capsys.readouterr().err


def test_lines_of_keys() -> None:
    text = '''title = "a # b"  # comment
long = """
[data]
weight = 1
"""
list = [
  "x",  # ]
  "y = 3",
]
[data]
file = 'x'
[[question]]
"odd key" = 1
[[question]]
by = [["a"],
 ["b"]]
outcome = "z"
'''
    lines = lines_of(text)
    assert lines["", 0, "title"] == 1
    assert lines["", 0, "list"] == 6
    assert lines["data", 0, "file"] == 11
    assert ("data", 0, "weight") not in lines
    assert lines["question", 0, "odd key"] == 13
    assert lines["question", 1, "by"] == 15
    assert lines["question", 1, "outcome"] == 17
    assert ("", 0, "y") not in lines


@settings(max_examples=60, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(title=st.text(max_size=60))
def test_any_title_makes_a_safe_file_name(title: str) -> None:
    from svyrates.command.plan_run import _slug

    slug = _slug(title)
    assert slug
    assert len(slug) <= 40
    assert set(slug) <= set("abcdefghijklmnopqrstuvwxyz0123456789-")


def test_hostile_names_are_harmless(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    evil = "<script>alert(1)</script>"
    data = pd.DataFrame(
        {
            "=cmd()": np.random.default_rng(1).choice([evil, "\x1b[31m", "../../x"], 600),
            "y": np.arange(600) % 2,
        }
    )
    data.to_csv(folder / "survey.csv", index=False)
    text = (
        'title = "../../../etc/\\u001b[31m<b>"\n[data]\nfile = "survey.csv"\n[[question]]\n'
        'title = "../../<script>/\\u202e"\noutcome = "y"\nby = "=cmd()"\n'
    )
    assert run("run", _plan(folder, text)) == 0
    shown = capsys.readouterr()
    assert "\x1b" not in shown.out + shown.err
    names = sorted(each.name for each in (folder / "results").iterdir())
    assert names[0] == "01-script-comparisons.csv"
    page = (folder / "results" / "report.html").read_text(encoding="utf-8")
    assert "<script>" not in page
    assert "\u202e" not in page


def test_a_first_plan_can_be_read_and_run(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    plan = folder / "first.toml"
    assert run("plan", folder / "survey.csv", "--out", plan) == 0
    text = plan.read_text(encoding="utf-8")
    whole = tomllib.loads(text)
    assert whole["design"] == {"weight": "wt", "strata": "district", "clusters": "block"}
    survey = pd.read_csv(folder / "survey.csv")
    pairs = len(set(zip(survey["district"], survey["block"], strict=True)))
    assert f'# 8 codes in "block" are {pairs} units within "district"' in text
    assert text.count("# guessed: check") >= 4
    assert run("check", plan) == 0
    assert run("plan", folder / "survey.csv", "--out", plan) == 2
    assert "--replace writes over it" in capsys.readouterr().err
    assert run("plan", folder / "survey.csv", "--out", plan, "--replace") == 0
    assert run("run", plan) == 0


def test_a_first_plan_of_replicates_and_hostile_names(folder: Path) -> None:
    rng = np.random.default_rng(0)
    data = pd.DataFrame({f"rw_{i}": rng.uniform(1, 2, 50) for i in range(1, 13)})
    data['my "w" = 1\\'] = rng.uniform(1, 2, 50)
    data["finalwt"] = rng.uniform(1, 2, 50)
    data["yes"] = rng.integers(0, 2, 50)
    data["region\n[x]"] = rng.choice(["a", "b"], 50)
    data.to_csv(folder / "odd.csv", index=False)
    plan = folder / "odd.toml"
    assert run("plan", folder / "odd.csv", "--out", plan) == 0
    text = plan.read_text(encoding="utf-8")
    whole = tomllib.loads(text)
    assert whole["design"]["weight"] == "finalwt"
    assert whole["question"][0]["outcome"] == "yes"
    assert '# columns = "rw_*"' in text
    assert "12 columns" in text
