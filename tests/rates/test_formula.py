"""A formula is data: what is allowed means what it says, and nothing else ever reaches patsy."""

from __future__ import annotations

import re

import numpy as np
import pandas as pd
import patsy
import pytest
from hypothesis import given
from hypothesis import strategies as st

import svyrates as sr
from svyrates.design.columns import open_frame
from svyrates.rates.formula import FUNCTIONS, parse_formula
from svyrates.rates.model_matrix import build_matrix, read_model_columns


@pytest.fixture
def data(rng: np.random.Generator) -> pd.DataFrame:
    n = 60
    return pd.DataFrame(
        {
            "y": rng.integers(0, 2, n),
            "a": rng.normal(size=n),
            "b": rng.uniform(1.0, 5.0, n),
            "g": rng.choice(["p", "q", "r"], n),
            "h": rng.choice(["s", "t"], n),
            "k": rng.integers(1, 4, n),
        }
    )


ALLOWED = [
    "y ~ a",
    "y ~ a + b + g",
    "y ~ a * g - a",
    "y ~ (a + b + g) ** 2",
    "y ~ a + g:h",
    "y ~ a*b:g",
    "y ~ a/g",
    "y ~ 0 + g",
    "y ~ g - 1",
    "y ~ 1 + a",
    "y ~ C(k)",
    'y ~ C(g, Treatment("q"))',
    "y ~ C(g, Treatment(reference='r')) + a",
    "y ~ I(a**2) + I((a + b)*2.5/b - -a)",
    "y ~ I(2*a**2) + I(-b**2) + I(a - b - 1)",
    "y ~ I(b**2**0.5) + I(2**-b)",
    "y ~ log(b) + exp(a) + sqrt(b + 1)",
    "y ~ center(a) + standardize(b)",
    "y ~ bs(b, df=4) + cr(a, df=3)",
    "y ~ bs(b, df=5, degree=2)",
]


@pytest.mark.parametrize("text", ALLOWED)
def test_allowed_formulas_mean_what_patsy_means(text: str, data: pd.DataFrame) -> None:
    parsed = parse_formula(text)
    columns = read_model_columns(open_frame(data), parsed.columns, None, [])
    found = build_matrix(parsed, columns, np.arange(len(data)))
    names = patsy.EvalEnvironment([{"log": np.log, "exp": np.exp, "sqrt": np.sqrt}])
    expected = patsy.dmatrix(text.partition("~")[2], data, eval_env=names)
    np.testing.assert_allclose(found.matrix, np.asarray(expected), rtol=1e-12, atol=1e-12)
    assert parsed.outcome == "y"
    slices = expected.design_info.term_name_slices
    assert list(found.terms.values()) == [s for n, s in slices.items() if n != "Intercept"]


ATTACKS = [
    "y ~ __import__('os').system('true')",
    "y ~ a.__class__",
    "y ~ a[0]",
    "y ~ (lambda: 0)()",
    "y ~ [x for x in a]",
    "y ~ I(__import__('os'))",
    "y ~ C(g, __import__('os'))",
    "y ~ eval('a')",
    "y ~ np.log(b)",
    "y ~ Q('a')",
    "y ~ open('file')",
    "y ~ print(a)",
    "y ~ exec(a)",
    "y ~ log(b, a)",
    "y ~ bs(b, df=a)",
    "y ~ bs(b, knots=(1, 2))",
    "y ~ C(g, Sum)",
    "y ~ C(g, Treatment(a))",
    "y ~ 'a'",
    "y ~ a @ b",
    "y ~ a if b else g",
    "y ~ a or b",
    "y ~ a; b",
    "y ~ a\n+ import os",
    "y ~ {a}",
    "y ~ 2",
    "y ~ a ** b",
    "y ~ a ** 99",
    "y ~ a +",
    "y ~ + a",
    "y ~ (a",
    "y ~ a)",
    "y ~ a b",
    "y ~ `a",
    "y ~ ``",
    "y ~",
    "~ a",
    "a + b",
    "y ~ a ~ b",
    "y + a ~ b",
    "log(y) ~ a",
    "y ~ 1",
    "y ~ " + "(" * 200 + "a" + ")" * 200,
    "y ~ " + "a + " * 4000 + "b",
    "y ~ bs(b, df=900)",
    "y ~ \x00a",
    "y ~ a # b",
    "y ~ a \\ b",
]


