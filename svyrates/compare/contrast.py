"""`contrast` and `difference_in_differences`: any linear combination of rates, by its labels."""

from __future__ import annotations

from collections.abc import Mapping
from itertools import combinations
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from svyrates.compare.contrast_table import ContrastTable, assemble_contrasts
from svyrates.compare.contrasts import SCALES, combine
from svyrates.compare.hypothesis import Hypothesis
from svyrates.compare.multiplicity import MULTIPLICITY, Multiplicity
from svyrates.compare.pairs import matches
from svyrates.compare.simple import VARIANTS, SimpleVariant
from svyrates.errors import ComparisonError, all_faults, some
from svyrates.rates.table import RateTable
from svyrates.totals import joint_wald

__all__ = ["contrast", "difference_in_differences", "read_options"]

FloatArray = NDArray[np.float64]
ContrastScale = Literal["rate", "log", "logit"]
OneSided = Literal["two-sided", "greater", "less"]


def contrast(
    rates: RateTable,
    weights: Mapping[Any, Any],
    *,
    scale: ContrastScale = "rate",
    null: float = 0.0,
    alternative: OneSided = "two-sided",
    multiplicity: Multiplicity = "none",
    seed: int = 1,
    simple: SimpleVariant = "unweighted",
    level: float | None = None,
) -> ContrastTable:
    """Estimate and test linear combinations of the rates of a table, with their covariance.

    Parameters
    ----------
    rates : RateTable
    weights : dict
        Group label -> weight; labels of crossed groups are tuples, with the outcome first if the
        table has several. For several contrasts name -> such a dict.
    scale : {"rate", "log", "logit"}
        What is combined: rates, their logarithms (differences are log ratios), or their logits.
    null : float
        Value of each contrast under its null hypothesis, on that scale.
    alternative : {"two-sided", "greater", "less"}
    multiplicity, seed, simple, level : see `compare_rates`

    Returns
    -------
    ContrastTable
        With a joint test that all contrasts have their null value, if there are several.

    Raises
    ------
    ComparisonError
        For labels that the table does not have, and options out of range.

    Notes
    -----
    `V = c'V(θ)c`, t on the smallest degrees of freedom of the rates involved (or the table's other
    rule). Joint test: Wald's F (Korn & Graubard 1990).

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.estimate_rates(design, "damp", by="dwelling_type")
    >>> found = sr.contrast(rates, {"house": 0.5, "flat": 0.5, "park home": -1})
    >>> len(found)
    1

    The mean rate of houses and flats less that of park homes.
    """
    asked = read_options(rates, alternative, null, level, multiplicity, simple, scale)
    named = _named(weights)
    names, labels = rates.label_columns()
    rows, matrix = _weight_matrix(named, labels or [("all",)], names)
    found = combine(rates, rows, matrix, scale=scale, asked=asked, variant=simple)
    joint = None
    if len(named) > 1:
        df = float(np.nanmin(found.df)) if not np.isnan(found.df).all() else float("nan")
        joint = joint_wald(found.estimate - asked.null, found.covariance, df)
    return assemble_contrasts(
        rates, [found], title=f"Contrasts of rates of {_subject(rates)}", held=(),
        levels=[()] * len(named), names=list(named), asked=asked, scale=scale,
        multiplicity=multiplicity, seed=seed, joint=joint,
        joint_is=f"All contrasts are {asked.null:g}",
    )  # fmt: skip


def difference_in_differences(
    rates: RateTable,
    versus: Any = None,
    since: Any = None,
    *,
    scale: ContrastScale = "rate",
    alternative: OneSided = "two-sided",
    multiplicity: Multiplicity = "none",
    seed: int = 1,
    simple: SimpleVariant = "unweighted",
    level: float | None = None,
) -> ContrastTable:
    """Compare how groups changed: the change in one group less the change in another.

    Parameters
    ----------
    rates : RateTable
        Estimated with two grouping columns, the period first: ``by=["wave", "tenure"]``.
    versus : group label, optional
        The group whose change is subtracted; without it every pair of groups.
    since : period label, optional
        The period that changes are counted from; the first by default.
    scale, alternative, multiplicity, seed, simple, level : see `contrast`

    Returns
    -------
    ContrastTable

    Raises
    ------
    ComparisonError
        When the table is not crossed by two columns, or has no such group or period.

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey()
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.estimate_rates(design, "damp", by=["wave", "sex"])
    >>> sr.difference_in_differences(rates).contrast
    ('woman − man, 2024 − 2021',)

    The change among women less the change among men; both waves are in the same blocks.
    """
    if len(rates.columns) != 2 or len(rates.outcomes) > 1:
        raise ComparisonError(
            "A difference in differences needs one outcome and two grouping columns, the period "
            f"first, as in by=['wave', 'tenure']; this table has {some(rates.columns) or 'none'}."
        )
    asked = read_options(rates, alternative, 0.0, level, multiplicity, simple, scale)
    periods = list(dict.fromkeys(label[0] for label in rates.groups))
    groups = list(dict.fromkeys(label[1] for label in rates.groups))
    base = periods[0] if since is None else _pick(periods, since, "since")
    pairs = list(combinations(groups, 2))
    if versus is not None:
        other = _pick(groups, versus, "versus")
        pairs = [(group, other) for group in groups if group != other]
    row_of = {label: row for row, label in enumerate(rates.groups)}
    names, matrix = [], []
    for period in periods:
        for one, other in pairs if period != base else ():
            row = np.zeros(len(rates.groups))
            for label, sign in (((period, one), 1), ((base, one), -1),
                                ((period, other), -1), ((base, other), 1)):  # fmt: skip
                row[row_of[label]] += sign
            names.append(f"{one} − {other}, {period} − {base}")
            matrix.append(row)
    if not names:
        raise ComparisonError("It takes two periods and two groups to compare changes.")
    found = combine(
        rates, range(len(rates.groups)), np.array(matrix), scale=scale, asked=asked, variant=simple
    )
    return assemble_contrasts(
        rates, [found], title=f"Differences in differences of rates of {_subject(rates)}",
        held=(), levels=[()] * len(names), names=names, asked=asked, scale=scale,
        multiplicity=multiplicity, seed=seed,
    )  # fmt: skip


