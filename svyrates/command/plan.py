"""The analysis plan: a TOML file with the data, the design, the questions and what to write."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from svyrates.command.plan_text import SPEC, check_keys, lines_of, place
from svyrates.command.survey import SurveyFile
from svyrates.errors import DataFileError, all_faults, some
from svyrates.rates.formula import parse_formula
from svyrates.rates.presentation import STANDARDS

__all__ = ["Filter", "Plan", "PlanError", "Question", "read_plan"]

FORMATS = ("csv", "json", "markdown", "latex", "html")
FIGURES = ("svg", "png")
# Options that a question passes on to compare_rates as they are.
COMPARE = ("measure", "alternative", "null", "limits", "multiplicity", "family", "simple")


class PlanError(DataFileError):
    """A plan says something that cannot be done; the message names every line."""


@dataclass(frozen=True, slots=True)
class Filter:
    """One condition of a subpopulation: a column, and its values or its bounds."""

    name: str
    column: str
    values: tuple[Any, ...] | None
    least: float | None
    most: float | None


@dataclass(frozen=True, slots=True)
class Question:
    """One question, with one grouping.

    Attributes
    ----------
    title : as a reader sees it
    outcome, success, by, where : what is asked, of whom
    asked : the other keys, as they stand in the plan
    """

    title: str
    outcome: str
    success: tuple[Any, ...] | None
    by: tuple[str, ...]
    where: tuple[str, ...]
    asked: Mapping[str, Any]


@dataclass(frozen=True, slots=True)
class Plan:
    """A checked plan.

    Attributes
    ----------
    path, text, title : the plan's file, its text and title
    survey : data file and design
    filters : conditions; those of one name all hold
    questions : one per grouping
    standard, minimum_count, round_to, percent : what may be published, and how
    folder : where results go, relative to the plan's own folder
    tables, figures, report : what is written
    """

    path: Path
    text: str
    title: str
    survey: SurveyFile
    filters: tuple[Filter, ...]
    questions: tuple[Question, ...]
    standard: str | None
    minimum_count: int | None
    round_to: int | None
    percent: bool
    folder: str
    tables: tuple[str, ...]
    figures: tuple[str, ...]
    report: bool

    def columns(self) -> list[str]:
        """Columns that the questions and filters need, without those of the design."""
        names = [each.column for each in self.filters]
        for question in self.questions:
            names += [question.outcome, *question.by, *_listed(question.asked.get("adjust_for"))]
            if "formula" in question.asked:
                names += parse_formula(question.asked["formula"]).columns
        return list(dict.fromkeys(names))


def read_plan(path: Path) -> Plan:
    """Read and check a plan.

    Raises
    ------
    PlanError
        Lists every fault with its line and key, and the nearest known key.
    """
    text = _text_of(path)
    try:
        whole = tomllib.loads(text)
    except tomllib.TOMLDecodeError as problem:
        raise PlanError(f"{path}: this is no TOML: {problem}.") from problem
    lines = lines_of(text)
    faults = check_keys(whole, "", 0, lines)
    tables = _tables(whole)
    for name, position, table in tables:
        faults += check_keys(table, name, position, lines)
    all_faults(PlanError, f"{path} has", faults)
    questions = [
        question
        for position, table in enumerate(whole["question"])
        for question in _questions(table, position, lines, faults)
    ]
    filters = [
        _filter(table, at, lines, faults) for at, table in enumerate(whole.get("filter", []))
    ]
    faults += _references(questions, filters)
    publication, output = whole.get("publication", {}), whole.get("output", {})
    standard = publication.get("standard", "nchs-proportions")
    if standard not in (*STANDARDS, "none"):
        faults.append(
            f"{place(lines, 'publication', 0, 'standard')}: standard must be one of "
            f"{some((*STANDARDS, 'none'))}; got {standard!r}."
        )
    written = _choices(output, "tables", FORMATS, ("csv", "json"), lines, faults)
    drawn = _choices(output, "figures", FIGURES, (), lines, faults)
    all_faults(PlanError, f"{path} has", faults)
    return Plan(
        path=path,
        text=text,
        title=whole["title"],
        survey=_survey(path, whole),
        filters=tuple(filters),
        questions=tuple(questions),
        standard=None if standard == "none" else standard,
        minimum_count=publication.get("minimum_count") or None,
        round_to=publication.get("round_counts_to") or None,
        percent=publication.get("percent", True),
        folder=output.get("folder", "results"),
        tables=written,
        figures=drawn,
        report=output.get("report", True),
    )


def _text_of(path: Path) -> str:
    if not path.exists():
        raise PlanError(f"{path}: there is no such file. `svyrates plan FILE` writes a first one.")
    if path.is_dir():
        raise PlanError(f"{path}: this is a folder, not a plan.")
    try:
        return path.read_text(encoding="utf-8-sig")
    except UnicodeError as problem:
        raise PlanError(f"{path}: a plan is text in UTF-8.") from problem
    except OSError as problem:
        raise PlanError(f"{path}: cannot be read ({problem.strerror}).") from problem


def _tables(whole: Mapping[str, Any]) -> list[tuple[str, int, Mapping[str, Any]]]:
    """Every table of the plan that is one, with its name and position."""
    found: list[tuple[str, int, Mapping[str, Any]]] = []
    for name in SPEC[""]:
        value = whole.get(name)
        listed = value if isinstance(value, list) else [value]
        found += [(name, i, each) for i, each in enumerate(listed) if isinstance(each, dict)]
    design = whole.get("design")
    replicates = design.get("replicates") if isinstance(design, dict) else None
    if isinstance(replicates, dict):
        found.append(("design.replicates", 0, replicates))
    return found


def _listed(value: Any) -> tuple[Any, ...]:
    return () if value is None else tuple(value) if isinstance(value, list) else (value,)


def _questions(
    table: Mapping[str, Any], position: int, lines: Any, faults: list[str]
) -> list[Question]:
    """One question per grouping, with the contradictions of its keys on the list."""
    here = place(lines, "question", position, "")
    formula = table.get("formula")
    if ("outcome" in table) == (formula is not None):
        faults.append(f"{here}: give either an outcome or a formula.")
        return []
    if formula is not None and "adjust_for" in table and "gap" not in table:
        faults.append(f"{here}: a formula adjusts already; leave adjust_for out.")
    if ("standard" in table or "gap" in table) and "adjust_for" not in table:
        faults.append(f"{here}: standard and gap need adjust_for.")
    if "adjust_for" in table and not {"standard", "gap"} & set(table):
        faults.append(f"{here}: adjust_for needs standard = ... or gap = true.")
    if formula is not None and "by" not in table:
        faults.append(f"{here}: a formula needs `by`, one of its columns.")
    outcome = table["outcome"] if formula is None else parse_formula(formula).outcome
    by = table.get("by")
    several = isinstance(by, list) and any(isinstance(each, list) for each in by)
    groupings = [_listed(each) for each in by] if several and by else [_listed(by)]
    keys = ("title", "outcome", "success", "by", "where")
    asked = {key: value for key, value in table.items() if key not in keys}
    success = table.get("success")
    return [
        Question(
            title=table["title"] + (f" (by {' × '.join(each)})" if several else ""),
            outcome=outcome,
            success=None if success is None else _listed(success),
            by=each,
            where=_listed(table.get("where")),
            asked=asked,
        )
        for each in groupings
    ]


def _filter(table: Mapping[str, Any], position: int, lines: Any, faults: list[str]) -> Filter:
    bounded = "min" in table or "max" in table
    if ("values" in table) == bounded:
        here = place(lines, "filter", position, "")
        faults.append(f"{here}: give either values, or min and max.")
    values = table.get("values")
    return Filter(
        table["name"],
        table["column"],
        None if values is None else _listed(values),
        table.get("min"),
        table.get("max"),
    )


def _references(questions: list[Question], filters: list[Filter]) -> list[str]:
    known = {each.name for each in filters}
    return [
        f"question {question.title!r}: there is no filter {name!r}; "
        f"{f'these are {some(sorted(known))}' if known else 'the plan has none'}."
        for question in questions
        for name in question.where
        if name not in known
    ]


def _choices(
    output: Mapping[str, Any],
    key: str,
    known: tuple[str, ...],
    usual: tuple[str, ...],
    lines: Any,
    faults: list[str],
) -> tuple[str, ...]:
    chosen = _listed(output[key]) if key in output else usual
    strange = [each for each in chosen if each not in known]
    if strange:
        faults.append(
            f"{place(lines, 'output', 0, key)}: {key} may be {some(known)}; got {some(strange)}."
        )
    return tuple(dict.fromkeys(chosen))


def _survey(path: Path, whole: Mapping[str, Any]) -> SurveyFile:
    data, design = whole["data"], whole.get("design", {})
    replicates = design.get("replicates", {})
    folder = path.parent
    coefficients, units = replicates.get("coefficients"), replicates.get("units_per_stratum")
    return SurveyFile(
        file=folder / data["file"],
        separator=data.get("separator"),
        encoding=data.get("encoding", "utf-8"),
        weight=design.get("weight"),
        weight_decimals=design.get("weight_decimals", 0),
        strata=list(_listed(design.get("strata"))) or None,
        clusters=list(_listed(design.get("clusters"))) or None,
        population=list(_listed(design.get("population"))) or None,
        single_cluster_strata=design.get("single_cluster_strata", "error"),
        replicates=list(_listed(replicates.get("columns"))) or None,
        scheme=replicates.get("scheme"),
        fay=replicates.get("fay"),
        units_per_stratum=list(_listed(units)) or None,
        both_halves=replicates.get("both_halves", False),
        mean_size=replicates.get("mean_size", 1),
        coefficient=list(_listed(coefficients)) or None,
        centre=replicates.get("centre", "full-sample"),
        factors=replicates.get("factors", False),
        replicate_decimals=replicates.get("decimals", 0),
        replicate_file=folder / replicates["file"] if "file" in replicates else None,
        key=list(_listed(replicates.get("key"))) or None,
    )
