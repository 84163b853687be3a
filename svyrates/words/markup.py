"""Tables as HTML, Markdown and LaTeX."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from svyrates.words.escape import for_html, for_latex, for_markdown

if TYPE_CHECKING:
    from svyrates.words.table import Column

__all__ = ["TABLE_STYLE", "html_table", "latex_table", "markdown_table"]

# Colours are the reader's own, so that the table sits well on light and on dark pages.
TABLE_STYLE = (
    ".rates-table{border-collapse:collapse;font-variant-numeric:tabular-nums;margin:.75em 0;"
    "color:inherit;background:transparent;font-size:.95em}"
    ".rates-table caption{text-align:left;font-weight:600;padding:.25em 0 .5em;caption-side:top}"
    ".rates-table th,.rates-table td{padding:.3em .8em;border:0;text-align:left;"
    "vertical-align:top;background:transparent}"
    ".rates-table th:first-child{padding-left:0}"
    ".rates-table thead th{border-bottom:1.5px solid currentColor;vertical-align:bottom;"
    "font-weight:600}"
    ".rates-table tbody th{font-weight:500}"
    ".rates-table tbody tr+tr>*{border-top:1px solid rgba(127,127,127,.25)}"
    ".rates-table tbody tr:last-child>*{border-bottom:1.5px solid currentColor}"
    ".rates-table .rates-number{text-align:right}"
    ".rates-table td.rates-number{white-space:nowrap}"
    ".rates-frame{overflow-x:auto}"
    ".rates-notes{font-size:.85em;opacity:.85;margin:.2em 0;max-width:46em}"
)


def html_table(
    title: str, columns: Sequence[Column], notes: Sequence[str], *, in_page: bool = False
) -> str:
    """A table with a caption, scoped headers and paragraphs of notes."""
    # On a page, what scrolls must be reached by the keyboard; a fragment brings its own style.
    region = f' tabindex="0" role="region" aria-label="{for_html(title)}"' if in_page else ""
    lines = [] if in_page else [f"<style>{TABLE_STYLE}</style>"]
    lines.append(f'<div class="rates-frame"{region}><table class="rates-table">')
    lines.append(f"<caption>{for_html(title)}</caption>")
    if any(column.heading for column in columns):
        lines.append("<thead><tr>")
        lines += [
            f'<th scope="col"{_class(column)}>{for_html(column.heading)}</th>' for column in columns
        ]
        lines.append("</tr></thead>")
    lines.append("<tbody>")
    for row in zip(*(column.shown() for column in columns), strict=True):
        lines.append("<tr>")
        for column, cell in zip(columns, row, strict=True):
            tag, scope = ("th", ' scope="row"') if column.key else ("td", "")
            lines.append(f"<{tag}{scope}{_class(column)}>{for_html(cell)}</{tag}>")
        lines.append("</tr>")
    lines.append("</tbody></table></div>")
    lines += [f'<p class="rates-notes">{for_html(note)}</p>' for note in notes]
    return "\n".join(lines)


def _class(column: Column) -> str:
    return ' class="rates-number"' if column.kind == "number" else ""


def markdown_table(title: str, columns: Sequence[Column], notes: Sequence[str]) -> str:
    """A pipe table with its title in bold and its notes as paragraphs."""
    lines = [f"**{for_markdown(title)}**", ""]
    lines.append(_piped([for_markdown(column.heading) for column in columns]))
    lines.append(_piped(["---:" if column.kind == "number" else ":---" for column in columns]))
    rows = zip(*(column.shown() for column in columns), strict=True)
    lines += [_piped([for_markdown(cell) for cell in row]) for row in rows]
    for note in notes:
        lines += ["", for_markdown(note)]
    return "\n".join(lines) + "\n"


def _piped(cells: Sequence[str]) -> str:
    return f"| {' | '.join(cells)} |"


def latex_table(title: str, columns: Sequence[Column], notes: Sequence[str]) -> str:
    """A `tabular` with its title above and its notes below."""
    shape = "".join("r" if column.kind == "number" else "l" for column in columns)
    lines = [rf"\textbf{{{for_latex(title)}}}", "", rf"\begin{{tabular}}{{{shape}}}", r"\hline"]
    lines.append(_row([for_latex(column.heading) for column in columns]))
    lines.append(r"\hline")
    rows = zip(*(column.shown() for column in columns), strict=True)
    lines += [_row([for_latex(cell) for cell in row]) for row in rows]
    lines += [r"\hline", r"\end{tabular}"]
    for note in notes:
        lines += ["", for_latex(note)]
    return "\n".join(lines) + "\n"


def _row(cells: Sequence[str]) -> str:
    line = " & ".join(cells)
    # After the end of a row, LaTeX takes a bracket or a star for an argument of that end.
    return f"{'{}' if line.startswith(('[', '*')) else ''}{line} \\\\"
