"""`svyrates plan`: look at a data file and write a first plan, every guess marked as one."""

from __future__ import annotations

import json
import re
from pathlib import Path

import numpy as np
import pandas as pd
import typer

from svyrates.command.files import read_columns
from svyrates.design.replicate_checks import natural_order
from svyrates.errors import DataFileError
from svyrates.words import for_terminal, plural

__all__ = ["guess_plan"]

_FEW = 12
_LEAST_REPLICATES = 10
_ROLES = {
    role: re.compile(rf"(^|_)({words})\w*$", re.IGNORECASE)
    for role, words in {
        "weight": "w|wt|wgt|weight|pond|pweight|finalwt|expansion",
        "strata": "strat|vstrat|sdmvstra|estrato",
        "clusters": "psu|cluster|upm|segment|block|vpsu|sdmvpsu",
        "area": "district|region|county|province|department|area|zone",
    }.items()
}
_MARK = "# guessed: check"


def guess_plan(
    file: Path, out: Path, *, replace: bool, separator: str | None, encoding: str
) -> None:
    """Write a commented plan for a data file."""
    if out.exists() and not replace:
        raise DataFileError(f"{out}: this file exists; --replace writes over it.")
    data = read_columns(file, ["*"], separator=separator, encoding=encoding)
    text = _plan_text(data, file, out)
    try:
        out.write_text(text, encoding="utf-8", newline="\n")
    except OSError as problem:
        raise DataFileError(f"{out}: cannot be written ({problem.strerror}).") from problem
    typer.echo(for_terminal(f"A first plan for {plural(data.shape[1], 'column')} is in {out}."))
    typer.echo("Go through it: every guess is marked. Then: svyrates check, svyrates run.")


def _plan_text(data: pd.DataFrame, file: Path, out: Path) -> str:
    families = _replicates([str(name) for name in data.columns])
    used = {name for names in families.values() for name in names}
    rest = [str(name) for name in data.columns if str(name) not in used]
    weight = _role(rest, "weight", [name for name in rest if _is_weight(data[name])])
    clusters = _role(rest, "clusters", rest)
    strata = _role(rest, "strata", rest) or (_area(data, rest) if clusters else None)
    special = {weight, strata, clusters}
    few = [name for name in rest if name not in special and 2 <= data[name].nunique() <= _FEW]
    outcomes = [name for name in few if set(data[name].dropna().unique()) <= {0, 1}]
    groups = [name for name in few if name not in outcomes]
    shown = file.name if file.parent.resolve() == out.parent.resolve() else str(file)
    lines = [
        "# A first plan. Read the survey's documentation, correct what is guessed, then run",
        "#   svyrates check THIS_FILE",
        "#   svyrates run THIS_FILE",
        "",
        f"title = {_toml(file.stem)}",
        "",
        "[data]",
        f"file = {_toml(shown)}",
        "",
        "[design]",
        _line("weight", weight),
        _line("strata", strata),
        _line("clusters", clusters),
        *_reused_codes(data, strata, clusters),
        "",
    ]
    lines += _replicate_lines(families)
    lines += ["# Subpopulations are named here and used with where = ...; rows are never dropped."]
    lines += ["# [[filter]]", '# name = "adults"', '# column = "age"', "# min = 18", ""]
    lines += _question_lines(data, outcomes, groups)
    lines += [
        "[publication]",
        '# Or "relative-standard-error", "coefficient-of-variation", "none":',
        'standard = "nchs-proportions"',
        "# minimum_count = 10  # the data provider's own rule comes first",
        "# round_counts_to = 5",
        "percent = true",
        "",
        "[output]",
        'folder = "results"',
        'tables = ["csv", "json"]  # also "markdown", "latex", "html"',
        'figures = []  # "svg", "png"',
        "report = true",
    ]
    return "\n".join(lines) + "\n"


def _question_lines(data: pd.DataFrame, outcomes: list[str], groups: list[str]) -> list[str]:
    outcome, by = (
        (outcomes or groups or [""])[0],
        next((name for name in groups if name != (outcomes or groups)[0]), ""),
    )
    lines = ["[[question]]", f"title = {_toml(f'{outcome} by {by}')}"]
    lines += [f"outcome = {_toml(outcome)}  {_MARK}"]
    if outcome and outcome not in outcomes:
        level = str(data[outcome].dropna().unique()[0])
        lines.append(f"success = [{_toml(level)}]  # the answers that count; guessed: check")
    lines += [f"by = {_toml(by)}  {_MARK}"]
    lines += ['# versus = "everyone else"', '# multiplicity = "holm"', "# homogeneity = true", ""]
    more = list(outcomes[1:8])
    if more:
        lines += [f"# Other columns of 0 and 1: {', '.join(_toml(name) for name in more)}"]
    if len(groups) > 1:
        lines += [
            f"# Other groupings: {', '.join(_toml(name) for name in groups[:8] if name != by)}"
        ]
    return [*lines, ""]


def _replicate_lines(families: dict[str, list[str]]) -> list[str]:
    lines = []
    for pattern, names in families.items():
        lines += [
            f"# {len(names)} columns {_toml(names[0])} to {_toml(names[-1])} look like replicates.",
            "# If so, say how they were made; strata and clusters then only count df.",
            "# [design.replicates]",
            f"# columns = {_toml(pattern)}",
            "# delete-one-jackknife, stratified-jackknife, paired-jackknife, fay, bootstrap,",
            "# balanced-repeated-replication, successive-difference or coefficients:",
            '# scheme = "…"',
            "",
        ]
    return lines


def _replicates(names: list[str]) -> dict[str, list[str]]:
    """Families of columns that differ in a number at the end."""
    found: dict[str, list[str]] = {}
    for name in names:
        match = re.fullmatch(r"(.*?)(\d+)", name)
        if match and match[1]:
            found.setdefault(match[1], []).append(name)
    return {
        f"{stem}*": sorted(family, key=natural_order)
        for stem, family in found.items()
        if len(family) >= _LEAST_REPLICATES and not any(mark in stem for mark in "*?[")
    }


def _is_weight(values: pd.Series) -> bool:
    if values.dtype.kind not in "if":
        return False
    known = values.dropna()
    return bool(
        known.size and (known >= 0).all() and known.nunique() > 2 and np.isfinite(known).all()
    )


def _role(names: list[str], role: str, fit: list[str]) -> str | None:
    matching = [name for name in names if _ROLES[role].search(name) and name in fit]
    return matching[0] if matching else None


def _area(data: pd.DataFrame, names: list[str]) -> str | None:
    """The finest column that is named like an area: samples are often stratified by areas."""
    levels = data[[name for name in names if _ROLES["area"].search(name)]].nunique()
    return str(levels.idxmax()) if (levels > 1).any() else None


def _reused_codes(data: pd.DataFrame, strata: str | None, clusters: str | None) -> list[str]:
    """Say where codes of sampling units start again: as one unit they would be far too few."""
    if strata is None or clusters is None:
        return []
    codes = len(data[[clusters]].dropna().drop_duplicates())
    units = len(data[[strata, clusters]].dropna().drop_duplicates())
    if units == codes:
        return []
    counted = f"{codes:,} codes in {_toml(clusters)} are {units:,} units within {_toml(strata)}"
    return [f"# {counted}: codes that start again, or no strata?"]


def _line(key: str, name: str | None) -> str:
    return f'# {key} = "…"' if name is None else f"{key} = {_toml(name)}  {_MARK}"


def _toml(text: str) -> str:
    """A TOML basic string; JSON's escapes are among TOML's."""
    return json.dumps(for_terminal(text) if "\n" in text else text, ensure_ascii=True)
