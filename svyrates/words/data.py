"""Tables as data: CSV and JSON, every digit kept."""

from __future__ import annotations

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
    rows = zip(*(column.values for column in columns), strict=True)
    lines = [_csv_line([for_csv(column.name) for column in columns])]
    lines += [_csv_line([_csv_cell(value) for value in row]) for row in rows]
    return "".join(lines)


def _csv_line(cells: Sequence[str]) -> str:
    # The writer of the standard library left a lone carriage return unquoted before Python 3.13,
    # and its own reader then took the rest of the cell for another row.
    quoted = [
        '"' + cell.replace('"', '""') + '"' if any(each in cell for each in ',"\r\n') else cell
        for cell in cells
    ]
    # A line with nothing on it would be no row.
    return (",".join(quoted) or '""') + "\n"


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
