"""The figure of rates that change from wave to wave."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from svyrates.errors import FigureError
from svyrates.publish.figures import NOTHING, of_kind
from svyrates.publish.lettering import (
    SMALL,
    TEXT,
    fitted,
    harmless,
    plain_settings,
    width_of,
    write,
)
from svyrates.publish.scale import extent_of_rates, plain_ticks
from svyrates.publish.sheet import DESIGN, FULL_WIDTH, GREY, SIMPLE, Frame, open_axes, set_ticks
from svyrates.rates.table import RateTable
from svyrates.words import join_words, percent

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["draw_change"]

FloatArray = NDArray[np.float64]

# Colour, marker and dashes go round in cycles of different lengths: no two of the first sixty lines
# are alike, and neighbours differ in all three.
_COLORS = (DESIGN, SIMPLE, "#1b7a57", "#8a2f7b", GREY)
_MARKERS = ("o", "s", "^", "D")
_DASHES = ("-", (0, (4, 1.5)), (0, (1, 1.2)))
_SPACING = 10.0
_DODGE = 3.5
_LEADER = 12.0
_PAD = 20.0


@dataclass(frozen=True, slots=True)
class _Line:
    """A group's rates through the waves; `rows` are its rows in the table."""

    label: str
    rows: list[int]


def draw_change(rates: RateTable, ax: Axes | None = None, *, width: float = FULL_WIDTH) -> Axes:
    """Draw rates from wave to wave, one line per group, with their confidence limits.

    The waves are the levels of the first grouping column, in the order of the table; every
    combination of the other columns (and of the outcomes, if there are several) is a line, labelled
    where it ends.

    Parameters
    ----------
    rates : RateTable
        From ``by=["wave", "group"]``, or from ``by="wave"`` for one line.
    ax, width
        As for `draw_rates`.

    Returns
    -------
    matplotlib.axes.Axes
        Waves stand at x = 0, 1, …, moved by a few points so that limits do not cover each other;
        y is a proportion. The marks of row 0 of the table have the ids ``rate-0`` and
        ``limits-0``.

    Raises
    ------
    FigureError
        As for `draw_rates`, and when the first grouping column has fewer than two levels.

    Notes
    -----
    A rate without limits is left out: its line has a gap, and a dash where it would end. Lines do
    not say whether a change is more than chance; compare the waves with `compare_rates`.

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey()
    >>> survey["stratum"] = survey["wave"] + " " + survey["district"]
    >>> design = sr.SampleDesign(survey, weight="wt", strata="stratum", clusters="block")
    >>> rates = sr.estimate_rates(design, outcome="damp", by=["wave", "sex"])
    >>> ax = sr.draw_change(rates)
    >>> [label.get_text() for label in ax.get_xticklabels()]
    ['2021', '2024']

    Two lines, women and men, from 2021 to 2024.
    """
    of_kind(rates, RateTable, "estimate_rates(design, ...)")
    waves, lines = _lines(rates)
    known = ~np.isnan(rates.rate + rates.low + rates.high)
    with plain_settings():
        frame = _open(rates, lines, ax, width)
        axes = frame.ax
        plot = axes.bbox.width / axes.figure.dpi * 72
        pad = (len(waves) - 1) * _PAD / max(plot - 2 * _PAD, _PAD)
        axes.set_xlim(-pad, len(waves) - 1 + pad)
        axes.set_ylim(extent_of_rates(rates.low[known], rates.high[known]))
        texts = [fitted(wave, 0.9 * plot / len(waves), SMALL, lines=1)[0] for wave in waves]
        set_ticks(axes.xaxis, np.arange(len(waves), dtype=np.float64), texts)
        set_ticks(axes.yaxis, *plain_ticks(axes.get_ylim(), "%"))
        for number, line in enumerate(lines):
            _draw(frame, rates, known, line, number, len(lines))
        _label(frame, rates, known, lines)
        return axes


def _lines(rates: RateTable) -> tuple[list[str], list[_Line]]:
    """Waves, and the rows of every line."""
    waves = list(dict.fromkeys(group[0] for group in rates.groups if group))
    if rates.overlapping or len(waves) < 2:
        raise FigureError(
            "Change is drawn between the levels of the first grouping column, and this table has "
            f"{'overlapping groups' if rates.overlapping else f'{len(waves)} of them'}. Estimate "
            'with by=["wave", ...] on a design that holds two waves or more.'
        )
    rows: dict[tuple[str, ...], list[int]] = {}
    several = len(rates.outcomes) > 1
    for position, outcome in enumerate(rates.outcomes):
        for number, group in enumerate(rates.groups):
            name = ((outcome,) if several else ()) + tuple(map(str, group[1:]))
            rows.setdefault(name, []).append(position * len(rates.groups) + number)
    return list(map(str, waves)), [_Line(", ".join(name), each) for name, each in rows.items()]


