"""The text of a plan: where its keys stand, and what each may hold."""

from __future__ import annotations

import difflib
import re
from collections.abc import Mapping
from typing import Any

from svyrates.errors import some

__all__ = ["SPEC", "check_keys", "lines_of"]

Where = tuple[str, int, str]

# What each key holds; a trailing "!" marks those that are needed.
SPEC: dict[str, dict[str, str]] = {
    "": {
        "title": "text!", "data": "table!", "design": "table", "filter": "tables",
        "question": "tables!", "publication": "table", "output": "table",
    },
    "data": {"file": "text!", "separator": "text", "encoding": "text"},
    "design": {
        "weight": "text", "weight_decimals": "whole", "strata": "texts", "clusters": "texts",
        "population": "texts", "single_cluster_strata": "text", "replicates": "table",
    },
    "design.replicates": {
        "columns": "texts!", "scheme": "text!", "fay": "number", "units_per_stratum": "wholes",
        "both_halves": "flag", "mean_size": "whole", "coefficients": "numbers", "centre": "text",
        "factors": "flag", "decimals": "whole", "file": "text", "key": "texts",
    },
    "filter": {
        "name": "text!", "column": "text!", "values": "values", "min": "number", "max": "number",
    },
    "question": {
        "title": "text!", "outcome": "text", "success": "values", "by": "groupings",
        "where": "texts", "versus": "value", "within": "texts", "measure": "text",
        "alternative": "text", "margin": "numbers", "null": "number", "limits": "text",
        "multiplicity": "text", "family": "text", "simple": "text", "interval": "text",
        "level": "number", "df": "value", "adjust_for": "texts", "standard": "shares",
        "formula": "text", "homogeneity": "flag", "trend": "flag", "gap": "flag",
    },
    "publication": {
        "standard": "text", "minimum_count": "whole", "round_counts_to": "whole",
        "percent": "flag",
    },
    "output": {"folder": "text", "tables": "texts", "report": "flag", "figures": "texts"},
}  # fmt: skip

_KINDS = {
    "text": "a text",
    "texts": "a text or a list of texts",
    "whole": "a whole number from 0 on",
    "wholes": "a whole number or a list of them",
    "number": "a number",
    "numbers": "a number or a list of numbers",
    "flag": "true or false",
    "value": "a text or a number",
    "values": "a value or a list of values",
    "groupings": "a column, a list of columns, or a list of such lists",
    "shares": "a name, or a table of category = share",
    "table": "a table",
    "tables": "one or more [[tables]]",
}
_HEADER = re.compile(r"^\s*(\[\[?)\s*([^\]]+?)\s*\]\]?\s*(?:#.*)?$")
_KEY = re.compile(r"^\s*(\"(?:[^\"\\]|\\.)*\"|'[^']*'|[\w-]+)\s*=")


def lines_of(text: str) -> dict[Where, int]:
    """Line of every key: (table, position of the table, key) -> line, from 1; "" is the header."""
    found: dict[Where, int] = {}
    table, position = "", 0
    counts: dict[str, int] = {}
    depth, quote = 0, ""
    for number, line in enumerate(text.splitlines(), start=1):
        inside = depth > 0 or quote
        if not inside:
            header, key = _HEADER.match(line), _KEY.match(line)
            if header:
                table = ".".join(part.strip().strip("\"'") for part in header[2].split("."))
                if header[1] == "[[":
                    counts[table] = counts.get(table, -1) + 1
                position = counts.get(table, 0)
                found.setdefault((table, position, ""), number)
                continue
            if key:
                name = key[1][1:-1] if key[1][:1] in "\"'" else key[1]
                found.setdefault((table, position, name), number)
                line = line[key.end() :]
        depth, quote = _nesting(line, depth, quote)
    return found


def _nesting(line: str, depth: int, quote: str) -> tuple[int, str]:
    """Brackets that stay open after a line, and the quotes of a text of several lines."""
    place = 0
    while place < len(line):
        if quote:
            end = line.find(quote, place)
            if end < 0:
                return depth, quote if len(quote) == 3 else ""
            place, quote = end + len(quote), ""
            continue
        mark = line[place]
        if mark == "#":
            break
        if mark in "\"'":
            quote = mark * 3 if line.startswith(mark * 3, place) else mark
            place += len(quote)
            continue
        depth += {"[": 1, "{": 1, "]": -1, "}": -1}.get(mark, 0)
        place += 1
    return max(depth, 0), quote if len(quote) == 3 else ""


def check_keys(
    given: Mapping[str, Any], table: str, position: int, lines: Mapping[Where, int]
) -> list[str]:
    """Faults of one table: unknown keys with the nearest known one, wrong kinds, missing keys."""
    known = SPEC[table]
    faults = []
    for key, value in given.items():
        if key not in known:
            near = difflib.get_close_matches(key, known, n=1)
            hint = f"; did you mean {near[0]!r}?" if near else f"; it has {some(list(known), 30)}."
            faults.append(f"{place(lines, table, position, key)}: there is no key {key!r}{hint}")
            continue
        kind = known[key].rstrip("!")
        if not _fits(value, kind):
            faults.append(
                f"{place(lines, table, position, key)}: {key} must be {_KINDS[kind]}; got "
                f"{str(value)[:60]!r}."
            )
    missing = [key for key, kind in known.items() if kind.endswith("!") and key not in given]
    if missing:
        faults.append(f"{place(lines, table, position, '')}: {some(missing)} is missing.")
    return faults


def place(lines: Mapping[Where, int], table: str, position: int, key: str) -> str:
    """Where a key stands, for a message."""
    line = lines.get((table, position, key)) or lines.get((table, position, ""))
    named = f"[{table}]" if table else "the plan"
    return f"line {line}, {named}" if line else named


def _fits(value: Any, kind: str) -> bool:
    number = isinstance(value, int | float) and not isinstance(value, bool)
    whole = isinstance(value, int) and not isinstance(value, bool) and value >= 0
    scalar = isinstance(value, str | int | float | bool)
    several = isinstance(value, list) and bool(value)
    checks = {
        "text": lambda: isinstance(value, str),
        "whole": lambda: whole,
        "number": lambda: number,
        "flag": lambda: isinstance(value, bool),
        "value": lambda: scalar,
        "table": lambda: isinstance(value, dict),
        "tables": lambda: several and all(isinstance(each, dict) for each in value),
        "shares": lambda: isinstance(value, str | dict),
        "texts": lambda: (
            isinstance(value, str)
            or (isinstance(value, list) and all(_fits(v, "text") for v in value))
        ),
        "wholes": lambda: whole or (several and all(_fits(v, "whole") for v in value)),
        "numbers": lambda: number or (several and all(_fits(v, "number") for v in value)),
        "values": lambda: scalar or (several and all(_fits(v, "value") for v in value)),
        "groupings": lambda: (
            _fits(value, "texts") or (several and all(_fits(each, "texts") for each in value))
        ),
    }
    return bool(checks[kind]())
