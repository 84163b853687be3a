"""`build_report`: one HTML file with the answers, what they rest on, and how to do them again."""

from __future__ import annotations

import platform
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from importlib.metadata import version
from importlib.resources import files
from typing import Any

import numpy as np
import pandas as pd

from svyrates.compare.conclusions import finding
from svyrates.compare.measures import MEASURES
from svyrates.compare.table import ComparisonTable
from svyrates.compare.verdict import MEANINGS, MISLEADING, meaning
from svyrates.design import DesignSummary
from svyrates.errors import FigureError
from svyrates.publish.figures import draw_rates
from svyrates.publish.gaps import draw_against_simple
from svyrates.publish.methods import methods_of
from svyrates.publish.svg import svg_of
from svyrates.rates.table import RateTable
from svyrates.words import TABLE_STYLE, Tabular, count, for_terminal, plural

__all__ = ["Answer", "ReportFacts", "build_report"]

CAUTIONS = (
    "A difference between groups is not its cause, adjusted or not.",
    "No evidence of a difference does not say that there is none: look at the limits.",
    "Many comparisons give some small p-values by chance alone; every table says how many it has.",
    "Small or unstable estimates are marked or withheld by the standard that each table names.",
    "The data provider's own disclosure and release rules, and local law, come first.",
    "Have results about groups of people reviewed by a qualified person before publication.",
)
_NO_FIGURES = "This report has no figures, because matplotlib is not installed."


@dataclass(frozen=True, slots=True)
class Answer:
    """One question of a report, answered.

    Attributes
    ----------
    title : the question
    rates : a table for publication, from `withhold_rates`
    comparisons : from `withhold_comparisons`; None where nothing was compared
    others : further tables, such as tests and gaps taken apart
    notes : what must be said besides
    """

    title: str
    rates: RateTable
    comparisons: ComparisonTable | None
    others: tuple[Tabular, ...] = ()
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class ReportFacts:
    """What a report rests on.

    Attributes
    ----------
    title : of the report
    design : the survey's design
    file_name, file_hash, n_records : the data, with the SHA-256 of the file
    plan : text of the plan, "" for none
    failed : title and message of questions that could not be answered
    """

    title: str
    design: DesignSummary
    file_name: str
    file_hash: str
    n_records: int
    plan: str = ""
    failed: tuple[tuple[str, str], ...] = ()


@dataclass(frozen=True, slots=True)
class _Panel:
    heading: str
    misled: bool
    rows: tuple[tuple[str, int, str], ...]


@dataclass(frozen=True, slots=True)
class _Figure:
    svg: str
    caption: str


def build_report(
    facts: ReportFacts,
    answers: Sequence[Answer],
    *,
    percent: bool = True,
    figures: bool = True,
) -> str:
    """Build a report as one self-contained HTML page.

    Parameters
    ----------
    facts : ReportFacts
    answers : list of Answer
    percent : bool
        Rates as percentages, differences in percentage points.
    figures : bool
        Draw figures; without matplotlib the report says that it has none.

    Returns
    -------
    str
        The same text on every run with the same input and versions.

    Examples
    --------
    >>> import svyrates as sr
    >>> from svyrates.publish import Answer, ReportFacts, build_report
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.withhold_rates(sr.estimate_rates(design, "damp", by="sex"))
    >>> facts = ReportFacts("Damp homes", design.summary(), "survey.csv", "0" * 64, len(survey))
    >>> page = build_report(facts, [Answer("Who lives damp?", rates, None)], figures=False)
    >>> page.count("<h1>")
    1

    The page holds one question, the survey, the methods and the cautions.
    """
    from jinja2 import Environment, StrictUndefined

    environment = Environment(
        autoescape=True, undefined=StrictUndefined, trim_blocks=True, lstrip_blocks=True
    )
    template = environment.from_string(_template("report.html"))
    shown = [
        _shown(answer, number, percent, figures) for number, answer in enumerate(answers, start=1)
    ]
    used = [(each.rates, each.comparisons, each.others) for each in answers]
    methods, references = methods_of(used)
    return template.render(
        facts=_harmless(facts),
        style=TABLE_STYLE + _template("report.css"),
        answers=shown,
        design=facts.design.table().html(in_page=True),
        records=_records(facts, answers),
        methods=methods,
        references=references,
        cautions=CAUTIONS,
        versions=_versions(),
        n_records=count(facts.n_records),
    )


