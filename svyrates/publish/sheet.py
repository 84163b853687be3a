"""The sheet that figures are drawn on: labels on the left, marks in the middle, numbers right.

Everything outside the plot has its place in points, so that nothing overlaps whatever the size.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from svyrates.errors import FigureError
from svyrates.publish.lettering import SMALL, TEXT, TITLE, fitted, width_of, write

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = [
    "BAND", "DESIGN", "FULL_WIDTH", "GREY", "GUIDE", "INK", "SIMPLE", "Cell", "Frame", "Key",
    "Mark", "Row", "Sheet", "is_wide", "open_axes", "set_ticks",
]  # fmt: skip

FloatArray = NDArray[np.float64]

# Blue and orange are told apart by the colour-blind, and in greyscale by lightness; every colour
# of text has a contrast of at least 4.5 : 1 on white. No meaning rests on colour alone.
INK, GREY, GUIDE, BAND = "#1b2733", "#5a6570", "#dde2e7", "#e8eef4"
DESIGN, SIMPLE = "#0b4f8a", "#b35900"

FULL_WIDTH = 6.3
_NARROWEST = 3.0
_EDGE = 4.0
_GAP = 9.0
_INDENT = 7.0
_LINE = 10.0
_KEY = 19.0


@dataclass(frozen=True, slots=True)
class Cell:
    """A text in a column; `up` moves it by points from the middle of its row."""

    text: str
    color: str = INK
    bold: bool = False
    size: float = TEXT
    up: float = 0.0


@dataclass(frozen=True, slots=True)
class Row:
    """A row of the sheet: its label, and in each column one text or several above each other."""

    label: str
    cells: tuple[tuple[Cell, ...], ...]


@dataclass(frozen=True, slots=True)
class Mark:
    """How an estimate is drawn: never by colour alone."""

    shape: str
    color: str
    filled: bool = True
    line: float = 1.6

    def style(self) -> dict[str, Any]:
        """Properties of the line through the limits, and of the marker on it."""
        return {
            "color": self.color, "linewidth": self.line, "linestyle": "-",
            "solid_capstyle": "butt", "marker": self.shape, "markersize": 5.0,
            "markeredgewidth": 1.2, "markeredgecolor": self.color,
            "markerfacecolor": self.color if self.filled else "white",
        }  # fmt: skip


@dataclass(frozen=True, slots=True)
class Key:
    """What a mark means, in a few words."""

    mark: Mark
    meaning: str


@dataclass(frozen=True, slots=True)
class Frame:
    """Axes with text around them, and the ways to place it there.

    Attributes
    ----------
    ax : the axes
    room : points that the whole figure is wide
    left, right : points that the text left and right of the plot may take
    """

    ax: Axes
    room: float
    left: float
    right: float

    def points(self, x: float, y: float) -> Any:
        """Transform of points counted from a place in the axes (0 to 1)."""
        from matplotlib.transforms import Affine2D, ScaledTranslation

        scale: Any = self.ax.figure.dpi_scale_trans
        within: Any = self.ax.transAxes
        return Affine2D().scale(1 / 72) + scale + ScaledTranslation(x, y, within)

    def beside(self, x: float) -> Any:
        """Transform of points to the right of a place in the axes, and data upwards."""
        from matplotlib.transforms import blended_transform_factory

        return blended_transform_factory(self.points(x, 0.0), self.ax.transData)


@dataclass(frozen=True, slots=True)
class Sheet:
    """Rows in blocks, with all that is written around them.

    Attributes
    ----------
    title, subtitle : above the plot; what is shown, and in which unit
    heads : headings of the columns at the right
    blocks : a heading, or "", and the rows below it
    keys : marks that need a word of explanation
    remarks : lines below the plot
    pitch : points from one row to the next, at the least
    guides : light lines through the rows; otherwise between them
    """

    title: str
    subtitle: str
    heads: tuple[str, ...]
    blocks: tuple[tuple[str, tuple[Row, ...]], ...]
    keys: tuple[Key, ...] = ()
    remarks: tuple[str, ...] = ()
    pitch: float = 15.0
    guides: bool = True

    def lay_out(self, ax: Axes | None, width: float) -> tuple[Frame, FloatArray]:
        """Write everything but the marks; return the frame and the middle of each row."""
        room = _room(ax, width)
        columns = self._column_widths()
        right = sum(columns) + _GAP * len(columns)
        indent = _INDENT if any(heading for heading, _ in self.blocks) else 0.0
        left, labels = self._labels(room - right - 2 * _EDGE, indent)
        middles, headings, edges, body = self._rows(labels)
        subtitle = fitted(self.subtitle, room - 2 * _EDGE, SMALL, lines=3)
        frame = open_axes(
            ax, width, title=self.title, subtitle=subtitle, keys=self.keys, remarks=self.remarks,
            left=left, right=right, body=body, heads=bool("".join(self.heads)),
        )  # fmt: skip
        axes = frame.ax
        axes.set_ylim(body, 0.0)
        axes.yaxis.set_visible(False)
        for at, (heading, _) in zip(headings, self.blocks, strict=True):
            cut = fitted(heading, frame.room - 2 * _EDGE, bold=True, lines=1)[0]
            said = write(axes, -left, at, cut, frame.beside(0.0), bold=True, color=INK)
            # No line of the plot runs through a heading.
            said.set_bbox({"facecolor": "white", "edgecolor": "none", "pad": 1.0})
        rows = [row for _, rows in self.blocks for row in rows]
        for number, (middle, label, row) in enumerate(zip(middles, labels, rows, strict=True)):
            self._write_label(frame, label, indent - left, middle, f"label-{number}")
            self._write_cells(frame, row, middle, columns)
        for at in middles if self.guides else edges:
            axes.axhline(at, color=GUIDE, linewidth=0.6, zorder=0)
        self._write_heads(frame, columns)
        return frame, np.array(middles)

    def _write_label(
        self, frame: Frame, lines: list[str], x: float, middle: float, gid: str
    ) -> None:
        first = _LINE * (len(lines) - 1) / 2.0
        for number, line in enumerate(lines):
            up = first - _LINE * number
            write(
                frame.ax, x, middle, line, frame.beside(0.0), color=INK, up=up,
                gid=None if number else gid,
            )  # fmt: skip

    def _column_widths(self) -> list[float]:
        widths = [width_of(head, SMALL) for head in self.heads]
        for _, rows in self.blocks:
            for row in rows:
                for column, cells in enumerate(row.cells):
                    needed = [width_of(cell.text, cell.size, cell.bold) for cell in cells]
                    widths[column] = max([widths[column], *needed])
        return widths

    def _labels(self, most: float, indent: float) -> tuple[float, list[list[str]]]:
        """Room for the labels, at most half of what the columns leave, and their lines."""
        rows = [row for _, rows in self.blocks for row in rows]
        most = most / 2.0 - indent - _GAP
        labels = [fitted(row.label, most, lines=3) for row in rows]
        needed = max((width_of(line, TEXT) for lines in labels for line in lines), default=0.0)
        return needed + indent + _GAP, labels

    def _rows(self, labels: list[list[str]]) -> tuple[list[float], list[float], list[float], float]:
        """Middles of rows and headings and edges between rows, points from the top; the height."""
        at, first = 2.0, 0
        middles: list[float] = []
        headings: list[float] = []
        edges: list[float] = []
        for heading, rows in self.blocks:
            if heading:
                at += 4.0 if first else 0.0
                headings.append(at + 8.0)
                at += 15.0
            else:
                headings.append(at)
            for number, lines in enumerate(labels[first : first + len(rows)]):
                edges += [at] if number else []
                height = max(self.pitch, len(lines) * _LINE + 6.0)
                middles.append(at + height / 2.0)
                at += height
            first += len(rows)
        return middles, headings, edges, at + 2.0

    def _write_cells(self, frame: Frame, row: Row, middle: float, columns: list[float]) -> None:
        at = 0.0
        for column, cells in zip(columns, row.cells, strict=True):
            at += _GAP + column
            for cell in cells:
                write(
                    frame.ax, at, middle, cell.text, frame.beside(1.0), size=cell.size,
                    bold=cell.bold, color=cell.color, ha="right", up=cell.up,
                )  # fmt: skip

    def _write_heads(self, frame: Frame, columns: list[float]) -> None:
        at = 0.0
        for column, head in zip(columns, self.heads, strict=True):
            at += _GAP + column
            write(
                frame.ax, at, 5.5, head, frame.points(1.0, 1.0), size=SMALL, color=GREY,
                ha="right",
            )  # fmt: skip


def is_wide(ax: Axes | None, width: float) -> bool:
    """Whether there is room for more than one column of numbers."""
    return _room(ax, width) >= 5.0 * 72


def _room(ax: Axes | None, width: float) -> float:
    """Width of the figure, or of the place of the given axes, in points."""
    if ax is not None:
        return float(ax.bbox.width / ax.figure.dpi * 72)
    if not isinstance(width, int | float) or not _NARROWEST <= width <= 40:
        raise FigureError(
            f"`width` is the width of the figure in inches, from {_NARROWEST:g} to 40; got "
            f"{width!r}. A column of a journal is about 3.35 wide, a page about {FULL_WIDTH:g}."
        )
    return 72.0 * width


def open_axes(
    ax: Axes | None, width: float, *, title: str, subtitle: list[str], keys: tuple[Key, ...],
    remarks: tuple[str, ...], left: float, right: float, body: float, heads: bool = False,
    foot: float = 13.0,
) -> Frame:  # fmt: skip
    """Axes in a new figure, or the given ones, with room for and the text around them."""
    room = _room(ax, width)
    inner = room - 2 * _EDGE
    titles = fitted(title, inner, TITLE, bold=True, lines=3)
    below = [line for remark in remarks for line in fitted(remark, inner, SMALL, lines=4)]
    packed = _packed(keys, inner)
    above = (11.0 if heads else 4.0) + 12.0 * len(packed)
    top = above + 9.5 * len(subtitle) + 11.5 * len(titles) + _EDGE + 1.0
    bottom = foot + (4.0 + 9.0 * len(below) if below else 0.0) + _EDGE
    axes = _placed(ax, room, (left + _EDGE, bottom, right + _EDGE, top), body)
    axes.set_label(title)
    frame = Frame(axes, room, left, right)
    corner = frame.points(0.0, 1.0)
    at = above
    for number, some_keys in enumerate(packed):
        _write_keys(frame, some_keys, above - 12.0 * number - 7.0)
    for line in reversed(subtitle):
        write(axes, -left, at + 4.5, line, corner, size=SMALL, color=GREY)
        at += 9.5
    for line in reversed(titles):
        write(axes, -left, at + 6.5, line, corner, size=TITLE, bold=True, color=INK)
        at += 11.5
    at = -foot - 8.0
    for line in below:
        write(axes, -left, at, line, frame.points(0.0, 0.0), size=SMALL, color=GREY)
        at -= 9.0
    return frame


def _placed(
    ax: Axes | None, room: float, margins: tuple[float, float, float, float], body: float
) -> Axes:
    """New axes in a figure of their own, or the given axes made smaller by what stands around."""
    left, bottom, right, top = margins
    if ax is None:
        from matplotlib.figure import Figure

        height = top + body + bottom
        figure = Figure(figsize=(room / 72, height / 72), facecolor="white")
        return figure.add_axes(
            (
                left / room,
                bottom / height,
                (room - left - right) / room,
                body / height,
            )
        )
    if ax.figure.get_layout_engine() is None:
        box, size = ax.get_position(), ax.bbox
        across, up = box.width / size.width, box.height / size.height
        point = ax.figure.dpi / 72
        narrow = box.width - (left + right) * point * across
        low = box.height - (top + bottom) * point * up
        if narrow < 0.15 * box.width or low < 0.15 * box.height:
            raise FigureError(
                f"The axes are too small for their labels: {size.width / point / 72:.1f} by "
                f"{size.height / point / 72:.1f} inches, and the text around the plot takes "
                f"{(left + right) / 72:.1f} by {(top + bottom) / 72:.1f}. Make the figure larger, "
                "or leave `ax` out."
            )
        ax.set_position((box.x0 + left * point * across, box.y0 + bottom * point * up, narrow, low))
    return ax


def _packed(keys: tuple[Key, ...], room: float) -> list[list[Key]]:
    """Put as many keys on a line as it holds."""
    lines: list[list[Key]] = []
    used = room
    for key in keys:
        needed = _KEY + width_of(key.meaning, SMALL)
        if not lines or used + 12.0 + needed > room:
            lines.append([])
            used = -12.0
        lines[-1].append(key)
        used += 12.0 + needed
    return lines


def _write_keys(frame: Frame, keys: list[Key], y: float) -> None:
    """Write what the marks mean, in one line, each beside an example of it."""
    from matplotlib.lines import Line2D

    corner = frame.points(0.0, 1.0)
    at = -frame.left
    for key in keys:
        line = Line2D([at, at + 7.5, at + 15.0], [y] * 3, transform=corner, clip_on=False)
        line.set(markevery=[1], **key.mark.style())
        frame.ax.add_line(line)
        write(frame.ax, at + _KEY, y, key.meaning, corner, size=SMALL, color=INK)
        at += _KEY + width_of(key.meaning, SMALL) + 12.0


def set_ticks(axis: Any, ticks: FloatArray, texts: list[str]) -> None:
    """Fixed ticks with light lines across the plot, and no frame around it."""
    from matplotlib.ticker import NullLocator

    ax = axis.axes
    axis.set_minor_locator(NullLocator())
    axis.set_ticks(ticks, labels=texts)
    for label in axis.get_ticklabels():
        label.set(parse_math=False, usetex=False)
    ax.tick_params(
        axis=axis.axis_name, which="both", length=0, pad=3, labelsize=SMALL, labelcolor=GREY,
        labelfontfamily="DejaVu Sans",
    )  # fmt: skip
    ax.grid(visible=False)
    axis.grid(visible=True, color=GUIDE, linewidth=0.6)
    ax.set_axisbelow(True)
    ax.set_facecolor("none")
    for spine in ax.spines.values():
        spine.set_visible(False)
