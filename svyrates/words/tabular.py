"""What every result with a table can do: print itself, and be written in each format."""

from __future__ import annotations

from abc import ABC, abstractmethod
from os import PathLike
from pathlib import Path

from svyrates.words.table import Table

__all__ = ["Tabular"]


class Tabular(ABC):
    """A result that lays itself out as a `Table`.

    `percent` shows rates as percentages and differences in percentage points. Files for machines
    (CSV and JSON) hold every column with all its digits; the others hold what is read first.
    """

    @abstractmethod
    def table(self, *, percent: bool = False, every_column: bool = False) -> Table:
        """The table laid out for reading, or with every column."""

    def text(self, width: int = 80, *, percent: bool = False) -> str:
        """Plain text, at most `width` columns wide."""
        return self.table(percent=percent).text(width)

    def to_html(self, path: str | PathLike[str] | None = None, *, percent: bool = False) -> str:
        """HTML fragment with its own style; written to `path` if one is given."""
        return _kept(self.table(percent=percent).html(), path)

    def to_markdown(self, path: str | PathLike[str] | None = None, *, percent: bool = False) -> str:
        """Pipe table; written to `path` if one is given."""
        return _kept(self.table(percent=percent).markdown(), path)

    def to_latex(self, path: str | PathLike[str] | None = None, *, percent: bool = False) -> str:
        """LaTeX `tabular` that needs no package; written to `path` if one is given."""
        return _kept(self.table(percent=percent).latex(), path)

    def to_csv(self, path: str | PathLike[str] | None = None) -> str:
        """Every column as CSV; written to `path` if one is given.

        Numbers keep all their digits; text that a spreadsheet would take for a formula is defused
        with an apostrophe.
        """
        return _kept(self.table(every_column=True).csv(), path)

    def to_json(self, path: str | PathLike[str] | None = None) -> str:
        """Every column as JSON: title, columns, rows and notes; written to `path` if one is given.

        Missing and infinite numbers are null.
        """
        return _kept(self.table(every_column=True).json(), path)

    def __repr__(self) -> str:
        return self.text()

    def _repr_html_(self) -> str:
        return self.to_html()


def _kept(text: str, path: str | PathLike[str] | None) -> str:
    if path is not None:
        # Half of a surrogate pair has no bytes of its own; it is written as its escape.
        Path(path).write_text(text, encoding="utf-8", errors="backslashreplace", newline="")
    return text