def _open(rates: RateTable, lines: list[_Line], ax: Axes | None, width: float) -> Frame:
    several = len(rates.outcomes) > 1
    about = f"{len(rates.outcomes)} outcomes" if several else rates.what(0)
    by = f" by {join_words(rates.columns[1:])}" if len(rates.columns) > 1 else ""
    labels = [f"{harmless(line.label)} 00.0%".strip() for line in lines]
    share = 0.45 * (72 * width if ax is None else ax.bbox.width / ax.figure.dpi * 72)
    right = min(max(width_of(label, TEXT) for label in labels) + _LEADER + 8.0, share)
    return open_axes(
        ax, width, title=harmless(f"Rates of {about}{by}"),
        subtitle=[f"Percent, with {100 * rates.level:g}% confidence limits"], keys=(), remarks=(),
        left=26.0, right=right, foot=16.0, body=max(150.0, 30.0 + 1.2 * _SPACING * len(lines)),
    )  # fmt: skip


def _draw(
    frame: Frame, rates: RateTable, known: Any, line: _Line, number: int, n_lines: int
) -> None:
    """One line with its markers and limits, a little beside the others."""
    from matplotlib.transforms import ScaledTranslation

    ax = frame.ax
    aside = min(_DODGE, 1.6 * _PAD / n_lines) * (number - (n_lines - 1) / 2.0)
    moved = ax.transData + ScaledTranslation(aside / 72, 0.0, ax.figure.dpi_scale_trans)
    color = _COLORS[number % len(_COLORS)]
    waves = np.arange(len(line.rows), dtype=np.float64)
    path = np.where(known[line.rows], rates.rate[line.rows], np.nan)
    if not np.isnan(path).all():
        ax.plot(
            waves, path, transform=moved, color=color, linewidth=1.5, zorder=2,
            linestyle=_DASHES[number % len(_DASHES)], gid=f"line-{number}",
        )  # fmt: skip
    for wave, row in zip(waves, line.rows, strict=True):
        if known[row]:
            ax.plot(
                [wave, wave], [rates.low[row], rates.high[row]], transform=moved, color=color,
                linewidth=1.0, alpha=0.75, zorder=1.5, solid_capstyle="butt", gid=f"limits-{row}",
            )  # fmt: skip
            ax.plot(
                [wave], [rates.rate[row]], transform=moved, marker=_MARKERS[number % len(_MARKERS)],
                markersize=4.5, color=color, linestyle="none", zorder=3, clip_on=False,
                gid=f"rate-{row}",
            )  # fmt: skip


def _label(frame: Frame, rates: RateTable, known: Any, lines: list[_Line]) -> None:
    """Name and last rate of each line at its right end, moved apart where they would overlap."""
    ax = frame.ax
    bottom, top = ax.get_ylim()
    height = ax.bbox.height / ax.figure.dpi * 72
    wanted = []
    for line in lines:
        drawn = [row for row in line.rows if known[row]]
        rate = rates.rate[drawn[-1]] if drawn else bottom
        wanted.append((rate - bottom) / (top - bottom) * height)
    places = _apart(np.array(wanted), _SPACING, height)
    right = frame.right - _LEADER
    for number, (line, place, end) in enumerate(zip(lines, places, wanted, strict=True)):
        last = line.rows[-1]
        value = percent(rates.rate[last]) if known[last] else NOTHING
        color = _COLORS[number % len(_COLORS)]
        corner = frame.points(1.0, 0.0)
        ax.plot(
            [0.0, _LEADER - 3.0], [end, place], transform=corner, color=color, linewidth=0.6,
            clip_on=False, zorder=1, gid=f"leader-{number}",
        )  # fmt: skip
        room = right - width_of(value, TEXT, True) - 4.0
        name = fitted(line.label, room, lines=1)[0] if line.label else ""
        write(ax, _LEADER, place, name, corner, color=color, gid=f"label-{number}")
        at = _LEADER + (width_of(name, TEXT) + 4.0 if name else 0.0)
        write(ax, at, place, value, corner, color=color, bold=True, gid=f"value-{number}")


def _apart(wanted: FloatArray, spacing: float, height: float) -> FloatArray:
    """Places at least `spacing` apart in the order of those wanted, and close to them.

    Neighbours that are too close form a block around their mean, blocks that touch are merged
    (isotonic regression by pooling adjacent violators).
    """
    order = np.argsort(wanted, kind="stable")
    blocks: list[list[float]] = []
    for rank, position in enumerate(order):
        blocks.append([float(wanted[position]) - rank * spacing])
        while len(blocks) > 1 and np.mean(blocks[-2]) > np.mean(blocks[-1]):
            last = blocks.pop()
            blocks[-1] += last
    shifts = np.concatenate([np.full(len(block), np.mean(block)) for block in blocks])
    most = height - (len(wanted) - 1) * spacing
    places = np.empty(len(wanted))
    places[order] = np.clip(shifts, 0.0, max(most, 0.0)) + spacing * np.arange(len(wanted))
    return places
