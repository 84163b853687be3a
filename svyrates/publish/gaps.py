"""Figures of comparisons, and of comparisons beside the simple formula."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from svyrates.compare.conclusions import finding
from svyrates.compare.measures import MEASURES
from svyrates.compare.table import ComparisonTable
from svyrates.compare.verdict import MEANINGS, MISLEADING, meaning
from svyrates.errors import FigureError
from svyrates.publish.figures import (
    BY_DESIGN,
    NOTHING,
    blocks_of,
    draw_estimate,
    heading_of,
    of_kind,
)
from svyrates.publish.lettering import harmless, plain_settings
from svyrates.publish.scale import plain_ticks, ratio_ticks, spread_of
from svyrates.publish.sheet import (
    BAND,
    DESIGN,
    FULL_WIDTH,
    GREY,
    INK,
    SIMPLE,
    Cell,
    Key,
    Mark,
    Row,
    Sheet,
    is_wide,
    set_ticks,
)
from svyrates.words import fixed, p_value, points

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["draw_against_simple", "draw_comparisons"]

FloatArray = NDArray[np.float64]

_OPEN = Mark("o", DESIGN, filled=False)
_BY_FORMULA = Mark("s", SIMPLE, filled=False, line=1.1)
# Points that each of the two intervals stands above and below the middle of its row.
_TRACK = 6.0


def draw_comparisons(
    gaps: ComparisonTable,
    ax: Axes | None = None,
    *,
    margin: float | tuple[float, float] | None = None,
    width: float = FULL_WIDTH,
) -> Axes:
    """Draw each difference (or ratio) with its limits against no difference.

    A filled mark and bold figures are evidence of a difference at the level of the table, an open
    mark is none.

    Parameters
    ----------
    gaps : ComparisonTable
    ax, width
        As for `draw_rates`.
    margin : float or (float, float), optional
        Margin, shaded; that of the question by default. 0.05 is 5 percentage points either way,
        for a ratio 1.25 is from 1/1.25 to 1.25; or its two ends, on the scale of the measure.

    Returns
    -------
    matplotlib.axes.Axes
        Data coordinates are those of the table: proportions or ratios. The marks of row 0 have the
        ids ``estimate-0`` and ``limits-0``. A limit at infinity is an arrow at the edge.

    Raises
    ------
    FigureError
        As for `draw_rates`, and for a margin that does not hold the value of no difference.

    Examples
    --------
    >>> import warnings
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.estimate_rates(design, outcome="damp", by="sex")
    >>> with warnings.catch_warnings():
    ...     warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
    ...     gaps = sr.compare_rates(rates)
    >>> ax = sr.draw_comparisons(gaps, margin=0.05)
    >>> ax.get_label()
    'Differences of rates of damp = 1'

    One row, with a band from -5 to +5 percentage points behind it.
    """
    of_kind(gaps, ComparisonTable, "compare_rates(rates, ...)")
    band = gaps.margin if margin is None else _margin(gaps, margin)
    with plain_settings():
        found = np.nan_to_num(gaps.p_adjusted, nan=1.0) < 1.0 - gaps.level
        known = ~np.isnan(gaps.estimate + gaps.low + gaps.high)
        sheet = _gap_sheet(gaps, known, found, band, wide=is_wide(ax, width))
        frame, middles = sheet.lay_out(ax, width)
        axes = frame.ax
        shown = [gaps.estimate[known], gaps.low[known], gaps.high[known]]
        _scale(axes, gaps, shown, band)
        for row in np.flatnonzero(known).tolist():
            mark = BY_DESIGN if found[row] else _OPEN
            ends = (gaps.low[row], gaps.high[row])
            draw_estimate(axes, gaps.estimate[row], ends, middles[row], mark, "estimate", row)
        return axes


def draw_against_simple(
    gaps: ComparisonTable, ax: Axes | None = None, *, width: float = FULL_WIDTH
) -> Axes:
    """Draw, for each comparison, the design-based interval and the simple formula's below it.

    The verdict on the simple formula stands at the right; where it misleads, the verdict is bold
    and has a mark.

    Parameters
    ----------
    gaps : ComparisonTable
    ax, width
        As for `draw_rates`.

    Returns
    -------
    matplotlib.axes.Axes
        Data coordinates are those of the table: proportions or ratios. The marks of row 0 have the
        ids ``estimate-0``, ``limits-0``, ``simple-0`` and ``simple-limits-0``.

    Raises
    ------
    FigureError
        As for `draw_rates`.

    Examples
    --------
    >>> import warnings
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.estimate_rates(design, outcome="damp", by="dwelling_type")
    >>> with warnings.catch_warnings():
    ...     warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
    ...     gaps = sr.compare_rates(rates, versus="park home")
    >>> ax = sr.draw_against_simple(gaps)
    >>> [text.get_text() for text in ax.texts if "▲" in text.get_text()]
    ['▲ false-alarm', '▲ false-alarm']

    Both simple intervals leave zero out, the design-based ones do not.
    """
    of_kind(gaps, ComparisonTable, "compare_rates(rates, ...)")
    with plain_settings():
        design = ~np.isnan(gaps.estimate + gaps.low + gaps.high)
        simple = ~np.isnan(gaps.simple_estimate + gaps.simple_low + gaps.simple_high)
        sheet = _simple_sheet(gaps, design, simple, wide=is_wide(ax, width))
        frame, middles = sheet.lay_out(ax, width)
        axes = frame.ax
        shown = [array[design] for array in (gaps.estimate, gaps.low, gaps.high)]
        shown += [
            array[simple] for array in (gaps.simple_estimate, gaps.simple_low, gaps.simple_high)
        ]
        _scale(axes, gaps, shown, None)
        for row in np.flatnonzero(design).tolist():
            ends = (gaps.low[row], gaps.high[row])
            at = middles[row] - _TRACK
            draw_estimate(axes, gaps.estimate[row], ends, at, BY_DESIGN, "estimate", row)
        for row in np.flatnonzero(simple).tolist():
            ends = (gaps.simple_low[row], gaps.simple_high[row])
            at = middles[row] + _TRACK
            draw_estimate(axes, gaps.simple_estimate[row], ends, at, _BY_FORMULA, "simple", row)
        return axes


def _gap_sheet(
    gaps: ComparisonTable, known: Any, found: Any, band: tuple[float, float] | None, *, wide: bool
) -> Sheet:
    show, unit = _writer(gaps)
    rows = []
    for row, label in enumerate(_labels(gaps)):
        bold = bool(found[row] and known[row])
        cells = [
            (Cell(show(gaps.estimate[row]) if known[row] else NOTHING, bold=bold),),
            (Cell(_limits(gaps.low[row], gaps.high[row], show) if known[row] else NOTHING),),
            (Cell(p_value(gaps.p_adjusted[row]), bold=bold),),
        ]
        rows.append(Row(label, tuple(cells if wide else cells[:1])))
    within = f"; shaded: margin from {show(band[0])} to {show(band[1])}" if band else ""
    alpha = f"{100 * (1 - gaps.level):.3g}%"
    return Sheet(
        title=_gap_title(gaps),
        subtitle=f"{unit}, with {100 * gaps.limits_level:g}% limits{within}",
        heads=(_short(gaps), "limits", "p") if wide else ("",),
        blocks=blocks_of(_level_headings(gaps), rows),
        keys=(
            Key(BY_DESIGN, f"evidence of {_finding(gaps)} ({alpha} level{_family(gaps)})"),
            Key(_OPEN, f"no evidence of {_finding(gaps)}"),
        ),
    )


def _simple_sheet(gaps: ComparisonTable, design: Any, simple: Any, *, wide: bool) -> Sheet:
    show, unit = _writer(gaps)
    rows = []
    for row, label in enumerate(_labels(gaps)):
        verdict = str(gaps.verdict[row])
        misleads = verdict in MISLEADING
        estimates = (
            Cell(show(gaps.estimate[row]) if design[row] else NOTHING, DESIGN, up=_TRACK),
            Cell(show(gaps.simple_estimate[row]) if simple[row] else NOTHING, SIMPLE, up=-_TRACK),
        )
        tests = (
            Cell(p_value(gaps.p[row]), DESIGN, up=_TRACK),
            Cell(p_value(gaps.simple_p[row]), SIMPLE, up=-_TRACK),
        )
        said = Cell(f"▲ {verdict}" if misleads else verdict, INK if misleads else GREY, misleads)
        rows.append(Row(label, (estimates, tests, (said,)) if wide else ((said,),)))
    present = set(map(str, gaps.verdict))
    return Sheet(
        title=_gap_title(gaps),
        subtitle=f"{unit}, with {100 * gaps.limits_level:g}% limits",
        heads=(_short(gaps), "p", "verdict") if wide else ("verdict",),
        blocks=blocks_of(_level_headings(gaps), rows),
        keys=(Key(BY_DESIGN, "design-based"), Key(_BY_FORMULA, "simple formula")),
        remarks=tuple(
            f"{each}: {meaning(each, _finding(gaps))}." for each in MEANINGS if each in present
        ),
        pitch=29.0,
        guides=False,
    )


def _level_headings(gaps: ComparisonTable) -> list[str]:
    names, levels = gaps.label_columns()
    headings = []
    for level in levels:
        held = list(zip(names, level, strict=True))
        first = [str(value) for name, value in held if name == "outcome"]
        headings.append(heading_of(first, [pair for pair in held if pair[0] != "outcome"]))
    return headings


def _labels(gaps: ComparisonTable) -> list[str]:
    if _common(gaps) is not None:
        return list(gaps.group)
    return [f"{one} versus {other}" for one, other in zip(gaps.group, gaps.versus, strict=True)]


def _common(gaps: ComparisonTable) -> str | None:
    """What every group is compared with, if it is the same in more rows than one."""
    return gaps.versus[0] if len(gaps) > 1 and len(set(gaps.versus)) == 1 else None


def _gap_title(gaps: ComparisonTable) -> str:
    name = MEASURES[gaps.measure].name
    outcomes = gaps.rates.outcomes
    about = f"{len(outcomes)} outcomes" if len(outcomes) > 1 else gaps.rates.what(0)
    versus = "" if _common(gaps) is None else f" versus {_common(gaps)}"
    return harmless(f"{name.capitalize()}s of rates of {about}{versus}")


def _finding(gaps: ComparisonTable) -> str:
    return "".join(finding(gaps.alternative, gaps.null, MEASURES[gaps.measure].unity))


def _family(gaps: ComparisonTable) -> str:
    return "" if gaps.multiplicity == "none" else ", adjusted p"


def _null(gaps: ComparisonTable) -> float:
    """Where the line stands: the null value, or equality between the ends of a margin."""
    return MEASURES[gaps.measure].unity if np.isnan(gaps.null) else gaps.null


def _short(gaps: ComparisonTable) -> str:
    return "points" if gaps.measure == "difference" else gaps.measure.replace("_", " ")


def _writer(gaps: ComparisonTable) -> tuple[Callable[[Any], str], str]:
    """How values of the measure are written, and their unit in words."""
    if gaps.measure == "difference":
        return _points, "Percentage points"
    if gaps.measure == "relative_difference":
        return (lambda value: f"{_points(value)}%"), "Percent of the rate compared with"
    name = gaps.measure.replace("_", " ").capitalize()
    return (lambda value: fixed(value, 2)), f"{name}, on a logarithmic axis"


def _points(value: float) -> str:
    return points(value).removesuffix(" points").replace("-", "−")


def _limits(low: float, high: float, show: Callable[[Any], str]) -> str:
    if np.isinf(high):
        return f"above {show(low)}"
    return f"below {show(high)}" if np.isinf(low) else f"{show(low)} to {show(high)}"


def _margin(
    gaps: ComparisonTable, margin: float | tuple[float, float] | None
) -> tuple[float, float] | None:
    if margin is None:
        return None
    unity = MEASURES[gaps.measure].unity
    try:
        ends = np.asarray(margin, dtype=np.float64).ravel()
    except (TypeError, ValueError):
        ends = np.array([])
    if ends.size == 1 and _is_ratio(gaps):
        ends = np.array([1.0 / ends[0] if ends[0] else 0.0, ends[0]])
    elif ends.size == 1:
        ends = np.array([-ends[0], ends[0]])
    if ends.size != 2 or not np.isfinite(ends).all() or not ends[0] < unity < ends[1]:
        raise FigureError(
            f"`margin` must be one number, or two ends around {unity:g}, on the scale of the "
            f"{gaps.measure.replace('_', ' ')}; got {margin!r}."
        )
    return float(ends[0]), float(ends[1])


def _is_ratio(gaps: ComparisonTable) -> bool:
    return gaps.measure in ("ratio", "odds_ratio")


def _scale(
    ax: Axes, gaps: ComparisonTable, shown: list[FloatArray], band: tuple[float, float] | None
) -> None:
    """Axis of the measure: its extent and ticks, the margin, and the line of the null value."""
    must = [_null(gaps), *(band or ())]
    if _is_ratio(gaps):
        ax.set_xscale("log")
    ax.set_xlim(spread_of(shown, must, ratio=_is_ratio(gaps)))
    if _is_ratio(gaps):
        ticks, texts = ratio_ticks(ax.get_xlim())
    else:
        unit = "%" if gaps.measure == "relative_difference" else ""
        ticks, texts = plain_ticks(ax.get_xlim(), unit, signed=True)
    set_ticks(ax.xaxis, ticks, texts)
    if band is not None:
        ax.axvspan(*band, color=BAND, linewidth=0.0, zorder=-1, gid="margin")
    ax.axvline(_null(gaps), color=INK, linewidth=0.9, zorder=1, gid="null")
