"""The command line: the same numbers as Python, and plain errors."""

from __future__ import annotations

import json
import subprocess
import sys
import warnings
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import svyrates as sr
from svyrates.command import main
from svyrates.command.files import read_columns
from svyrates.errors import DataFileError
from tests.command.asked import DESIGN, QUESTION, run
from tests.command.xport import xport

pytestmark = pytest.mark.wheel


def _expected(survey: pd.DataFrame, versus: object = None, **options: object) -> pd.DataFrame:
    text = survey.astype({"tenure": object, "sex": object})
    design = sr.SampleDesign(text, weight="wt", strata="district", clusters="block")
    rates = sr.estimate_rates(
        design, "cold_home", success=["often", "always"], by="tenure", **options
    )
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
        return sr.compare_rates(rates, versus).to_frame()


WRITERS: dict[str, Callable[[pd.DataFrame, Path], object]] = {
    "s.csv": lambda data, path: data.to_csv(path, index=False),
    "s.csv.gz": lambda data, path: data.to_csv(path, index=False),
    "s.csv.bz2": lambda data, path: data.to_csv(path, index=False),
    "s.csv.xz": lambda data, path: data.to_csv(path, index=False),
    "s.csv.zip": lambda data, path: data.to_csv(path, index=False),
    "s.TSV": lambda data, path: data.to_csv(path, index=False, sep="\t"),
    "s.parquet": lambda data, path: data.to_parquet(path),
}


@pytest.mark.parametrize("name", WRITERS)
def test_every_kind_of_file(survey: pd.DataFrame, name: str, tmp_path: Path) -> None:
    if name.endswith("parquet"):
        pytest.importorskip("pyarrow")
    WRITERS[name](survey.astype({"tenure": object}), tmp_path / name)
    out = tmp_path / "new" / "gaps.json"
    assert run("compare", tmp_path / name, *DESIGN, *QUESTION, "--by", "tenure", "--out", out) == 0
    found = pd.DataFrame(json.loads(out.read_text(encoding="utf-8"))["rows"])
    expected = _expected(survey)
    assert found["group"].tolist() == expected["group"].tolist()
    np.testing.assert_allclose(found["difference"], expected["difference"], rtol=1e-12)
    np.testing.assert_allclose(found["se"], expected["se"], rtol=1e-12)
    assert found["verdict"].tolist() == expected["verdict"].tolist()


