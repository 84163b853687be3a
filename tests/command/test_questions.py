"""Questions in depth and replicate weights on the command line: the same numbers as Python."""

from __future__ import annotations

import json
import warnings
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import svyrates as sr
from tests.command.asked import DESIGN, QUESTION, run

pytestmark = pytest.mark.wheel


@pytest.mark.parametrize(
    ("arguments", "options"),
    [
        (["--multiplicity", "holm"], {"multiplicity": "holm"}),
        (
            ["--alternative", "equivalent", "--margin", -0.1, "--margin", 0.2],
            {"alternative": "equivalent", "margin": (-0.1, 0.2)},
        ),
        (
            ["--measure", "relative_difference", "--null", 0.5],
            {"measure": "relative_difference", "null": 0.5},
        ),
    ],
)
def test_questions_in_depth(
    survey: pd.DataFrame,
    file: Path,
    tmp_path: Path,
    arguments: list[object],
    options: dict[str, object],
) -> None:
    out = tmp_path / "gaps.json"
    asked = [*DESIGN, *QUESTION, "--by", "tenure", *arguments, "--out", out]
    assert run("compare", file, *asked) == 0
    found = pd.DataFrame(json.loads(out.read_text(encoding="utf-8"))["rows"])
    text = survey.astype({"tenure": object, "sex": object})
    design = sr.SampleDesign(text, weight="wt", strata="district", clusters="block")
    rates = sr.estimate_rates(design, "cold_home", success=["often", "always"], by="tenure")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
        expected = sr.compare_rates(rates, **options).to_frame()
    for name in ("p", "p_adjusted", "low"):
        np.testing.assert_allclose(found[name], expected[name], rtol=1e-9)
    assert found["conclusion"].tolist() == expected["conclusion"].tolist()


def _replicated(survey: pd.DataFrame) -> sr.SampleDesign:
    plain = survey.astype({"tenure": object, "sex": object})
    design = sr.SampleDesign(plain, weight="wt", strata="district", clusters="block")
    return sr.make_replicates(design, "bootstrap", count=40, seed=5)


REPLICATES = ["--weight", "wt", "--replicates", "replicate_*", "--scheme", "bootstrap"]


def test_replicates(survey: pd.DataFrame, tmp_path: Path) -> None:
    design = _replicated(survey)
    data = design.frame.to_native()
    data.to_csv(tmp_path / "all.csv", index=False)
    declared = sr.ReplicateWeights("replicate_*", scheme="bootstrap")
    again = sr.SampleDesign(data, weight="wt", replicates=declared)
    rates = sr.estimate_rates(again, "cold_home", success=["often", "always"], by="tenure")
    out = tmp_path / "rates.json"
    asked = [*REPLICATES, *QUESTION, "--by", "tenure", "--out-rates", out]
    assert run("compare", tmp_path / "all.csv", *asked) == 0
    found = pd.DataFrame(json.loads(out.read_text(encoding="utf-8"))["rows"])
    np.testing.assert_allclose(found["se"], rates.se, rtol=1e-9)
    np.testing.assert_allclose(found["df"], rates.df)


def test_replicates_in_a_file_of_their_own(survey: pd.DataFrame, tmp_path: Path) -> None:
    """Keys in another order, implied decimals, Fay's factor, centred on the mean."""
    whole = _replicated(survey).frame.to_native().assign(id=np.arange(len(survey)))
    names = [name for name in whole if str(name).startswith("replicate_")]
    apart = whole[["id", *names]].iloc[::-1].copy()
    apart[names] = (apart[names] * 10_000).round().astype(np.int64)
    whole.drop(columns=names).to_csv(tmp_path / "survey.csv", index=False)
    apart.to_csv(tmp_path / "weights.csv", index=False)
    declared = sr.ReplicateWeights(names, "fay", fay=0.3, centre="replicate-mean")
    design = sr.SampleDesign(whole, weight="wt", replicates=declared)
    rates = sr.estimate_rates(design, "cold_home", success=["often", "always"], by="tenure")
    out = tmp_path / "rates.json"
    asked = [
        *["--weight", "wt", "--replicates", "replicate_?", "--replicates", "replicate_??"],
        *["--scheme", "fay", "--fay", 0.3, "--centre", "replicate-mean"],
        *["--replicate-decimals", 4, "--replicate-file", tmp_path / "weights.csv", "--key", "id"],
    ]
    question = [*QUESTION, "--by", "tenure", "--out-rates", out]
    assert run("compare", tmp_path / "survey.csv", *asked, *question) == 0
    found = pd.DataFrame(json.loads(out.read_text(encoding="utf-8"))["rows"])
    np.testing.assert_allclose(found["se"], rates.se, rtol=1e-4)
