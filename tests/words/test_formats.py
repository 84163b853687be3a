"""Tables as markup and as data, read back by readers that are not ours."""

from __future__ import annotations

import csv
import io
import json
import math
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pandas as pd
from hypothesis import example, given
from hypothesis import strategies as st

from svyrates.words import Column, Table, fixed, for_terminal
from svyrates.words.tabular import Tabular

HOSTILE = [
    "</td></tr></table><script>alert(1)</script>",
    '" onload="x',
    "=cmd|' /C calc'!A0",
    "a|b\\|c",
    "line\r\nbreak\rand\nmore",
    'quote " and , comma',
    "\x1b[2J\u202e",
    "[18, 30)",
    "*starred",
    "&amp; \\\\ \\& % {",
    "x" * 3000,
    "日本語 e\u0301",
    "",
]
LABELS = st.lists(st.text() | st.sampled_from(HOSTILE), min_size=1, max_size=5)
VALUES = st.none() | st.floats() | st.integers(-(2**60), 2**60) | st.booleans()


def _table(labels: list[str]) -> Table:
    rates = [k / 7 for k in range(len(labels))]
    return Table(
        labels[0],
        (
            Column("group", labels[-1], labels, key=True),
            Column("rate", "rate", rates, kind="number", show=lambda x: fixed(x, 3)),
        ),
        (labels[-1],),
    )


def _values(values: list[object]) -> Table:
    return Table("T", (Column("v", "v", values), Column("w", "w", values)))


class _Reader(HTMLParser):
    """Tags with their attributes and the text of every element; fails if tags cross."""

    def __init__(self) -> None:
        super().__init__()
        self.path: list[str] = []
        self.attributes: list[tuple[str, str, str | None]] = []
        self.texts: list[tuple[str, str]] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.path.append(tag)
        self.attributes += [(tag, name, value) for name, value in attrs]
        self.texts.append((tag, ""))

    def handle_endtag(self, tag: str) -> None:
        assert self.path.pop() == tag

    def handle_data(self, data: str) -> None:
        if self.path and self.path[-1] in ("caption", "th", "td", "p"):
            self.texts[-1] = (self.path[-1], self.texts[-1][1] + data)
        else:
            assert not data.strip() or self.path[-1] == "style"

    def of(self, *tags: str) -> list[str]:
        return [text for tag, text in self.texts if tag in tags]


@given(LABELS)
@example(HOSTILE)
def test_html_reads_back_as_it_was(labels: list[str]) -> None:
    reader = _Reader()
    reader.feed(_table(labels).html())
    reader.close()
    assert reader.path == []
    rates = [fixed(k / 7, 3) for k in range(len(labels))]
    shown = list(map(for_terminal, labels))
    assert reader.of("caption") == [shown[0]]
    assert reader.of("th") == [shown[-1], "rate", *shown]
    assert reader.of("td") == rates
    assert reader.of("p") == [shown[-1]]
    # Every attribute is one of ours, and every header says what it heads.
    assert {name for _, name, _ in reader.attributes} == {"class", "scope"}
    scopes = [value for _, name, value in reader.attributes if name == "scope"]
    assert scopes == ["col"] * 2 + ["row"] * len(labels)


def test_golden_html() -> None:
    table = Table(
        "Rates & more",
        (
            Column("g", "group", ["<b>"], key=True),
            Column("p", "rate", [0.25], kind="number", show=lambda x: fixed(x, 2)),
            Column("s", "said", ["'yes'"]),
        ),
        ("One note.",),
    )
    style, _, markup = table.html().partition("</style>")
    assert style.startswith("<style>")
    assert "<" not in style.removeprefix("<style>")
    number = 'class="rates-number"'
    assert markup.replace("\n", "") == (
        '<div class="rates-frame"><table class="rates-table"><caption>Rates &amp; more</caption>'
        f'<thead><tr><th scope="col">group</th><th scope="col" {number}>rate</th>'
        '<th scope="col">said</th></tr></thead>'
        f'<tbody><tr><th scope="row">&lt;b&gt;</th><td {number}>0.25</td>'
        "<td>&#x27;yes&#x27;</td></tr></tbody></table></div>"
        '<p class="rates-notes">One note.</p>'
    )


def _unescaped(line: str, mark: str) -> int:
    """Count marks that no backslash takes away, reading as a parser does, from the left."""
    n_marks, skip = 0, False
    for each in line:
        n_marks += each == mark and not skip
        skip = each == "\\" and not skip
    return n_marks


