"""The answer in words: the paragraph about one comparison, and the warning about a table."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from svyrates.compare.conclusions import finding
from svyrates.compare.measures import MEASURES
from svyrates.compare.sources import STEPS, step_ratios
from svyrates.compare.verdict import MISLEADING, meaning
from svyrates.errors import SimpleFormulaWarning, warn
from svyrates.words import fixed, join_words, p_phrase, percent, plural, points

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
        _together(table, row),
        _simple_claim(table, row),
        f"Verdict: {table.verdict[row]} ({meaning(table.verdict[row], _finding(table))}).",
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
    said = meaning(table.verdict[row], _finding(table))
    verdict = f"{table.title_of(row)}: {table.verdict[row]} ({said})."
    parts = (verdict, _simple_claim(table, row), _answer(table, row), _why(table, row, steps))
    return "- " + " ".join(part for part in parts if part)


def _distance(table: ComparisonTable, row: int) -> float:
    ratio = table.variance_ratio[row]
    return abs(float(np.log(ratio))) if ratio > 0 else 0.0


def _amount(table: ComparisonTable, value: float) -> str:
    return MEASURES[table.measure].show(value)


def _finding(table: ComparisonTable) -> str:
    return "".join(finding(table.alternative, table.null, MEASURES[table.measure].unity))


def _range(table: ComparisonTable, low: float, high: float) -> str:
    level = f"{100 * table.limits_level:g}% limits"
    if np.isnan(low):
        return f"no {level}"
    if table.alternative in ("less", "not-higher"):
        return f"{level}: at most {_amount(table, high)}"
    if table.alternative in ("greater", "not-lower"):
        return f"{level}: at least {_amount(table, low)}"
    return f"{level} {_amount(table, low).removesuffix(' points')} to {_amount(table, high)}"


def _answer(table: ComparisonTable, row: int) -> str:
    """What the design says."""
    name = MEASURES[table.measure].name
    rates = f"{percent(table.rate[row])} against {percent(table.versus_rate[row])}"
    if np.isnan(table.p[row]):
        return f"The design gives {rates}; {_amount(table, table.estimate[row])}, without a test."
    found = table.p[row] < 1.0 - table.level
    evidence = f"{'' if found else 'no '}evidence of {_finding(table)}"
    limits = _range(table, table.low[row], table.high[row])
    df = f" on {table.df[row]:g} df" if np.isfinite(table.df[row]) else ""
    t = f"t = {table.statistic[row]:.2f}{df}, " if np.isfinite(table.statistic[row]) else ""
    return (
        f"The design gives {rates}: a {name} of {_amount(table, table.estimate[row])} "
        f"({limits}; {t}{p_phrase(table.p[row])}), {evidence}."
    )


def _together(table: ComparisonTable, row: int) -> str:
    """What the margin, or the number of comparisons, adds."""
    if np.isnan(table.p[row]):
        return ""
    sentences = []
    if table.margin is not None:
        low, high = (_amount(table, end) for end in table.margin)
        asked = {
            "equivalent": f"The margin is {low.removesuffix(' points')} to {high}",
            "not-lower": f"The margin is {low}",
            "not-higher": f"The margin is {high}",
        }[table.alternative]
        sentences.append(f"{asked}; conclusion: {table.conclusion[row]}.")
    if table.multiplicity != "none":
        sentences.append(
            f"Adjusted for the comparisons of its family ({table.multiplicity}): "
            f"{p_phrase(table.p_adjusted[row])}, {table.conclusion[row]}."
        )
    return " ".join(sentences)


def _simple_claim(table: ComparisonTable, row: int) -> str:
    """What the simple formula says."""
    if np.isnan(table.simple_p[row]):
        return "The simple formula gives no test."
    article, noun = finding(table.alternative, table.null, MEASURES[table.measure].unity)
    found = f"finds {article}{noun}"
    if not table.simple_p[row] < 1.0 - table.level:
        found = f"finds no {noun}"
    return (
        f"The simple formula claims {_amount(table, table.simple_estimate[row])} "
        f"({_range(table, table.simple_low[row], table.simple_high[row])}; "
        f"{p_phrase(table.simple_p[row])}) and {found}."
    )


def _behaviour(table: ComparisonTable, row: int) -> str:
    """How often the simple formula would err under this design."""
    if np.isnan(table.simple_coverage[row]):
        return ""
    alpha = f"{100 * (1 - table.level):g}%"
    scale = MEASURES[table.measure]
    text = (
        f"Under this design its {100 * table.limits_level:g}% interval holds the weighted "
        f"{scale.name} in {percent(table.simple_coverage[row], 0)} of samples"
    )
    if not np.isnan(table.simple_error_rate[row]):
        truth = "were the two population rates equal"
        if table.margin is not None or table.null != scale.unity:
            truth = "were the truth just at the limit that is tested"
        text += (
            f", and {truth} its {alpha} test would reject in "
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
            if not MEASURES[table.measure].is_log
            else (f"a factor of {fixed(float(np.exp(table.shift[row])), 2)}")
        )
        out = "the weights" if table.rates.crude_rate is None else "the weights and the adjustment"
        p = p_phrase(table.shift_p[row])
        sentences.append(f"Leaving {out} out shifts it by {by} ({p}).")
    return " ".join(sentences)
