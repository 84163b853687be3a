"""The figure of rates by group, and what it shares with the others."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from itertools import groupby
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from svyrates.errors import FigureError
from svyrates.publish.lettering import SMALL, harmless, plain_settings
from svyrates.publish.scale import extent_of_rates, plain_ticks
from svyrates.publish.sheet import (
    DESIGN,
    FULL_WIDTH,
    GREY,
    Cell,
    Mark,
    Row,
    Sheet,
    is_wide,
    set_ticks,
)
from svyrates.rates.table import RateTable
from svyrates.words import count, fixed, percent

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = [
    "BY_DESIGN", "NOTHING", "blocks_of", "draw_estimate", "draw_rates", "heading_of", "of_kind",
]  # fmt: skip

FloatArray = NDArray[np.float64]

NOTHING = "–"
BY_DESIGN = Mark("o", DESIGN)


def draw_rates(
    rates: RateTable, ax: Axes | None = None, *, percent: bool = True, width: float = FULL_WIDTH
) -> Axes:
    """Draw each group's rate with its confidence limits, one row per group.

    Parameters
    ----------
    rates : RateTable
    ax : matplotlib.axes.Axes, optional
        Axes to draw on. They are made smaller so that the labels stay in the place that the axes
        had; under a layout engine the engine makes the room. By default a new figure, whose
        height follows from the number of rows; it is ``ax.figure``.
    percent : bool
        Write rates as percentages; otherwise as proportions.
    width : float
        Width of the new figure in inches, 3 at the least. From 5 on the limits and sample sizes
        are written out too.

    Returns
    -------
    matplotlib.axes.Axes
        Data coordinates are proportions whatever `percent` says. The marks of row 0 have the ids
        (`get_gid`) ``rate-0`` and ``limits-0``, and so on in the order of the table.

    Raises
    ------
    FigureError
        Without matplotlib, for another kind of table, or when the axes are too small.

    Notes
    -----
    A row without a rate or without limits has a dash and no mark.

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.estimate_rates(design, outcome="damp", by="dwelling_type")
    >>> ax = sr.draw_rates(rates)
    >>> len([line for line in ax.lines if str(line.get_gid()).startswith("rate")])
    3

    Three dwelling types, three dots; ``ax.figure.savefig("damp.png", dpi=200)`` keeps the figure.
    """
    of_kind(rates, RateTable, "estimate_rates(design, ...)")
    with plain_settings():
        sheet, known = _rate_sheet(rates, in_percent=percent, wide=is_wide(ax, width))
        frame, middles = sheet.lay_out(ax, width)
        axes = frame.ax
        axes.set_xlim(extent_of_rates(rates.low[known], rates.high[known]))
        set_ticks(axes.xaxis, *plain_ticks(axes.get_xlim(), "%" if percent else ""))
        for row in np.flatnonzero(known).tolist():
            ends = (rates.low[row], rates.high[row])
            draw_estimate(axes, rates.rate[row], ends, middles[row], BY_DESIGN, "rate", row)
        return axes


def of_kind(given: Any, kind: type, maker: str) -> None:
    """Refuse anything but the table that a figure is drawn from."""
    if not isinstance(given, kind):
        raise FigureError(
            f"This figure is drawn from a {kind.__name__}; got {type(given).__name__}. Make one "
            f"with {maker}."
        )


def _rate_sheet(rates: RateTable, *, in_percent: bool, wide: bool) -> tuple[Sheet, Any]:
    known = ~np.isnan(rates.rate + rates.low + rates.high)
    show: Callable[[Any], str] = percent if in_percent else lambda value: fixed(value, 3)
    names, labels = rates.label_columns()
    rows = []
    for number, (low, high) in enumerate(zip(rates.low, rates.high, strict=True)):
        value = show(rates.rate[number]) if known[number] else NOTHING
        limits = NOTHING
        if known[number]:
            limits = f"{show(low).removesuffix('%')} to {show(high).removesuffix('%')}"
        cells = [(Cell(value, bold=True),), (Cell(limits),), (_grey(count(rates.n[number])),)]
        label = str(labels[number][-1]) if rates.columns else "All"
        rows.append(Row(label, tuple(cells if wide else [cells[0], cells[2]])))
    several = len(rates.outcomes) > 1
    headings = [
        heading_of(
            [f"{outcome} = {success}"] if several else [],
            list(zip(rates.columns[:-1], group[:-1], strict=True)),
        )
        for outcome, success in zip(rates.outcomes, rates.success, strict=True)
        for group in rates.groups
    ]
    limits_of = f"{100 * rates.level:g}% confidence limits"
    by = f" by {names[-1]}" if rates.columns and not rates.overlapping else ""
    about = f"{len(rates.outcomes)} outcomes" if several else rates.what(0)
    title = f"Rates of {about}{by}" if rates.rate.size > 1 else f"Rate of {about}"
    sheet = Sheet(
        title=harmless(title),
        subtitle=f"{'Percent' if in_percent else 'Proportion'}, with {limits_of}",
        heads=("rate", "limits", "n") if wide else ("rate", "n"),
        blocks=blocks_of(headings, rows),
    )
    return sheet, known


def blocks_of(headings: Sequence[str], rows: list[Row]) -> tuple[tuple[str, tuple[Row, ...]], ...]:
    """Rows with the same heading in a row are one block."""
    pairs = groupby(zip(headings, rows, strict=True), key=lambda pair: pair[0])
    return tuple((heading, tuple(row for _, row in block)) for heading, block in pairs)


def heading_of(first: list[str], held: Sequence[tuple[str, object]]) -> str:
    """Heading of a block: the outcome, if there are several, and the levels held fixed."""
    return " · ".join([*first, *(f"{name}: {level}" for name, level in held)])


def _grey(text: str) -> Cell:
    return Cell(text, GREY, size=SMALL)


def draw_estimate(
    ax: Axes, value: float, ends: tuple[float, float], y: float, mark: Mark, name: str, row: int
) -> None:
    """One estimate with its limits; an open end is an arrow at the edge of the plot."""
    style = mark.style()
    edges = ax.get_xlim()
    inside = [float(np.clip(end, *edges)) for end in ends]
    prefix = "simple-limits" if name == "simple" else "limits"
    line = {key: style[key] for key in ("color", "linewidth", "linestyle", "solid_capstyle")}
    ax.plot(inside, [y, y], **line, zorder=2.5, clip_on=False, gid=f"{prefix}-{row}")
    for end, kept, shape in zip(ends, inside, ("<", ">"), strict=True):
        if end != kept:
            ax.plot(
                [kept], [y], marker=shape, markersize=4.0, color=mark.color, linestyle="none",
                clip_on=False, zorder=2.5, gid=f"open-{row}",
            )  # fmt: skip
    ax.plot([value], [y], **{**style, "linestyle": "none"}, zorder=3, clip_on=False,
            gid=f"{name}-{row}")  # fmt: skip
