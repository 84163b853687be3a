"""Numbers, escaping and tables for readers."""

from __future__ import annotations

import csv
import io
import json
from fractions import Fraction
from html.parser import HTMLParser

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from svyrates.words import (
    Column,
    Table,
    count,
    display_width,
    fixed,
    for_terminal,
    join_words,
    p_value,
    percent,
    plural,
    points,
    shorten,
    significant,
)

HOSTILE = [
    "<script>alert(1)</script>",
    '"><img src=x onerror=alert(1)>',
    "\x1b[31mred\x1b[0m",
    "two\nlines\r\nand\ttabs",
    "=HYPERLINK(0)",
    "@SUM(A1)",
    "a|b*c_d`e",
    r"50% & \textbf{x} $y$ #1 ~ ^",
    "\u202eexe.txt",
    "العربية",
    "日本語のラベル",
    "é" + "́" * 30,
    "x" * 500,
    "",
    "\ud800",
]


@given(st.floats(-1e6, 1e6), st.integers(0, 6))
def test_rounding_is_half_away_from_zero(value: float, digits: int) -> None:
    """Against exact fractions of the shortest decimal text."""
    exact = Fraction(repr(value)) * 10**digits
    whole = int(abs(exact) + Fraction(1, 2)) * (1 if exact > 0 else -1)
    assert Fraction(fixed(value, digits)) == Fraction(whole, 10**digits)
    assert not fixed(value, digits).startswith("-0.0") or float(fixed(value, digits)) != 0


def test_numbers_as_readers_expect_them() -> None:
    assert [fixed(x, 2) for x in (0.125, 2.675, -0.125, -0.001)] == [
        "0.13",
        "2.68",
        "-0.13",
        "0.00",
    ]
    assert [percent(x) for x in (0.1234, 0.0005, 1.0)] == ["12.3%", "0.1%", "100.0%"]
    assert [points(x) for x in (0.034, -0.0005, 0.0)] == [
        "+3.4 points",
        "-0.1 points",
        "0.0 points",
    ]
    assert [count(x) for x in (1234567.5, 999, np.int64(1000))] == ["1,234,568", "999", "1,000"]
    assert [significant(x, 4) for x in (88.0, 1234.56, 0.00012346, 0)] == [
        "88", "1235", "0.0001235", "0",
    ]  # fmt: skip


@pytest.mark.parametrize("missing", [None, float("nan"), np.nan, pd.NA, pd.NaT])
def test_missing_is_a_dash(missing: object) -> None:
    shown = {fixed(missing, 2), percent(missing), points(missing), count(missing), p_value(missing)}
    assert shown == {"–"}


def test_infinities() -> None:
    assert (fixed(float("inf"), 1), percent(float("-inf"))) == ("∞", "-∞")


@given(st.floats(0, 1))
def test_p_value_is_never_rounded_to_certainty(p: float) -> None:
    text = p_value(p)
    assert text != "0.0000"
    assert text != "1.0000" or p == 1.0


def test_sentences() -> None:
    assert [join_words(list(text)) for text in ("", "a", "ab", "abc")] == [
        "",
        "a",
        "a and b",
        "a, b and c",
    ]
    assert (plural(1, "record"), plural(2000, "stratum", "strata")) == ("1 record", "2,000 strata")


def _table(labels: list[str]) -> Table:
    numbers = [index / 7 for index in range(len(labels))]
    return Table(
        "A title",
        (
            Column("group", "group", labels, key=True),
            Column("rate", "the rate", numbers, kind="number", show=lambda x: fixed(x, 4)),
            Column("other", "another long heading", labels),
        ),
        ("A note.",),
    )


SMALL = Table(
    "Rates",
    (
        Column("g", "group", ["a|b", "=c"], key=True),
        Column("p", "rate", [0.25, float("nan")], kind="number", show=lambda x: fixed(x, 2)),
    ),
    ("One note.",),
)


def test_golden_text() -> None:
    assert SMALL.text() == "Rates\ngroup  rate\n───────────\na|b    0.25\n=c        –\nOne note."


def test_golden_markdown() -> None:
    assert SMALL.markdown() == (
        "**Rates**\n\n| group | rate |\n| :--- | ---: |\n"
        "| a\\|b | 0.25 |\n| =c | – |\n\nOne note.\n"
    )


