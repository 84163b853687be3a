"""`withhold_rates` and `withhold_comparisons`: tables from which withheld values are really gone.

What is returned holds no totals, no sampling units and no withheld number, in any column.
"""

from __future__ import annotations

from dataclasses import fields, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from svyrates.compare.table import ComparisonTable
from svyrates.errors import ComparisonError, QuestionError
from svyrates.publish.disclosure import WITHHELD, round_counts, withhold_rows
from svyrates.publish.protection import DisclosureRule
from svyrates.rates.presentation import Standard, judge_presentation
from svyrates.rates.table import RateTable

__all__ = ["withhold_comparisons", "withhold_rates"]

BoolArray = NDArray[np.bool_]
HIDDEN = "a rate in it is withheld"
_COUNTS = ("n", "n_success", "n_missing", "weighted_n")
_PROVIDER = (
    "The data provider's own disclosure and release rules, and local law, come before these; a "
    "table that passes here is no promise about others made of the same data."
)


def withhold_rates(
    rates: RateTable,
    standard: str | Standard | None = "nchs-proportions",
    *,
    disclosure: DisclosureRule | None = None,
    round_to: int | None = None,
) -> RateTable:
    """Make a table for publication, without the rates that may not be shown.

    Parameters
    ----------
    rates : RateTable
    standard : str, Standard or None
        Presentation standard; see `judge_presentation`. None withholds nothing for precision.
    disclosure : DisclosureRule, optional
        Smallest counts that may be shown; cells that would give a withheld one away are withheld
        too. Off by default: the rule is the data provider's.
    round_to : int, optional
        Base that counts are rounded to.

    Returns
    -------
    RateTable
        Withheld rows have labels and a note, and no number. Nothing can be computed from the table
        but what it shows.

    Raises
    ------
    QuestionError
        For masks, which do not cross into a table with sums, and published rates without counts.

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.estimate_rates(design, "damp", by="dwelling_type")
    >>> public = sr.withhold_rates(rates)
    >>> [str(label[0]) for label, p in zip(public.groups, public.rate) if p != p]
    ['park home']

    Park homes are in six blocks only, and their interval is too wide to be published.
    """
    judged = None if standard is None else judge_presentation(rates, standard)
    gone = np.zeros(rates.rate.size, dtype=bool) if judged is None else judged.withheld
    reason = np.array(rates.notes, dtype=object)
    remarks = list(rates.remarks)
    if judged is not None:
        said = judged.status != "show"
        reason[said] = [
            "; ".join(part for part in (note, f"{status}: {why}") if part)
            for note, status, why in zip(
                reason[said], judged.status[said], judged.reason[said], strict=True
            )
        ]
        remarks.append(f"Presentation standard: {judged.standard.source}.")
    if disclosure is not None:
        if np.isnan(rates.n_success).any():
            raise QuestionError("A disclosure rule needs the counts behind the rates.")
        hidden = withhold_rows(rates, disclosure, already=gone).cells
        reason[hidden] = WITHHELD
        gone = gone | hidden
        remarks.append(f"Counts below {disclosure.minimum} are withheld, and what would show them.")
    if round_to is not None:
        remarks.append(f"Counts are rounded to {round_to}.")
    if disclosure is not None or round_to is not None or gone.any():
        remarks.append(_PROVIDER)
    numbers: dict[str, Any] = {}
    for each in fields(rates):
        values = getattr(rates, each.name)
        if isinstance(values, np.ndarray):
            if each.name in _COUNTS and round_to is not None:
                values = round_counts(values, round_to).astype(np.float64)
            numbers[each.name] = np.where(gone, np.nan, values)
    # The model's own table says more about small groups than their rates would.
    model = None if disclosure is not None else rates.model
    return replace(
        rates,
        notes=tuple(str(text) for text in reason),
        remarks=tuple(dict.fromkeys(remarks)),
        blocks=(),
        model=model,
        standard=None,
        **numbers,
    )


def withhold_comparisons(gaps: ComparisonTable, public: RateTable) -> ComparisonTable:
    """Take out of a table of comparisons all that a published table of rates withholds.

    Parameters
    ----------
    gaps : ComparisonTable
    public : RateTable
        From `withhold_rates`, of the very rates that were compared.

    Returns
    -------
    ComparisonTable
        A comparison with a withheld rate, or of a group with everyone else where a rate of the
        level is withheld, has its labels and a note, and no number.

    Raises
    ------
    ComparisonError
        When the two tables do not belong together.

    Examples
    --------
    >>> import warnings
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.estimate_rates(design, "damp", by="dwelling_type")
    >>> with warnings.catch_warnings():
    ...     warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
    ...     gaps = sr.compare_rates(rates)
    >>> shown = sr.withhold_comparisons(gaps, sr.withhold_rates(rates))
    >>> int((shown.estimate != shown.estimate).sum())
    2

    Both comparisons with park homes are withheld.
    """
    if public.groups != gaps.rates.groups or public.outcomes != gaps.rates.outcomes:
        raise ComparisonError("`public` is no published version of the rates that were compared.")
    gone = _touched(gaps, np.isnan(public.rate) & ~np.isnan(gaps.rates.rate))
    arrays: dict[str, Any] = {}
    for each in fields(gaps):
        values = getattr(gaps, each.name)
        if isinstance(values, np.ndarray) and values.dtype != object:
            arrays[each.name] = np.where(gone, np.nan, values)
    note, verdict = gaps.note.copy(), gaps.verdict.copy()
    conclusion = gaps.conclusion.copy()
    note[gone], verdict[gone], conclusion[gone] = HIDDEN, "withheld", "withheld"
    return replace(
        gaps, rates=public, blocks=(), note=note, verdict=verdict, conclusion=conclusion, **arrays
    )


def _touched(gaps: ComparisonTable, hidden: BoolArray) -> BoolArray:
    """Comparisons that use a hidden rate, or a union that holds one."""
    touched = []
    n_groups = len(gaps.rates.groups)
    for block in gaps.blocks:
        table_block, _ = gaps.rates.block_of(
            gaps.rates.outcomes.index(str(block.level[gaps.held.index("outcome")]))
            if "outcome" in gaps.held
            else 0
        )
        rows = np.array([o * n_groups + g for o in table_block.outcomes for g in range(n_groups)])
        cells = np.zeros(block.source.n_cells, dtype=bool)
        cells[gaps.rates.cells_of(table_block)] = hidden[rows]
        weights = np.abs(np.asarray(block.sides @ np.diag(cells.astype(float))))
        side = weights.sum(axis=1) > 0
        # A union is known where its parts are: with one part hidden, the difference shows it.
        touched.append(side[block.plus] | (side[block.minus] & (block.minus >= 0)))
    return np.concatenate(touched)