@given(LABELS)
@example(HOSTILE)
def test_markdown_rows_have_the_same_number_of_cells(labels: list[str]) -> None:
    title, blank, *lines = _table(labels).markdown().split("\n")
    assert (title[:2], title[-2:], blank) == ("**", "**", "")
    rows = lines[: len(labels) + 2]
    assert [_unescaped(row, "|") for row in rows] == [3] * len(rows)
    assert lines[len(labels) + 2] == ""
    assert rows[1] == "| :--- | ---: |"


@given(LABELS)
@example(HOSTILE)
def test_latex_rows_have_the_same_number_of_cells(labels: list[str]) -> None:
    head, body = _table(labels).latex().split("\\begin{tabular}{lr}\n\\hline\n")
    assert head.startswith("\\textbf{")
    rows = [row for row in body.split("\\hline\n") if row.endswith(" \\\\\n")]
    lines = "".join(rows).splitlines()
    assert len(lines) == len(labels) + 1
    assert [_unescaped(line, "&") for line in lines] == [1] * len(lines)
    # A bracket or a star there would be read as an argument of the end of the row before.
    assert not [line for line in lines if line.startswith(("[", "*"))]


def test_latex_ages_in_brackets_stay_in_their_cell() -> None:
    ages = Column("age", "age", ["[18, 30)", "30+", "*"], key=True)
    assert Table("T", (ages,)).latex().splitlines()[6:9] == [
        "{}[18, 30) \\\\",
        "30+ \\\\",
        "{}* \\\\",
    ]


@given(LABELS)
@example(HOSTILE)
@example(["a\rb", "\r", '"'])
def test_csv_reads_back_as_it_was(labels: list[str]) -> None:
    header, *rows = csv.reader(io.StringIO(_table(labels).csv(), newline=""), strict=True)
    assert header == ["group", "rate"]
    assert len(rows) == len(labels)
    for k, (label, (group, rate)) in enumerate(zip(labels, rows, strict=True)):
        assert group in (label, f"'{label}")
        assert rate == repr(k / 7)
        assert not group.startswith(tuple("=+-@\t\r\n＝＋－＠"))


@given(st.lists(VALUES, min_size=1))
@example([0.1, -0.0, 1e-300, math.inf, -math.inf, math.nan, None])
def test_csv_keeps_every_digit(values: list[object]) -> None:
    rows = csv.DictReader(io.StringIO(_values(values).csv(), newline=""))
    for value, row in zip(values, rows, strict=True):
        if value is None or value != value:
            assert row["v"] == ""
        else:
            assert row["v"] == repr(value)


def test_csv_of_other_libraries_values() -> None:
    values = [np.float64(0.1), np.int64(-3), np.bool_(True), pd.NA, pd.NaT, np.float64("nan")]
    column = Column("v", "v", values)
    assert Table("T", (column,)).csv() == 'v\n0.1\n-3\nTrue\n""\n""\n""\n'


def _refused(constant: str) -> None:
    raise AssertionError(f"{constant} is no JSON")


@given(st.lists(VALUES | st.text(), min_size=1))
@example([math.inf, -math.inf, math.nan, None, "\u2028\x00\x1b"])
def test_json_reads_back_with_nulls(values: list[object]) -> None:
    text = _values(values).json()
    read = json.loads(text, parse_constant=_refused)
    finite = [None if isinstance(v, float) and not math.isfinite(v) else v for v in values]
    assert [row["v"] for row in read["rows"]] == finite
    assert [type(row["v"]) for row in read["rows"]] == [type(v) for v in finite]
    assert text == _values(list(values)).json()
    assert list(read) == ["title", "columns", "rows", "notes"]
    assert {tuple(row) for row in read["rows"]} == {("v", "w")}


def test_json_of_other_libraries_values() -> None:
    values = [np.float64(0.1), np.int64(-3), np.bool_(True), pd.NA, pd.NaT, pd.Interval(1, 2)]
    read = json.loads(_values(values).json())
    assert [row["v"] for row in read["rows"]] == [0.1, -3, True, None, None, "(1, 2]"]


class _Given(Tabular):
    def table(self, *, percent: bool = False, every_column: bool = False) -> Table:  # noqa: ARG002
        return _table(["\ud800 half a character", "whole"])


def test_every_format_reaches_a_file(tmp_path: Path) -> None:
    given_ = _Given()
    writers = [
        given_.to_csv, given_.to_json, given_.to_html, given_.to_markdown, given_.to_latex,
    ]  # fmt: skip
    for number, write in enumerate(writers):
        path = tmp_path / str(number)
        text = write(path)
        assert path.read_bytes() == text.replace("\ud800", r"\ud800").encode("utf-8")
        assert "half a character" in text
