"""From a question of a plan to its answer: rates, comparisons, and what else was asked."""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from svyrates.command.compare import positions, typed, versus_of
from svyrates.command.plan import COMPARE, Filter, Plan, Question
from svyrates.compare import (
    ComparisonTable,
    compare_adjustment,
    compare_rates,
    gap_decomposition,
    homogeneity_test,
    trend_test,
)
from svyrates.design import SampleDesign
from svyrates.design.columns import ColumnFault, code_column, numbers, open_frame
from svyrates.errors import QuestionError, RatesWarning, SimpleFormulaWarning
from svyrates.publish import (
    Answer,
    DisclosureRule,
    withhold_comparisons,
    withhold_rates,
)
from svyrates.rates import RateTable, adjusted_rates, estimate_rates, standardize_rates
from svyrates.words import Tabular

__all__ = ["answer"]

BoolArray = NDArray[np.bool_]
_HIDDEN = "Further tables of this question are not shown, because a rate is withheld."


@dataclass(frozen=True)
class _Asked:
    """A question with its subpopulation and its common options."""

    plan: Plan
    question: Question
    data: pd.DataFrame
    design: SampleDesign
    where: BoolArray | None

    @property
    def options(self) -> dict[str, Any]:
        """Options that every estimate takes."""
        asked = self.question.asked
        found: dict[str, Any] = {
            name: asked[name] for name in ("interval", "level", "df") if name in asked
        }
        if self.question.success is not None:
            values = [str(value) for value in self.question.success]
            found["success"] = typed(self.data, [self.question.outcome], values)[
                self.question.outcome
            ]
        return found | {"where": self.where}


def answer(plan: Plan, question: Question, data: pd.DataFrame, design: SampleDesign) -> Answer:
    """Answer one question, ready for publication."""
    asked = _Asked(plan, question, data, design, _where(plan, question, data))
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always", RatesWarning)
        rates = _rates(asked)
        gaps = _gaps(asked, rates)
        others = _others(asked, rates)
        disclosure = None
        if plan.minimum_count is not None:
            disclosure = DisclosureRule(minimum=plan.minimum_count)
        public = withhold_rates(rates, plan.standard, disclosure=disclosure, round_to=plan.round_to)
    notes = [
        str(each.message)
        for each in caught
        # The report has a panel for this one.
        if not issubclass(each.category, SimpleFormulaWarning)
    ]
    if others and (np.isnan(public.rate) & ~np.isnan(rates.rate)).any():
        # A table made of all groups could give a withheld rate away.
        others, notes = [], [*notes, _HIDDEN]
    shown = None if gaps is None else withhold_comparisons(gaps, public)
    return Answer(question.title, public, shown, tuple(others), tuple(dict.fromkeys(notes)))


def _rates(asked: _Asked) -> RateTable:
    question, options = asked.question, asked.options
    by: Any = list(question.by) or None
    if "formula" in question.asked:
        if len(question.by) != 1:
            raise QuestionError("by: a formula is adjusted for one grouping column at a time.")
        return adjusted_rates(asked.design, question.asked["formula"], question.by[0], **options)
    if "standard" in question.asked:
        factors = _list(question.asked["adjust_for"])
        return standardize_rates(
            asked.design, question.outcome, by, factors, question.asked["standard"], **options
        )
    return estimate_rates(asked.design, question.outcome, by=by, **options)


def _gaps(asked: _Asked, rates: RateTable) -> ComparisonTable | None:
    question = asked.question
    if not question.by and "versus" not in question.asked:
        return None
    options = {name: question.asked[name] for name in COMPARE if name in question.asked}
    margin = question.asked.get("margin")
    if isinstance(margin, list):
        margin = tuple(margin) if len(margin) == 2 else margin[0]
    return compare_rates(
        rates,
        _versus(question, rates),
        within=question.asked.get("within"),
        margin=margin,
        level=question.asked.get("level"),
        **options,
    )


def _versus(question: Question, rates: RateTable) -> Any:
    given = question.asked.get("versus")
    return versus_of(given if given is None else str(given), rates)


def _others(asked: _Asked, rates: RateTable) -> list[Tabular]:
    question, found = asked.question, []
    keys = question.asked
    within = keys.get("within")
    if keys.get("homogeneity"):
        method = "second-order" if rates.crude_rate is None else "wald"
        found.append(homogeneity_test(rates, within=within, method=method))  # type: ignore[arg-type]
    tables: list[Tabular] = list(found)
    if keys.get("trend"):
        tables.append(trend_test(rates, within=within))
    versus = _versus(question, rates)
    if rates.crude_rate is not None and question.by:
        tables.append(compare_adjustment(rates, versus, within=within))
        tables += [] if rates.model is None else [rates.model]
    if keys.get("gap"):
        options = {k: v for k, v in asked.options.items() if k != "interval"}
        label = versus if isinstance(versus, str) else None
        tables.append(
            gap_decomposition(
                asked.design,
                question.outcome,
                question.by[0],
                _list(keys["adjust_for"]),
                versus=label,
                **options,
            )
        )
    return tables


def _list(value: Any) -> list[str]:
    return list(value) if isinstance(value, list) else [value]


def _where(plan: Plan, question: Question, data: pd.DataFrame) -> BoolArray | None:
    """Records that meet every condition of every filter named; a missing value meets none."""
    if not question.where:
        return None
    inside = np.ones(len(data), dtype=bool)
    for each in plan.filters:
        if each.name in question.where:
            try:
                inside &= _meets(each, data)
            except ColumnFault as fault:
                raise QuestionError(str(fault)) from fault
    return inside


def _meets(condition: Filter, data: pd.DataFrame) -> BoolArray:
    frame, role = open_frame(data), f"filter {condition.name!r}"
    if condition.values is not None:
        coded = code_column(frame, condition.column, role)
        wanted = [str(value) for value in condition.values]
        return np.isin(coded.codes, sorted(positions(coded.levels, wanted, role)))
    values = numbers(frame, condition.column, role)
    least = -np.inf if condition.least is None else condition.least
    most = np.inf if condition.most is None else condition.most
    with np.errstate(invalid="ignore"):
        return np.asarray((values >= least) & (values <= most))
