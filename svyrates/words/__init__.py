"""Numbers, sentences and tables for readers; a leaf that knows no statistics."""

from svyrates.words.escape import display_width, for_html, for_terminal, shorten
from svyrates.words.markup import TABLE_STYLE
from svyrates.words.numbers import (
    count,
    fixed,
    p_phrase,
    p_value,
    percent,
    points,
    rule_or_number,
    significant,
)
from svyrates.words.progress import progress_bar
from svyrates.words.sentences import join_words, plural
from svyrates.words.table import Column, Table
from svyrates.words.tabular import Tabular

__all__ = [
    "TABLE_STYLE",
    "Column",
    "Table",
    "Tabular",
    "count",
    "display_width",
    "fixed",
    "for_html",
    "for_terminal",
    "join_words",
    "p_phrase",
    "p_value",
    "percent",
    "plural",
    "points",
    "progress_bar",
    "rule_or_number",
    "shorten",
    "significant",
]
