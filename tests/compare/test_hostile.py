"""Hostile names, labels and values, through the public face and in every rendering."""

from __future__ import annotations

import csv
import io
import json
import warnings
from typing import Any

import pandas as pd
import pytest

import svyrates as sr
from svyrates.words import display_width
from tests.words.test_words import HOSTILE, _Tags

LABELS = [text for text in HOSTILE if text]


def _tables(name: str, label: str) -> tuple[sr.RateTable, sr.ComparisonTable]:
    column, outcome = f"g {name}", f"y {name}"
    data = pd.DataFrame(
        {column: [label, "plain"] * 30, outcome: [0, 1, 1, 0, 1, 1] * 10, "c": [1, 2, 3, 4, 5] * 12}
    )
    design = sr.SampleDesign(data, clusters="c")
    rates = sr.estimate_rates(design, outcome, by=column)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
        return rates, sr.compare_rates(rates)


@pytest.mark.parametrize("text", LABELS)
def test_every_rendering(text: str) -> None:
    for table in _tables(text.replace("\ud800", ""), text.replace("\ud800", "?")):
        for width in (60, 80, 200):
            shown = table.text(width)
            assert max(map(display_width, shown.splitlines())) <= width
            assert "\x1b" not in shown
            assert "\u202e" not in shown
        parser = _Tags()
        parser.feed(table.to_html())
        assert not parser.open
        assert not parser.seen & {"script", "img", "b"}
        assert "\u202e" not in table.to_html() + table.to_markdown() + table.to_latex()
        rows = list(csv.reader(io.StringIO(table.to_csv(), newline="")))
        assert all(not cell.startswith(("=", "@", "\t", "\r")) for row in rows for cell in row)
        assert len(json.loads(table.to_json())["rows"]) in (1, 2)


@pytest.mark.parametrize("text", LABELS)
def test_words_about_a_comparison(text: str) -> None:
    _, gaps = _tables("x", text.replace("\ud800", "?"))
    said = gaps.explain()
    assert "Verdict:" in said
    assert gaps.find(text.replace("\ud800", "?")) == 0


def test_warning_text_is_harmless() -> None:
    data: dict[str, Any] = {"g": ["\x1b[31mred\nx", "plain"] * 40, "c": [i // 8 for i in range(80)]}
    data["y"] = [int(c % 2) for c in data["c"]]
    rates = sr.estimate_rates(sr.SampleDesign(pd.DataFrame(data), clusters="c"), "y", by="g")
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        gaps = sr.compare_rates(rates)
    said = gaps.explain() + gaps.title_of(0) + "".join(str(each.message) for each in caught)
    assert "\x1b" not in said
