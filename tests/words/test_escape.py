"""Text of unknown origin in every place it may be printed in."""

from __future__ import annotations

import html
import re
import unicodedata

import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from svyrates.words import display_width, for_html, for_terminal, shorten
from svyrates.words.escape import for_csv, for_latex, for_markdown

ANYTHING = st.text(st.characters(exclude_categories=())) | st.text("\\|`*_[]#~&<>{}$%^\"'=+-@ \n")


@given(ANYTHING)
@example("\x1b]0;title\x07\x9b2J")
@example("user\u202egnp.exe\u2066\u2069\u200f")
@example("a\u0085b\u2028c\u2029d\x0be\x0cf\x1cg")
@example("\ud800")
def test_nothing_moves_the_cursor_or_turns_the_text(text: str) -> None:
    shown = for_terminal(text)
    assert not {unicodedata.category(each) for each in shown} & {"Cc", "Cf", "Cs", "Zl", "Zp"}
    assert len(shown.splitlines()) <= 1
    assert for_terminal(shown) == shown
    assert shown.encode("utf-8").decode("utf-8") == shown


@given(st.text(st.characters(categories=("L", "M", "N", "P", "S"))))
@example("Ærøskøbing 日本語 עברית e\u0301 – 50 % <b>")
def test_readable_text_is_left_alone(text: str) -> None:
    assert for_terminal(text) == text


@pytest.mark.parametrize(
    ("text", "shown"),
    [
        ("\x1b[31mred\x1b[0m", "�[31mred�[0m"),
        ("user\u202eexe", "user�exe"),
        ("two\nlines", "two␤lines"),
        ("a\tb", "a b"),
        ("soft\u00adhyphen\u200b\ufeff", "softhyphen"),
        (12.5, "12.5"),
        (None, "None"),
    ],
)
def test_what_a_terminal_shows(text: object, shown: str) -> None:
    assert for_terminal(text) == shown


@given(ANYTHING)
@example("<script>alert('x')</script>")
@example('" onmouseover="alert(1)')
@example("&lt;&amp;")
def test_html_holds_the_text_and_no_markup(text: str) -> None:
    escaped = for_html(text)
    assert not set(escaped) & set("<>\"'")
    assert html.unescape(escaped) == for_terminal(text)


@given(ANYTHING)
@example("a|b\\|c\\")
@example("<script>&lt;</script>")
@example("[x](javascript:alert(1)) ![y](z) `code` **b** ~~s~~")
def test_markdown_holds_the_text_and_no_markup(text: str) -> None:
    escaped = for_markdown(text)
    marks = re.escape("\\`*_[]|#~")
    assert re.fullmatch(rf"(?:\\[{marks}]|&(?:amp|lt|gt);|[^{marks}&<>])*", escaped)
    assert html.unescape(re.sub(r"\\(.)", r"\1", escaped)) == for_terminal(text)


# What a reader of the printed page sees for each command that may stand in escaped text.
_PRINTED = {
    "textbackslash": "\\", "textasciitilde": "~", "textasciicircum": "^", "textless": "<",
    "textgreater": ">", "textbar": "|", "geq": "≥", "infty": "∞", "times": "×", "surd": "√",
}  # fmt: skip
_TOKEN = re.compile(
    r"\\(?P<mark>[&%$#_{}])|\\(?P<name>text[a-z]+)\{\}|\$\\(?P<maths>[a-z]+)\$"
    r"|(?P<minus>\$-\$)|(?P<dash>--)|(?P<plain>[^\\&%$#_{}~^<>|])"
)


def _printed(latex: str) -> str:
    text, at = "", 0
    while at < len(latex):
        token = _TOKEN.match(latex, at)
        assert token is not None, f"{latex[at]!r} stands unescaped in {latex!r}"
        at = token.end()
        name = token["name"] or token["maths"]
        if name:
            text += _PRINTED[name]
        else:
            text += token["mark"] or token["plain"] or ("−" if token["minus"] else "–")
    return text


@given(ANYTHING)
@example(r"50% & \textbf{x} $y$ #1 ~ ^ a_b {c}")
@example(r"\input{/etc/passwd}")
@example("x ≥ 3 × √2 − 1 – ∞ | <y>")
def test_latex_prints_the_text_and_runs_nothing(text: str) -> None:
    assert _printed(for_latex(text)) == for_terminal(text).replace("--", "–")


@pytest.mark.parametrize("start", list("=+-@\t\r\n") + list("＝＋－＠"), ids=repr)
def test_no_spreadsheet_takes_text_for_a_formula(start: str) -> None:
    assert for_csv(f"{start}cmd|' /C calc'!A0") == f"'{start}cmd|' /C calc'!A0"


@given(ANYTHING.filter(lambda text: not text or text[0].isalnum()))
def test_other_text_reaches_a_spreadsheet_unchanged(text: str) -> None:
    assert for_csv(text) == text


@pytest.mark.parametrize(
    ("text", "width"),
    [("", 0), ("abc", 3), ("日本語", 6), ("ﾆﾎﾝ", 3), ("한글", 4), ("Ａ", 2), ("e\u0301a\u0308", 2)],
)
def test_width_in_a_terminal(text: str, width: int) -> None:
    assert display_width(text) == width


@given(st.text(st.characters(categories=("L", "M", "N", "P", "S"))), st.integers(1, 60))
@example("x" * 100_000, 60)
@example("日本語のラベル", 4)
@example("e" + "\u0301" * 40 + "abc", 2)
def test_what_is_cut_says_so_and_fits(text: str, width: int) -> None:
    cut = shorten(text, width)
    assert display_width(cut) <= width
    if display_width(text) <= width:
        assert cut == text
    else:
        assert cut.endswith("…")
        assert text.startswith(cut[:-1])
        # Nothing more would have fitted but a wide character.
        assert display_width(cut) >= width - 1
