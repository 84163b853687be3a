"""One plain table that can be written in every format the package has; it knows no statistics."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any, Literal

from svyrates.words import data, markup, text

__all__ = ["Column", "Table"]


@dataclass(frozen=True, slots=True)
class Column:
    """One column of a table.

    Attributes
    ----------
    name : machine name, used in CSV and JSON
    heading : what a reader sees
    values : raw values, one per row
    kind : "number" columns are aligned to the right
    show : turns a raw value into its display
    key : whether the column labels the rows
    panel : when a table is too wide, columns of different panels are not put side by side
    """

    name: str
    heading: str
    values: Sequence[Any]
    kind: Literal["text", "number"] = "text"
    show: Callable[[Any], str] = str
    key: bool = False
    panel: int = 0

    def shown(self) -> list[str]:
        """Display of every value."""
        return [self.show(value) for value in self.values]


@dataclass(frozen=True, slots=True)
class Table:
    """A titled table with notes under it.

    Attributes
    ----------
    title : one line above the table
    columns : all of the same length
    notes : lines under the table
    """

    title: str
    columns: tuple[Column, ...]
    notes: tuple[str, ...] = ()

    def text(self, width: int = 80) -> str:
        """Plain text whose lines are at most `width` columns wide (40 at the least)."""
        return text.render(self.title, self.columns, self.notes, max(width, text.NARROWEST))

    def html(self, *, in_page: bool = False) -> str:
        """An HTML fragment, light or dark; with its own style unless it is part of a page."""
        return markup.html_table(self.title, self.columns, self.notes, in_page=in_page)

    def markdown(self) -> str:
        """A pipe table."""
        return markup.markdown_table(self.title, self.columns, self.notes)

    def latex(self) -> str:
        """A `tabular` environment that needs no package."""
        return markup.latex_table(self.title, self.columns, self.notes)

    def csv(self) -> str:
        """Raw values in full precision under machine names; formulas in text are defused."""
        return data.csv_table(self.columns)

    def json(self) -> str:
        """An object with the title, columns, rows and notes; missing values are null."""
        return data.json_table(self.title, self.columns, self.notes)
