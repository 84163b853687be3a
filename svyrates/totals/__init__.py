"""Estimates of totals, their spread, and smooth functions of them."""

from svyrates.totals.estimates import ZERO, Estimates, SmoothFunction, Spread, Support
from svyrates.totals.functions import Linear, RatesOfSides
from svyrates.totals.linearized import LinearizedSpread
from svyrates.totals.matrices import lighter, stack_rows
from svyrates.totals.support import UnitSupport
from svyrates.totals.unit_totals import UnitTotals, blocks

__all__ = [
    "ZERO",
    "Estimates",
    "Linear",
    "LinearizedSpread",
    "RatesOfSides",
    "SmoothFunction",
    "Spread",
    "Support",
    "UnitSupport",
    "UnitTotals",
    "blocks",
    "lighter",
    "stack_rows",
]
