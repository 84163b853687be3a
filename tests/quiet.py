"""Comparisons for tests whose subject is not the warning about the simple formula."""

from __future__ import annotations

import warnings
from typing import Any

import svyrates as sr

__all__ = ["compare_quietly"]


def compare_quietly(*arguments: Any, **options: Any) -> sr.ComparisonTable:
    """`compare_rates` without `SimpleFormulaWarning`; every other warning stays an error."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
        return sr.compare_rates(*arguments, **options)