def _pick(labels: list[Any], wanted: Any, role: str) -> Any:
    for label in labels:
        if matches((label,), wanted):
            return label
    raise ComparisonError(f"{role}={wanted!r} is none of {some(labels, 10)}.")


def read_options(
    rates: RateTable,
    alternative: str,
    null: float,
    level: float | None,
    multiplicity: str,
    simple: str,
    scale: str,
) -> Hypothesis:
    """Check the options that all contrasts share."""
    if not isinstance(rates, RateTable):
        raise ComparisonError(f"`rates` must be a RateTable; got {type(rates).__name__}.")
    chosen = rates.level if level is None else level
    faults = []
    for name, value, allowed in (
        ("alternative", alternative, ("two-sided", "greater", "less")),
        ("multiplicity", multiplicity, MULTIPLICITY),
        ("simple", simple, VARIANTS),
        ("scale", scale, tuple(SCALES)),
    ):
        if value not in allowed:
            faults.append(f"{name} must be one of {some(allowed, 8)}; got {value!r}.")
    if isinstance(chosen, bool) or not isinstance(chosen, int | float) or not 0.0 < chosen < 1.0:
        faults.append(f"level must be a number between 0 and 1, such as 0.95; got {chosen!r}.")
    elif alternative != "two-sided" and chosen <= 0.5:
        faults.append(f"a one-sided question needs a level above 0.5; got {chosen!r}.")
    if not isinstance(null, int | float) or not np.isfinite(null):
        faults.append(f"null must be a finite number; got {null!r}.")
    all_faults(ComparisonError, "The contrast has", faults)
    return Hypothesis(alternative, float(null), float(null), float(chosen))


def _subject(rates: RateTable) -> str:
    return rates.what(0) if len(rates.outcomes) == 1 else f"{len(rates.outcomes)} outcomes"


def _named(weights: Mapping[Any, Any]) -> dict[str, Mapping[Any, float]]:
    """Several contrasts by name; a single one is called "contrast"."""
    if not isinstance(weights, Mapping) or not weights:
        raise ComparisonError("weights must be a dict of group label -> weight, and not empty.")
    nested = [isinstance(value, Mapping) for value in weights.values()]
    if any(nested) and not all(nested):
        raise ComparisonError("weights mixes named contrasts and single weights.")
    return (
        {str(name): inner for name, inner in weights.items()}
        if all(nested)
        else {"contrast": weights}
    )


def _weight_matrix(
    named: Mapping[str, Mapping[Any, float]], labels: list[tuple[object, ...]], names: list[str]
) -> tuple[list[int], FloatArray]:
    """Rows of the table that are involved, and the weights (contrasts, rows)."""
    faults: list[str] = []
    full = np.zeros((len(named), len(labels)))
    for position, (name, inner) in enumerate(named.items()):
        for wanted, weight in inner.items():
            rows = [row for row, label in enumerate(labels) if matches(label, wanted)]
            if not rows:
                shown = [label[0] if len(label) == 1 else label for label in labels]
                faults.append(
                    f"{name!r} names {wanted!r}, which is no group"
                    f"{f' of {some(names)}' if len(names) > 1 else ''}. The groups are "
                    f"{some(shown, 10)}."
                )
                continue
            number = isinstance(weight, int | float | np.number) and not isinstance(weight, bool)
            if not number or not np.isfinite(float(weight)):
                faults.append(f"{name!r} gives {wanted!r} the weight {weight!r}, not a number.")
                continue
            full[position, rows[0]] += float(weight)
        if not faults and not full[position].any():
            faults.append(f"{name!r} has no weight other than 0.")
    all_faults(ComparisonError, "The contrast has", faults)
    used = np.flatnonzero(full.any(axis=0))
    return used.tolist(), full[:, used]