def _template(name: str) -> str:
    return files("svyrates.publish").joinpath("templates", name).read_text("utf-8")


def _harmless(facts: ReportFacts) -> dict[str, Any]:
    """Texts of unknown origin without marks that reorder them; the page escapes the rest."""
    return {
        "title": for_terminal(facts.title),
        "file_name": for_terminal(facts.file_name),
        "file_hash": for_terminal(facts.file_hash),
        "plan": "\n".join(for_terminal(line) for line in facts.plan.splitlines()),
        "failed": [(for_terminal(a), for_terminal(b)) for a, b in facts.failed],
    }


def _shown(answer: Answer, number: int, percent: bool, figures: bool) -> dict[str, Any]:

    gaps = answer.comparisons
    tables: list[Tabular] = [answer.rates, *([gaps] if gaps is not None else []), *answer.others]
    notes = list(answer.notes)
    drawn: list[_Figure] = []
    if figures:
        try:
            drawn = _figures(answer, number, percent)
        except FigureError as problem:
            missing = "matplotlib" in str(problem)
            notes.append(_NO_FIGURES if missing else f"No figure: {problem}")
    return {
        "title": for_terminal(answer.title),
        "sentences": [] if gaps is None else gaps.sentences(cautions=False),
        "panel": None if gaps is None else _panel(gaps),
        "figures": drawn,
        "tables": [table.table(percent=percent).html(in_page=True) for table in tables],
        "notes": [for_terminal(note) for note in notes],
    }


def _figures(answer: Answer, number: int, percent: bool) -> list[_Figure]:

    drawn = []
    what = for_terminal(answer.rates.what(0))
    if not np.isnan(answer.rates.rate).all():
        svg = svg_of(draw_rates(answer.rates, percent=percent), prefix=f"rates-{number}-")
        level = f"{100 * answer.rates.level:g}%"
        drawn.append(_Figure(svg, f"Rates of {what} with {level} limits."))
    gaps = answer.comparisons
    if gaps is not None and not np.isnan(gaps.estimate).all():
        svg = svg_of(draw_against_simple(gaps), prefix=f"simple-{number}-")
        caption = "The interval that follows from the design, and that of the simple formula."
        drawn.append(_Figure(svg, caption))
    return drawn


def _panel(gaps: ComparisonTable) -> _Panel:
    """Which verdicts the comparisons have, and what they mean."""
    found = Counter(str(verdict) for verdict in gaps.verdict)
    misled = sum(found[verdict] for verdict in MISLEADING)
    noun = "".join(finding(gaps.alternative, gaps.null, MEASURES[gaps.measure].unity))
    rows = [
        (verdict, found[verdict], meaning(verdict, noun)) for verdict in MEANINGS if found[verdict]
    ]
    if found["withheld"]:
        rows.append(("withheld", found["withheld"], "a rate in it may not be shown"))
    judged = len(gaps) - found["withheld"] - found["undetermined"]
    heading = f"The simple formula would mislead in {misled} of {plural(judged, 'comparison')}."
    if not judged:
        heading = "The simple formula can be judged in no comparison."
    elif not misled:
        heading = f"The simple formula would serve in {plural(judged, 'comparison')}."
    return _Panel(heading, misled > 0, tuple(rows))


def _records(facts: ReportFacts, answers: Sequence[Answer]) -> list[str]:
    lines = [f"The file holds {count(facts.n_records)} records."]
    for answer in answers:
        covered = answer.rates.coverage
        if covered is None:
            continue
        parts = [
            f"{count(number)} {what}"
            for number, what in (
                (covered.n_outside, "outside the subpopulation"),
                (covered.n_group_unknown, "with an unknown group"),
                (covered.n_zero_weight, "of weight zero"),
                (float(np.nansum(answer.rates.n_missing)), "without an answer"),
            )
            if number
        ]
        if parts:
            lines.append(f"{for_terminal(answer.title)}: {', '.join(parts)}.")
    return lines


def _versions() -> dict[str, str]:
    return {
        "svyrates": version("svyrates"),
        "python": platform.python_version(),
        "numpy": np.__version__,
        "scipy": version("scipy"),
        "pandas": pd.__version__,
    }