@pytest.mark.parametrize("name", ["s.csv", "s.csv.gz", "s.csv.zip"])
def test_a_large_file_is_read_the_same(
    survey: pd.DataFrame, name: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Large files are read through a counter that moves the progress bar."""
    survey.to_csv(tmp_path / name, index=False)
    plain = read_columns(tmp_path / name, ["wt", "damp"])
    monkeypatch.setattr("svyrates.command.files._WORTH_PROGRESS", 0)
    pd.testing.assert_frame_equal(read_columns(tmp_path / name, ["wt", "damp"]), plain)


def test_xport_file(tmp_path: Path) -> None:
    """Zeros, missing values and text as agencies publish them."""
    columns = {"W": [1.5, 2.0, 0.0, 4.25], "Y": [0.0, 1.0, 1.0, None], "G": ["a", "b", "a", "b"]}
    (tmp_path / "data.xpt").write_bytes(xport(columns))  # type: ignore[arg-type]
    frame = read_columns(tmp_path / "data.xpt", ["W", "Y", "G"])
    assert frame["W"].tolist() == [1.5, 2.0, 0.0, 4.25]
    assert frame["Y"].tolist()[:3] == [0.0, 1.0, 1.0]
    assert frame["Y"].isna().tolist() == [False, False, False, True]
    assert frame["G"].tolist() == ["a", "b", "a", "b"]
    ask = ["--outcome", "Y", "--by", "G", "--weight", "W"]
    assert run("compare", tmp_path / "data.xpt", *ask) == 0


@pytest.mark.parametrize(
    ("text", "versus"),
    [
        ("owner", "owner"),
        ("everyone", sr.EVERYONE),
        ("everyone else", sr.EVERYONE_ELSE),
        ("0.25", 0.25),
    ],
)
def test_versus(
    survey: pd.DataFrame, file: Path, text: str, versus: object, tmp_path: Path
) -> None:
    out = tmp_path / "gaps.csv"
    ask = [*QUESTION, "--by", "tenure", "--versus", text, "--out", out]
    assert run("compare", file, *DESIGN, *ask) == 0
    found = pd.read_csv(out)
    expected = _expected(survey, versus)
    for name in ("difference", "low", "p", "simple_p", "variance_ratio"):
        np.testing.assert_allclose(found[name], expected[name], rtol=1e-12)


def test_where(survey: pd.DataFrame, file: Path, tmp_path: Path) -> None:
    out = tmp_path / "rates.csv"
    ask = [
        *QUESTION,
        "--by",
        "tenure",
        "--where",
        "sex=woman",
        "--where",
        "damp=1",
        "--out-rates",
        out,
    ]
    assert run("compare", file, *DESIGN, *ask, "--where", "thermostat") == 0
    inside = (survey["sex"] == "woman") & (survey["damp"] == 1) & (survey["thermostat"] == 1)
    design = sr.SampleDesign(
        survey.astype({"tenure": object}), weight="wt", strata="district", clusters="block"
    )
    expected = sr.estimate_rates(
        design, "cold_home", success=["often", "always"], by="tenure", where=inside.to_numpy()
    ).to_frame()
    found = pd.read_csv(out)
    np.testing.assert_allclose(found["se"], expected["se"], rtol=1e-12)
    assert found["n"].tolist() == expected["n"].tolist()


def test_output_at_a_glance(file: Path, capsys: pytest.CaptureFixture[str]) -> None:
    ask = [*QUESTION, "--by", "tenure", "--percent", "--explain"]
    assert run("compare", file, *DESIGN, *ask) == 0
    shown = capsys.readouterr()
    assert max(map(len, shown.out.splitlines())) <= 80
    for part in (
        "Sample design",
        "degrees of freedom",
        "%",
        "points",
        "A difference between groups",
    ):
        assert part in shown.out
    assert shown.err.startswith("Warning: The simple independent-sample formula would mislead")
    assert "simplefilter" not in shown.err


def test_demo(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    folder = tmp_path / "out" / "here"
    assert run("demo", "--out", folder) == 0
    shown = capsys.readouterr()
    names = sorted(path.name for path in folder.iterdir())
    assert shown.out.rstrip().splitlines()[-len(names) :] == [f"  {name}" for name in names]
    assert f"lie in {folder}" in shown.out
    assert "false-alarm" in shown.out
    assert "would mislead" in shown.err
    assert len(pd.read_csv(folder / "survey.csv")) == len(sr.demo_survey(wave="2024"))
    json.loads((folder / "damp-comparisons.json").read_text(encoding="utf-8"))


def _write(path: Path, content: bytes | str) -> Path:
    path.write_bytes(content.encode("latin-1") if isinstance(content, str) else content)
    return path


GOOD = "w,s,c,g,y\n" + "".join(
    f"{i % 3 + 1},{i % 2},{i % 5},{'ab'[i % 2]},{i % 4 % 2}\n" for i in range(40)
)
ASK = ["--outcome", "y", "--by", "g"]

BAD: list[tuple[str, bytes | str, list[str], str]] = [
    ("e.csv", b"", ASK, "the file is empty"),
    ("h.csv", "g,y\n", ASK, "header but no records"),
    ("x.sav", "a", ASK, "the suffix '.sav' is not one that can be read"),
    ("noname", "a", ASK, "the suffix '' is not one"),
    ("g.csv", GOOD, ["--outcome", "yy", "--by", "g"], r"no column 'yy' (did you mean 'y'?)"),
    ("d.csv", "y,y\n1,2\n", ASK, "columns of the same name: 'y'"),
    ("s.csv", GOOD.replace(",", ";"), ASK, "looks separated by ';': use --separator"),
    ("l.csv", "g,y\né,1\nb,0\n", ASK, "--encoding latin-1"),
    ("z.csv.gz", b"\x1f\x8b\x08\x00broken", ASK, "cannot be read as a table"),
    ("t.csv.gz", GOOD, ASK, "cannot be read as a table"),
    ("p.parquet", b"PAR1 not really", ASK, "cannot be read as Parquet"),
    ("p.xpt", b"HEADER RECORD******* no", ASK, "cannot be read as an XPORT file"),
    ("r.csv", b'g,y\n"a,1\nb,0\n', ASK, "cannot be read as a table"),
    ("g.csv", GOOD, [*ASK, "--weight", "g"], "weight 'g' holds"),
    ("n.csv", GOOD.replace("3,", "-3,"), [*ASK, "--weight", "w"], "weight 'w' is negative in"),
    ("g.csv", GOOD, [*ASK, "--strata", "c", "--clusters", "c"], "5 strata hold a single cluster"),
    ("g.csv", GOOD, [*ASK, "--single-cluster-strata", "skip"], "single_cluster_strata must be"),
    ("g.csv", GOOD, [*ASK, "--success", "7"], "no record has '7'"),
    ("g.csv", GOOD, [*ASK, "--interval", "exact"], "interval must be one of"),
    ("g.csv", GOOD, [*ASK, "--measure", "gap"], "measure must be one of"),
    ("g.csv", GOOD, [*ASK, "--df", "many"], "df must be one of"),
    ("g.csv", GOOD, [*ASK, "--level", "95"], "level must be a number between 0 and 1"),
    ("g.csv", GOOD, [*ASK, "--versus", "c"], "versus='c' is not a group"),
    ("g.csv", GOOD, [*ASK, "--where", "g=zz"], "no record has 'zz'"),
    ("g.csv", GOOD, [*ASK, "--where", "g="], "give a value after '='"),
    ("g.csv", GOOD, [*ASK, "--where", "c"], "must hold true and false"),
    ("g.csv", GOOD, [*ASK, "--out", "x.xlsx"], "results are written as '.csv' or '.json'"),
    ("g.csv", GOOD, [*ASK, "--out", "/dev/null/no/x.csv"], "cannot be written"),
    ("g.csv", GOOD, ["--outcome", "y", "--out", "x.csv"], "there are none without --by"),
    ("g.csv", GOOD, [*ASK, *["--margin", "1"] * 3], "--margin was given 3 times"),
    ("g.csv", GOOD, [*ASK, "--multiplicity", "tukey"], "multiplicity must be one of"),
    ("g.csv", GOOD, [*ASK, "--replicates", "w"], "--replicates and --scheme go together"),
    ("g.csv", GOOD, [*ASK, "--key", "w"], "--replicate-file and --key go together"),
    ("g.csv", GOOD, [*ASK, "--key", "w", "--replicate-file", "g.csv"], "needs --replicates"),
    ("g.csv", GOOD, [*ASK, "--replicates", "z*", "--scheme", "bootstrap"], "no column 'z*'"),
    ("g.csv", GOOD, [*ASK, "--replicates", "w", "--scheme", "bootstrap"], "name 1 columns"),
    ("g.csv", GOOD, [*ASK, "--replicates", "[wc]", "--scheme", "jack"], "scheme must be one of"),
    ("g.csv", GOOD, [*ASK, "--separator", ";;"], "separator must be one character"),
    ("g.csv", GOOD, [*ASK, "--encoding", "klingon"], "there is no encoding 'klingon'"),
]


@pytest.mark.parametrize(("name", "content", "ask", "message"), BAD)
def test_error(
    name: str,
    content: bytes | str,
    ask: list[str],
    message: str,
    tmp_path: Path,
    capsys: pytest.CaptureFixture[str],
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    if name.endswith("parquet"):
        pytest.importorskip("pyarrow")
    monkeypatch.chdir(tmp_path)
    assert run("compare", _write(tmp_path / name, content), *ask) == 2
    shown = capsys.readouterr()
    assert shown.err.startswith("Error: ")
    assert message in shown.err
    assert "Traceback" not in shown.err


def test_missing_file_and_folder(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    _write(tmp_path / "survey.csv", GOOD)
    assert run("compare", tmp_path / "survy.csv", *ASK) == 2
    assert "Did you mean 'survey.csv'?" in capsys.readouterr().err
    assert run("compare", tmp_path, *ASK) == 2
    assert "this is a folder" in capsys.readouterr().err
    assert run("compare", tmp_path / "nowhere" / "a.csv", *ASK) == 2
    assert "there is no such file" in capsys.readouterr().err


def test_hostile_names_are_harmless(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    label = "\x1b[31m=cmd|' /C calc'!A0"
    rows = "".join(f'"{label if i % 2 else "plain"}",{i % 3 % 2}\n' for i in range(60))
    path = _write(tmp_path / "s.csv", f'"<b>g\u00ad",y\n{rows}')
    out = tmp_path / "o.csv"
    with pytest.raises(SystemExit):
        main(
            [
                "compare",
                str(path),
                "--outcome",
                "y",
                "--by",
                "<b>g\u00ad",
                "--encoding",
                "latin-1",
                "--out",
                str(out),
            ]
        )
    shown = capsys.readouterr()
    assert "\x1b" not in shown.out + shown.err
    assert "=cmd" in shown.out
    assert all(not cell.startswith(("=", "\x1b=")) for cell in out.read_text().split(","))


def test_an_unforeseen_error_shows_no_data(
    file: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    def fail(*_: object, **__: object) -> None:
        raise KeyError("a respondent's answer")

    monkeypatch.setattr("svyrates.command.compare.estimate_rates", fail)
    assert run("compare", file, *DESIGN, *QUESTION) == 1
    shown = capsys.readouterr()
    assert shown.err.startswith("Error: internal error: KeyError at test_command.py:")
    assert "respondent" not in shown.err


def test_wrong_usage_ends_with_two(capsys: pytest.CaptureFixture[str]) -> None:
    assert run("compare") == 2
    assert run("compare", "a.csv", "--outcom", "y") == 2
    assert run("nothing") == 2
    assert "Traceback" not in capsys.readouterr().err


def test_module_and_version() -> None:
    command = [sys.executable, "-m", "svyrates", "--version"]
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    assert done.stdout.strip() == f"svyrates {sr.__version__}"


def test_help_stays_light() -> None:
    code = (
        "import sys\nfrom svyrates.command import main\n"
        "try:\n    main(['--help'])\nexcept SystemExit:\n    pass\n"
        "print([name for name in ('pandas', 'numpy', 'scipy') if name in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "[]"


@settings(max_examples=60, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    content=st.binary(min_size=1, max_size=400),
    suffix=st.sampled_from([".csv", ".tsv", ".csv.gz", ".csv.zip", ".csv.bz2", ".parquet", ".xpt"]),
    header=st.sampled_from([b"", b"a,b\n", b"PAR1", b"\x1f\x8b", b"PK\x03\x04", b"HEADER RECORD"]),
)
def test_any_bytes_end_in_a_frame_or_a_plain_error(
    content: bytes, suffix: str, header: bytes, tmp_path: Path
) -> None:
    path = _write(tmp_path / f"fuzz{suffix}", header + content)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", pd.errors.DtypeWarning)
            frame = read_columns(path, ["a"])
    except DataFileError:
        return
    assert list(frame) == ["a"]
