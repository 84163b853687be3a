"""Tables as data: CSV and JSON, every digit kept."""

from __future__ import annotations

import csv
import io
import json
import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from svyrates.words.escape import for_csv
from svyrates.words.numbers import is_missing

if TYPE_CHECKING:
    from svyrates.words.table import Column

__all__ = ["csv_table", "json_table", "plain"]


def plain(value: Any) -> Any:
    """A value as Python's own int, float, bool, str or None."""
    if is_missing(value):
        return None
    value = value.item() if hasattr(value, "item") else value
    if isinstance(value, bool | int | str):
        return value
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    return str(value)


def csv_table(columns: Sequence[Column]) -> str:
    """Rows of raw values; infinities are written `inf` and missing values left empty."""
    file = io.StringIO()
    writer = csv.writer(file, lineterminator="\n")
    writer.writerow([for_csv(column.name) for column in columns])
    for row in zip(*(column.values for column in columns), strict=True):
        writer.writerow([_csv_cell(value) for value in row])
    return file.getvalue()


def _csv_cell(value: Any) -> str:
    if is_missing(value):
        return ""
    value = value.item() if hasattr(value, "item") else value
    if isinstance(value, float):
        return repr(value)
    return for_csv(value) if not isinstance(value, int) else str(value)


def json_table(title: str, columns: Sequence[Column], notes: Sequence[str]) -> str:
    """One object; rows are objects keyed by machine name."""
    rows = [
        {column.name: plain(value) for column, value in zip(columns, row, strict=True)}
        for row in zip(*(column.values for column in columns), strict=True)
    ]
    headings = [{"name": column.name, "heading": column.heading} for column in columns]
    whole = {"title": title, "columns": headings, "rows": rows, "notes": list(notes)}
    # A lone half of a character cannot be encoded; it is written as its escape.
    text = json.dumps(whole, ensure_ascii=False, allow_nan=False, indent=1)
    return text.encode("utf-8", "backslashreplace").decode("utf-8") + "\n"