@pytest.mark.parametrize("text", ATTACKS, ids=range(len(ATTACKS)))
def test_everything_else_is_refused_in_words(text: str) -> None:
    with pytest.raises(sr.QuestionError, match="formula"):
        parse_formula(text)


GREEDY = {
    "y ~ " + "*".join(f"a{i}" for i in range(8)): "more than 200 terms",
    "y ~ " + "*".join(f"a{i}" for i in range(400)): "more than 200 terms",
    "y ~ (" + "+".join(f"a{i}" for i in range(20)) + ")**3": "more than 200 terms",
    "y ~ (a + b):(" + "+".join(f"a{i}" for i in range(101)) + ")": "more than 200 terms",
    "y ~ " + "+".join(f"a{i}" for i in range(201)): "more than 200 terms",
    "y ~ I(a" + "+a" * 1_500 + ")": "more than 200 terms",
    "y ~ I(" + "-" * 1_000 + "a)": "too many levels",
    "y ~ I(a*1e999)": "the number 1e999, which is too large",
}


@pytest.mark.parametrize(("text", "message"), GREEDY.items(), ids=range(len(GREEDY)))
def test_what_would_never_end_is_refused(text: str, message: str) -> None:
    with pytest.raises(sr.QuestionError, match=message):
        parse_formula(text)


@pytest.mark.parametrize(
    "text",
    ["y ~ bs(b, df=1)", "y ~ I(a + (0-8)**0.5)", "y ~ I(b + 9**9**9)", "y ~ I(b + 1/0)",
     'y ~ C(g, Treatment("never"))', "y ~ center(g)"],
)  # fmt: skip
def test_what_cannot_be_built_is_said(text: str, data: pd.DataFrame) -> None:
    parsed = parse_formula(text)
    columns = read_model_columns(open_frame(data), parsed.columns, None, [])
    with pytest.raises(sr.QuestionError, match=r"cannot be built: .|infinite or undefined"):
        build_matrix(parsed, columns, np.arange(len(data)))


def test_as_many_terms_as_are_allowed_can_be_built(data: pd.DataFrame) -> None:
    wide = pd.DataFrame({f"a{i}": data["a"] for i in range(200)})
    parsed = parse_formula("y ~ " + " + ".join(wide))
    columns = read_model_columns(open_frame(wide), parsed.columns, None, [])
    assert build_matrix(parsed, columns, np.arange(60)).matrix.shape == (60, 201)
    sums = parse_formula("y ~ I(" + " + ".join(["a"] * 200) + ")")
    columns = read_model_columns(open_frame(data), sums.columns, None, [])
    built = build_matrix(sums, columns, np.arange(60))
    np.testing.assert_allclose(built.matrix[:, 1], 200 * data["a"])


def test_columns_are_counted_before_they_are_made() -> None:
    labels = pd.DataFrame({"g": np.arange(60).astype(str), "h": np.arange(60).astype(str)})
    parsed = parse_formula("y ~ g * h")
    columns = read_model_columns(open_frame(labels), parsed.columns, None, [])
    with pytest.raises(sr.QuestionError, match="makes 3,600 columns, more than 1,000"):
        build_matrix(parsed, columns, np.arange(60))


def test_not_even_text() -> None:
    with pytest.raises(sr.QuestionError, match="A formula is text"):
        parse_formula(3)


# What a rebuilt formula may hold: our names for columns, the listed functions, numbers, labels.
WORDS = {*FUNCTIONS, "Treatment", "df", "degree"}
PIECES = st.sampled_from(
    ["a", "b", "y", "`odd name`", "`__import__('os')`", "__import__", "os", ".", "(", ")", "+", "-",
     "*", "**", "/", ":", ",", "=", "0", "1", "2", "3.5", "'x'", '"y"', "C", "I", "log", "bs",
     "Treatment", "df", "lambda", "[", "]", "~", "eval", "@", "#", "\\", "\n", "`"]
)  # fmt: skip