def test_golden_latex() -> None:
    assert SMALL.latex() == (
        "\\textbf{Rates}\n\n\\begin{tabular}{lr}\n\\hline\ngroup & rate \\\\\n\\hline\n"
        "a\\textbar{}b & 0.25 \\\\\n=c & -- \\\\\n\\hline\n\\end{tabular}\n\nOne note.\n"
    )


def test_golden_csv() -> None:
    assert SMALL.csv() == "g,p\na|b,0.25\n'=c,\n"


def test_golden_json() -> None:
    assert json.loads(SMALL.json()) == {
        "title": "Rates",
        "columns": [{"name": "g", "heading": "group"}, {"name": "p", "heading": "rate"}],
        "rows": [{"g": "a|b", "p": 0.25}, {"g": "=c", "p": None}],
        "notes": ["One note."],
    }


LABELS = st.lists(st.text(max_size=40) | st.sampled_from(HOSTILE), min_size=1, max_size=4)


@given(LABELS, st.integers(60, 200))
def test_text_fits_and_hides_no_number(labels: list[str], width: int) -> None:
    text = _table(labels).text(width)
    assert max(map(display_width, text.splitlines())) <= width
    assert all(fixed(index / 7, 4) in text for index in range(len(labels)))
    assert not any(ord(c) < 32 and c != "\n" for c in text)
    assert not set(text) & set("\u202a\u202b\u202d\u202e\u2066\u2067\u2068\u2069\x7f\x9b")


def test_too_wide_a_table_is_split_and_repeats_its_labels() -> None:
    columns = [
        Column(f"c{i}", f"column {i}", [i * 1e6], kind="number", show=lambda x: fixed(x, 4))
        for i in range(12)
    ]
    text = Table("Wide", (Column("g", "group", ["label"], key=True), *columns)).text(60)
    assert text.count("label") > 1
    assert all(fixed(i * 1e6, 4) in text for i in range(12))


class _Tags(HTMLParser):
    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.seen: set[str] = set()

    def handle_starttag(self, tag: str, attrs: object) -> None:  # noqa: ARG002
        self.open.append(tag)
        self.seen.add(tag)

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag


@given(LABELS)
def test_html_holds_its_own_tags_only(labels: list[str]) -> None:
    parser = _Tags()
    parser.feed(_table(labels).html())
    assert parser.open == []
    assert parser.seen <= {
        "style",
        "table",
        "caption",
        "thead",
        "tbody",
        "tr",
        "th",
        "td",
        "p",
        "div",
    }


def test_html_can_be_read_aloud() -> None:
    text = SMALL.html()
    assert text.count('scope="col"') == 2
    assert text.count('scope="row"') == 2
    assert "<caption>Rates</caption>" in text


@given(LABELS)
def test_csv_round_trip(labels: list[str]) -> None:
    table = _table(labels)
    rows = list(csv.DictReader(io.StringIO(table.csv(), newline="")))
    assert [float(row["rate"]) for row in rows] == [index / 7 for index in range(len(labels))]
    for row, label in zip(rows, labels, strict=True):
        assert row["group"].removeprefix("'") in (label, label.removeprefix("'"))
        assert row["group"][:1] not in set("=+-@\t\r") - {""}


@given(LABELS)
def test_json_is_json(labels: list[str]) -> None:
    text = _table(labels).json()
    assert [row["rate"] for row in json.loads(text)["rows"]] == [i / 7 for i in range(len(labels))]
    text.encode("utf-8")


@given(LABELS)
def test_markdown_and_latex_keep_their_shape(labels: list[str]) -> None:
    table = _table(labels)
    rows = [line for line in table.markdown().splitlines() if line.startswith("| ")]
    assert len(rows) == len(labels) + 2
    assert {line.replace("\\\\", "").replace("\\|", "").count("|") for line in rows} == {4}
    for line in table.latex().splitlines():
        if line.endswith(" \\\\"):
            assert line.replace("\\&", "").count("&") == 2


@pytest.mark.parametrize("text", HOSTILE)
def test_terminal_text_is_harmless(text: str) -> None:
    shown = for_terminal(text)
    assert "\n" not in shown
    assert "\x1b" not in shown
    assert display_width(shorten(shown, 10)) <= 10
    shown.encode("utf-8")
