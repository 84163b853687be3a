"""Hostile text made harmless, for each place it may be printed in.

Column names, labels and values come from files of unknown origin. They may hold markup, terminal
escapes, spreadsheet formulas, or characters that reorder what is read.
"""

from __future__ import annotations

import html
import unicodedata

__all__ = [
    "display_width",
    "for_csv",
    "for_html",
    "for_latex",
    "for_markdown",
    "for_terminal",
    "shorten",
]

_LATEX = {
    "\\": r"\textbackslash{}", "&": r"\&", "%": r"\%", "$": r"\$", "#": r"\#", "_": r"\_",
    "{": r"\{", "}": r"\}", "~": r"\textasciitilde{}", "^": r"\textasciicircum{}",
    "<": r"\textless{}", ">": r"\textgreater{}", "|": r"\textbar{}",
    "–": "--", "≥": r"$\geq$", "−": "$-$", "∞": r"$\infty$", "×": r"$\times$", "√": r"$\surd$",
}  # fmt: skip
# The full-width signs are formulas too where spreadsheets are set to East Asian languages.
_FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r", "\n", "＝", "＋", "－", "＠")


def _visible(character: str) -> str:
    """Replace a character that moves the cursor or reorders text; keep all others."""
    if character in "\n\r\v\f\u2028\u2029":
        return "␤"
    if character == "\t":
        return " "
    # Cc: control; Cf: format, where the marks that turn the direction of reading live;
    # Cs: lone halves of a character, which cannot be written to a file.
    if unicodedata.category(character) in ("Cc", "Cf", "Cs"):
        return "" if character in "\u00ad\u200b\u200c\u200d\ufeff" else "�"
    return character


def for_terminal(text: object) -> str:
    """Text without control characters, line breaks or marks that reorder it."""
    plain = str(text)
    if plain.isascii() and plain.isprintable():
        return plain
    return "".join(map(_visible, plain))


def for_html(text: object) -> str:
    """Text for an HTML element or a quoted attribute."""
    return html.escape(for_terminal(text), quote=True)


def for_markdown(text: object) -> str:
    """Text for a cell of a Markdown table."""
    plain = for_terminal(text)
    escaped = "".join(f"\\{each}" if each in "\\`*_[]|#~" else each for each in plain)
    return escaped.replace("&", "&amp;").replace("<", "&lt;").replace(">", "&gt;")


def for_latex(text: object) -> str:
    """Text for a LaTeX table."""
    return "".join(_LATEX.get(each, each) for each in for_terminal(text))


def for_csv(text: object) -> str:
    """Text that no spreadsheet takes for a formula."""
    plain = str(text)
    return f"'{plain}" if plain.startswith(_FORMULA_STARTS) else plain


def _width_of(character: str) -> int:
    if unicodedata.combining(character) or unicodedata.category(character) in ("Mn", "Me"):
        return 0
    return 2 if unicodedata.east_asian_width(character) in "WF" else 1


def display_width(text: str) -> int:
    """Columns that a text takes in a terminal."""
    return len(text) if text.isascii() else sum(map(_width_of, text))


def shorten(text: str, width: int) -> str:
    """Cut a text to a display width, with an ellipsis where something is missing."""
    if display_width(text) <= width:
        return text
    kept, used = "", 0
    for character in text:
        used += _width_of(character)
        if used > width - 1:
            break
        kept += character
    return kept + "…"
