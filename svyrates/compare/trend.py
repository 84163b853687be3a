"""`trend_test`: linear and quadratic change of a rate over ordered groups."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from svyrates.compare.contrast import ContrastScale, OneSided, read_options
from svyrates.compare.contrast_table import ContrastTable, assemble_contrasts
from svyrates.compare.contrasts import combine
from svyrates.compare.multiplicity import Multiplicity
from svyrates.compare.pairs import by_level, held_columns, matches
from svyrates.compare.simple import SimpleVariant
from svyrates.errors import ComparisonError, some
from svyrates.rates.table import RateTable

__all__ = ["trend_test"]

FloatArray = NDArray[np.float64]


def trend_test(
    rates: RateTable,
    scores: Mapping[Any, float] | Sequence[float] | None = None,
    *,
    within: str | Sequence[str] | None = None,
    scale: ContrastScale = "rate",
    alternative: OneSided = "two-sided",
    multiplicity: Multiplicity = "none",
    seed: int = 1,
    simple: SimpleVariant = "unweighted",
    level: float | None = None,
) -> ContrastTable:
    """Test for a linear trend over ordered groups, and for curvature.

    Parameters
    ----------
    rates : RateTable
        Its last grouping column holds the ordered groups.
    scores : dict or list of float, optional
        Score of each group; by default the labels themselves if all are numbers, else 1, 2, 3, …
        in the order of the table.
    within : str or list of str, optional
        Columns held fixed; all grouping columns but the last by default.
    scale, alternative, multiplicity, seed, simple, level : see `contrast`

    Returns
    -------
    ContrastTable
        For each level a row for the slope per unit of score and, from three groups on, one for the
        quadratic coefficient.

    Raises
    ------
    ComparisonError
        For fewer than two groups, or scores that do not fit them or do not differ.

    Notes
    -----
    The slope is `Σ (s_k - s̄) p_k / Σ (s_k - s̄)²`, the least-squares line through the rates, all
    groups alike; the quadratic coefficient is that of the polynomial orthogonal to it
    (`Σ q_k p_k / Σ q_k²`). Variances by the full covariance. The simple formula makes the same
    contrasts of unweighted rates of independent samples.

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.estimate_rates(design, "damp", by="age_group")
    >>> sr.trend_test(rates).contrast
    ('linear, per step', 'quadratic')

    The slope is the change in the rate from one age group to the next.
    """
    asked = read_options(rates, alternative, 0.0, level, multiplicity, simple, scale)
    names = ["outcome", *rates.columns]
    rows = [(outcome, *labels) for outcome in rates.outcomes for labels in rates.groups]
    held = held_columns(rates, names, within)
    varying = [position for position, name in enumerate(names) if name not in held]
    parts, levels, titles = [], [], []
    for level_labels, members in by_level(names, rows, held).items():
        groups = [tuple(rows[row][position] for position in varying) for row in members]
        given, unit = _scores(groups, scores)
        weights, found_names = _polynomials(given, unit)
        parts.append(combine(rates, members, weights, scale=scale, asked=asked, variant=simple))
        shown = tuple(
            label
            for name, label in zip(held, level_labels, strict=True)
            if name != "outcome" or len(rates.outcomes) > 1
        )
        levels += [shown] * len(found_names)
        titles += found_names
    columns = tuple(name for name in held if name != "outcome" or len(rates.outcomes) > 1)
    over = " × ".join(names[position] for position in varying)
    subject = rates.what(0) if len(rates.outcomes) == 1 else f"{len(rates.outcomes)} outcomes"
    return assemble_contrasts(
        rates, parts, title=f"Trend of rates of {subject} over {over}", held=columns,
        levels=levels, names=titles, asked=asked, scale=scale, multiplicity=multiplicity, seed=seed,
    )  # fmt: skip


def _scores(groups: list[tuple[object, ...]], scores: Any) -> tuple[FloatArray, str]:
    """Score of each group, and what a unit of it is called."""
    if len(groups) < 2:
        raise ComparisonError("A trend needs two groups at least.")
    if isinstance(scores, Mapping):
        found = [
            [value for label, value in scores.items() if matches(group, label)] for group in groups
        ]
        absent = [group for group, values in zip(groups, found, strict=True) if not values]
        if absent:
            raise ComparisonError(f"scores has none for {some(absent)}.")
        values = np.array([each[0] for each in found], dtype=np.float64)
        unit = "unit"
    elif scores is not None:
        values, unit = np.asarray(scores, dtype=np.float64), "unit"
        if values.shape != (len(groups),):
            raise ComparisonError(f"scores has {values.size} values for {len(groups)} groups.")
    else:
        labels = [group[0] for group in groups]
        numeric = len(groups[0]) == 1 and all(
            isinstance(label, int | float) and not isinstance(label, bool) for label in labels
        )
        values = np.array(labels if numeric else range(1, len(groups) + 1), dtype=np.float64)
        unit = "unit" if numeric else "step"
    if not np.isfinite(values).all() or np.ptp(values) == 0.0:
        raise ComparisonError("scores must be finite numbers that differ.")
    return values, unit


def _polynomials(scores: FloatArray, unit: str) -> tuple[FloatArray, list[str]]:
    """Weights of the slope and of the orthogonal quadratic coefficient."""
    linear = scores - scores.mean()
    weights, names = [linear / (linear @ linear)], [f"linear, per {unit}"]
    if np.unique(scores).size > 2:
        square = linear**2
        quadratic = square - square.mean() - linear * (square @ linear) / (linear @ linear)
        weights.append(quadratic / (quadratic @ quadratic))
        names.append("quadratic")
    return np.array(weights), names
