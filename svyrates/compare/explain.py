"""The answer in words: the paragraph about one comparison, and the warning about a table."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from svyrates.compare.sources import STEPS, step_ratios
from svyrates.compare.verdict import MEANINGS, MISLEADING
from svyrates.errors import SimpleFormulaWarning, warn
from svyrates.words import fixed, join_words, p_value, percent, plural, points

if TYPE_CHECKING:
    from svyrates.compare.table import ComparisonTable

__all__ = ["ADVICE", "paragraph", "warn_if_misleading"]

FloatArray = NDArray[np.float64]

ADVICE = (
    "Use the design-based columns. explain(group, versus) says more; silence this with "
    "warnings.simplefilter('ignore', svyrates.SimpleFormulaWarning)."
)
_SHOWN = 3
_STEP_NAMES = {
    "weights": "unequal weights",
    "clusters": "clustering",
    "covariance": "covariance between the groups",
    "strata": "stratification",
}


def paragraph(table: ComparisonTable, row: int) -> str:
    """One comparison as a short paragraph."""
    parts = [
        _answer(table, row),
        _simple_claim(table, row),
        f"Verdict: {table.verdict[row]} ({MEANINGS[table.verdict[row]]}).",
        _behaviour(table, row),
        _why(table, row, step_ratios(table.only([row]))[:, 0]),
    ]
    if table.note[row]:
        parts.append(f"Note: {table.note[row]}.")
    parts.append("A difference between groups is not its cause.")
    return " ".join(part for part in parts if part)


def warn_if_misleading(table: ComparisonTable) -> None:
    """Raise one `SimpleFormulaWarning` that names the comparisons, worst first."""
    wrong = np.isin(table.verdict, MISLEADING)
    if not wrong.any():
        return
    severity = {verdict: rank for rank, verdict in enumerate(MISLEADING)}
    rows = sorted(
        np.flatnonzero(wrong).tolist(),
        key=lambda row: (severity[str(table.verdict[row])], -_distance(table, row)),
    )
    comparisons = plural(len(table), "comparison")
    lines = [
        f"The simple independent-sample formula would mislead in {len(rows)} of {comparisons}:"
    ]
    worst = sorted(rows[:_SHOWN])
    steps = dict(zip(worst, step_ratios(table.only(worst)).T, strict=True))
    lines += [_bullet(table, row, steps[row]) for row in rows[:_SHOWN]]
    others = rows[_SHOWN:]
    if others:
        named = [f"{table.title_of(row)} ({table.verdict[row]})" for row in others[:12]]
        more = f" and {len(others) - 12} more" if len(others) > 12 else ""
        lines.append(f"Also: {'; '.join(named)}{more}.")
    lines.append(ADVICE)
    warn("\n".join(lines), SimpleFormulaWarning)


def _bullet(table: ComparisonTable, row: int, steps: FloatArray) -> str:
    verdict = f"{table.title_of(row)}: {table.verdict[row]} ({MEANINGS[table.verdict[row]]})."
    parts = (verdict, _simple_claim(table, row), _answer(table, row), _why(table, row, steps))
    return "- " + " ".join(part for part in parts if part)


def _distance(table: ComparisonTable, row: int) -> float:
    ratio = table.variance_ratio[row]
    return abs(float(np.log(ratio))) if ratio > 0 else 0.0


def _amount(table: ComparisonTable, value: float) -> str:
    return points(value) if table.measure == "difference" else fixed(value, 2)


def _range(table: ComparisonTable, low: float, high: float) -> str:
    level = f"{100 * table.level:g}% limits"
    if np.isnan(low):
        return f"no {level}"
    if table.alternative == "less":
        return f"{level}: at most {_amount(table, high)}"
    if table.alternative == "greater":
        return f"{level}: at least {_amount(table, low)}"
    if table.measure == "difference":
        low_text = points(low).removesuffix(" points")
        return f"{level} {low_text} to {points(high)}"
    return f"{level} {fixed(low, 2)} to {fixed(high, 2)}"


def _p(value: float) -> str:
    text = p_value(value)
    return f"p {text[0]} {text[1:]}" if text[:1] in "<>" else f"p = {text}"


def _answer(table: ComparisonTable, row: int) -> str:
    """What the design says."""
    name = {"difference": "difference", "ratio": "ratio", "odds_ratio": "odds ratio"}[table.measure]
    rates = f"{percent(table.rate[row])} against {percent(table.versus_rate[row])}"
    if np.isnan(table.p[row]):
        return f"The design gives {rates}; {_amount(table, table.estimate[row])}, without a test."
    evidence = (
        f"evidence of a {_departure(table)}"
        if table.p[row] < 1.0 - table.level
        else f"no evidence of a {_departure(table)}"
    )
    df = f" on {table.df[row]:g} df" if np.isfinite(table.df[row]) else ""
    t = f"t = {table.statistic[row]:.2f}{df}, " if np.isfinite(table.statistic[row]) else ""
    return (
        f"The design gives {rates}: a {name} of {_amount(table, table.estimate[row])} "
        f"({_range(table, table.low[row], table.high[row])}; {t}{_p(table.p[row])}), {evidence}."
    )


def _departure(table: ComparisonTable) -> str:
    usual = table.null == (0.0 if table.measure == "difference" else 1.0)
    return "difference" if usual else f"departure from {table.null:g}"


def _simple_claim(table: ComparisonTable, row: int) -> str:
    """What the simple formula says."""
    if np.isnan(table.simple_p[row]):
        return "The simple formula gives no test."
    found = "finds a" if table.simple_p[row] < 1.0 - table.level else "finds no"
    return (
        f"The simple formula claims {_amount(table, table.simple_estimate[row])} "
        f"({_range(table, table.simple_low[row], table.simple_high[row])}; "
        f"{_p(table.simple_p[row])}) and {found} {_departure(table)}."
    )


def _behaviour(table: ComparisonTable, row: int) -> str:
    """How often the simple formula would err under this design."""
    if np.isnan(table.simple_coverage[row]):
        return ""
    alpha = f"{100 * (1 - table.level):g}%"
    text = (
        f"Under this design its {100 * table.level:g}% interval holds the weighted "
        f"{table.measure.replace('_', ' ')} in {percent(table.simple_coverage[row], 0)} of samples"
    )
    if not np.isnan(table.simple_error_rate[row]):
        text += (
            f", and were the two population rates equal its {alpha} test would reject in "
            f"{percent(table.simple_error_rate[row], 0)}"
        )
    return text + "."


def _why(table: ComparisonTable, row: int, steps: FloatArray) -> str:
    """Why the two answers differ: the variance, and the shift that the weights make."""
    ratio = table.variance_ratio[row]
    sentences = []
    if np.isfinite(ratio) and ratio > 0:
        names = dict(_STEP_NAMES)
        if np.isnan(steps[-1]):
            names["clusters"] = "clustering and stratification"
        listed = [
            f"{names[step]} × {fixed(value, 2)}"
            for step, value in zip(STEPS, steps, strict=True)
            if np.isfinite(value) and abs(value - 1.0) >= 0.005
        ]
        because = f" ({join_words(listed)})" if listed else ""
        sentences.append(
            f"The design-based variance is {fixed(ratio, 2)} times the simple one{because}."
        )
    if table.shift_p[row] < 1.0 - table.level:
        by = (
            points(table.shift[row])
            if table.measure == "difference"
            else (f"a factor of {fixed(float(np.exp(table.shift[row])), 2)}")
        )
        sentences.append(f"Leaving the weights out shifts it by {by} ({_p(table.shift_p[row])}).")
    return " ".join(sentences)
