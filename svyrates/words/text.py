"""Tables as terminal text that never exceeds its width and never hides a column."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from svyrates.words.escape import display_width, for_terminal, shorten

if TYPE_CHECKING:
    from svyrates.words.table import Column

__all__ = ["NARROWEST", "render", "wrap"]

NARROWEST = 40
_GAP = 2
_LEAST_TEXT = 8
_MOST_WORD = 16
_MOST_LINES = 3


def render(title: str, columns: Sequence[Column], notes: Sequence[str], width: int) -> str:
    """Title, table and notes."""
    lines = wrap(for_terminal(title), width) if title else []
    cells = [[for_terminal(cell) for cell in column.shown()] for column in columns]
    headings = [for_terminal(column.heading) for column in columns]
    for number, panel in enumerate(_panels(columns, headings, cells, width)):
        if number:
            lines.append("")
        lines += _panel(columns, headings, cells, panel, width)
    for note in notes:
        lines += wrap(for_terminal(note), width, indent="  ")
    return "\n".join(line.rstrip() for line in lines)


def wrap(text: str, width: int, indent: str = "") -> list[str]:
    """Break a text into lines at spaces, or inside a word that is too long by itself."""
    lines: list[str] = []
    line = ""
    for word in text.split():
        start = indent if lines else ""
        if line and display_width(line) + 1 + display_width(word) > width:
            lines.append(line)
            line, start = "", indent
        line = f"{line} {word}" if line else start + word
        while display_width(line) > width:
            head = _fitting(line, width)
            lines.append(head)
            line = indent + line[len(head) :]
    return [*lines, line] if line.strip() else lines


def _fitting(text: str, width: int) -> str:
    """Longest start of a text that fits; marks stay with the letter that carries them."""
    used = 0
    for at, character in enumerate(text):
        used += display_width(character)
        if used > width:
            return text[: max(at, 1)]
    return text


def _widths(
    columns: Sequence[Column],
    headings: list[str],
    cells: list[list[str]],
    chosen: Sequence[int],
    width: int,
) -> dict[int, int]:
    """Width of each chosen column: values whole if they can be, long text shortened."""
    needed = {}
    for index in chosen:
        values = max((display_width(cell) for cell in cells[index]), default=0)
        needed[index] = max(values, _longest_word([headings[index]]), 1)
    # Long labels give way first, the longest most, so that the numbers stay on the line.
    floors = {
        index: min(max(_longest_word([headings[index], *cells[index]]), _LEAST_TEXT), _MOST_WORD)
        for index in chosen
        if columns[index].kind == "text"
    }
    while _total(needed.values()) > width:
        giving = [index for index, floor in floors.items() if needed[index] > floor]
        if not giving:
            break
        needed[max(giving, key=needed.__getitem__)] -= 1
    return needed


def _squeezed(columns: Sequence[Column], widths: dict[int, int], width: int) -> dict[int, int]:
    """Widths below what is comfortable: words break before any number is cut."""
    sizes = dict(widths)
    while _total(sizes.values()) > width and max(sizes.values()) > 1:
        words = [i for i in sizes if columns[i].kind == "text" and sizes[i] > _LEAST_TEXT]
        sizes[max(words or sizes, key=sizes.__getitem__)] -= 1
    return sizes


def _longest_word(texts: Sequence[str]) -> int:
    return max((display_width(word) for text in texts for word in text.split()), default=0)


def _total(widths: object) -> int:
    numbers = list(widths)  # type: ignore[call-overload]
    return int(sum(numbers)) + _GAP * (len(numbers) - 1)


def _panels(
    columns: Sequence[Column], headings: list[str], cells: list[list[str]], width: int
) -> list[list[int]]:
    """Split the columns into stacked panels that fit, each led by the key columns."""
    everything = list(range(len(columns)))
    if _total(_widths(columns, headings, cells, everything, width).values()) <= width:
        return [everything]
    keys = [index for index in everything if columns[index].key]
    others = [index for index in everything if not columns[index].key]
    panels: list[list[int]] = []
    panel: list[int] = []
    for index in others:
        tried = [*keys, *panel, index]
        apart = bool(panel) and columns[panel[-1]].panel != columns[index].panel
        if apart or (
            panel and _total(_widths(columns, headings, cells, tried, width).values()) > width
        ):
            panels.append([*keys, *panel])
            panel = []
        panel.append(index)
    return [*panels, [*keys, *panel]]


def _panel(
    columns: Sequence[Column],
    headings: list[str],
    cells: list[list[str]],
    panel: list[int],
    width: int,
) -> list[str]:
    widths = _widths(columns, headings, cells, panel, width)
    if _total(widths.values()) > width:
        widths = _squeezed(columns, widths, width)
    heads = {index: wrap(headings[index], widths[index]) for index in panel}
    height = max(len(head) for head in heads.values())
    lines = []
    for row in range(height):
        parts = []
        for index in panel:
            head = heads[index]
            at = row - (height - len(head))
            parts.append(_aligned(columns[index], head[at] if at >= 0 else "", widths[index]))
        lines.append((" " * _GAP).join(parts))
    lines = [line for line in lines if line.strip()]
    lines.append("─" * min(_total(widths.values()), width))
    n_rows = len(cells[panel[0]]) if panel else 0
    for row in range(n_rows):
        wrapped = {
            index: _cell(columns[index], cells[index][row], widths[index]) for index in panel
        }
        for line in range(max(len(part) for part in wrapped.values())):
            parts = [
                _aligned(
                    columns[index],
                    wrapped[index][line] if line < len(wrapped[index]) else "",
                    widths[index],
                )
                for index in panel
            ]
            lines.append((" " * _GAP).join(parts))
    return lines


def _cell(column: Column, text: str, width: int) -> list[str]:
    """Text cells wrap over at most a few lines; numbers stay whole or are cut with an ellipsis."""
    if display_width(text) <= width or column.kind == "number":
        return [shorten(text, width)]
    lines = wrap(text, width) or [""]
    if len(lines) <= _MOST_LINES:
        return lines
    return [*lines[: _MOST_LINES - 1], shorten(" ".join(lines[_MOST_LINES - 1 :]), width)]


def _aligned(column: Column, text: str, width: int) -> str:
    space = " " * max(width - display_width(text), 0)
    return space + text if column.kind == "number" else text + space
