"""Every error and warning that the package raises on purpose.

All errors derive from `RatesError`, which is a `ValueError`, and all warnings from `RatesWarning`,
so each family can be caught or silenced as a whole.
"""

from __future__ import annotations

import os
import sys
import warnings
from collections.abc import Sequence
from pathlib import Path

__all__ = [
    "ComparisonError",
    "DataFileError",
    "DesignError",
    "DesignWarning",
    "FigureError",
    "QuestionError",
    "RatesError",
    "RatesWarning",
    "SimpleFormulaWarning",
    "all_faults",
    "some",
    "warn",
]


class RatesError(ValueError):
    """Base of every error that the package raises on purpose."""


class DesignError(RatesError):
    """The sample design cannot be built from these columns."""


class QuestionError(RatesError):
    """The outcome, groups, subpopulation or options of a question do not fit the data."""


class ComparisonError(RatesError):
    """The comparison asked for does not exist in this table of rates."""


class DataFileError(RatesError):
    """A data file cannot be read, or a result cannot be written."""


class FigureError(RatesError):
    """A figure cannot be drawn from this table, on these axes, or without matplotlib."""


class RatesWarning(UserWarning):
    """Base of every warning that the package raises on purpose."""


class DesignWarning(RatesWarning):
    """The design was built, but something in it deserves a look."""


class SimpleFormulaWarning(RatesWarning):
    """The simple independent-sample formula would mislead about at least one comparison.

    Silence it by category once its message has been read::

        warnings.simplefilter("ignore", svyrates.SimpleFormulaWarning)
    """


def all_faults(kind: type[RatesError], heading: str, faults: Sequence[str]) -> None:
    """Raise one error that lists every fault found; do nothing when there is none."""
    if not faults:
        return
    if len(faults) == 1:
        raise kind(faults[0])
    lines = "\n".join(f"  {number}. {fault}" for number, fault in enumerate(faults, start=1))
    raise kind(f"{heading} {len(faults)} faults:\n{lines}")


def some(values: Sequence[object], most: int = 6) -> str:
    """List the first few values for a message, and say how many more there are."""
    shown = ", ".join(_short(value) for value in values[:most])
    return shown if len(values) <= most else f"{shown} and {len(values) - most} more"


def _short(value: object) -> str:
    text = repr(value)
    return text if len(text) <= 60 else f"{text[:57]}..."


def warn(message: str, category: type[RatesWarning]) -> None:
    """Warn at the first line outside this package, which is the user's own."""
    package = str(Path(__file__).resolve().parent) + os.sep
    level = 2
    frame = sys._getframe(1)
    while frame.f_back is not None and frame.f_code.co_filename.startswith(package):
        frame = frame.f_back
        level += 1
    warnings.warn(message, category, stacklevel=level)