@given(st.lists(PIECES, min_size=1, max_size=14))
def test_only_our_own_words_reach_patsy(pieces: list[str]) -> None:
    try:
        parsed = parse_formula("y ~ " + " ".join(pieces))
    except sr.QuestionError:
        return
    bare = re.sub(r"'(?:[^'\\]|\\.)*'|\"(?:[^\"\\]|\\.)*\"", "", parsed.right)
    for word in re.findall(r"[^\W\d]\w*", bare):
        assert word in WORDS or re.fullmatch(r"x\d+|e", word), (pieces, parsed.right)
    assert not set(bare) & set(".[]@#\\\n`;{}~") - {"."}
    assert not re.search(r"[^\d]\.|\.[^\d]", bare)


def test_labels_of_a_reference_level_are_written_by_repr(data: pd.DataFrame) -> None:
    """A level may hold anything; it stays a text."""
    hostile = "q') + __import__('os"
    data["g"] = data["g"].replace("q", hostile)
    parsed = parse_formula(f'y ~ C(g, Treatment("{hostile}"))')
    columns = read_model_columns(open_frame(data), parsed.columns, None, [])
    found = build_matrix(parsed, columns, np.arange(len(data)))
    assert found.matrix.shape == (60, 3)
    assert found.names[1:] == ("g = p", "g = r")


def test_columns_may_have_any_name(data: pd.DataFrame) -> None:
    names = {"a": "__import__('os')", "b": "log", "g": "C", "h": "x0"}
    odd = data.rename(columns=names)
    parsed = parse_formula("y ~ `__import__('os')` + log + C + x0 + C(C)")
    assert parsed.columns == ("__import__('os')", "log", "C", "x0")
    columns = read_model_columns(open_frame(odd), parsed.columns, None, [])
    found = build_matrix(parsed, columns, np.arange(len(odd)))
    expected = patsy.dmatrix("a + b + g + h + C(g)", data)
    np.testing.assert_allclose(found.matrix, np.asarray(expected))
    assert "__import__('os')" in found.names


def test_unknown_values_and_levels_that_do_not_occur(data: pd.DataFrame) -> None:
    data["g"] = pd.Categorical(data["g"], ["r", "q", "p", "never"])
    data.loc[3, "g"], data.loc[5, "a"] = None, np.nan
    parsed = parse_formula("y ~ a + g")
    columns = read_model_columns(open_frame(data), parsed.columns, None, [])
    assert np.flatnonzero(~columns.known).tolist() == [3, 5]
    found = build_matrix(parsed, columns, np.flatnonzero(columns.known))
    assert found.names == ("Intercept", "g = q", "g = p", "a")
    changed = found.with_level("x1", "p")
    assert (changed[:, 2] == 1).all()
    assert (changed[:, 1] == 0).all()


def test_splines_and_centring_remember_where_they_were_fitted(data: pd.DataFrame) -> None:
    parsed = parse_formula("y ~ g + center(a) + bs(b, df=4)")
    columns = read_model_columns(open_frame(data), parsed.columns, None, [])
    found = build_matrix(parsed, columns, np.arange(len(data)))
    changed = found.with_level("x0", "q")
    np.testing.assert_allclose(changed[:, 3:], found.matrix[:, 3:], rtol=1e-12)


def test_terms_that_are_undefined_are_refused(data: pd.DataFrame) -> None:
    parsed = parse_formula("y ~ log(a)")
    columns = read_model_columns(open_frame(data), parsed.columns, None, [])
    with pytest.raises(sr.QuestionError, match=r"infinite or undefined in \d+ records"):
        build_matrix(parsed, columns, np.arange(len(data)))
    parsed = parse_formula("y ~ log(g)")
    columns = read_model_columns(open_frame(data), parsed.columns, None, [])
    with pytest.raises(sr.QuestionError, match="cannot be built"):
        build_matrix(parsed, columns, np.arange(len(data)))
