"""Estimates of totals, their spread, and smooth functions of them."""

from svyrates.totals.estimates import ZERO, Estimates, SmoothFunction, Spread, Support
from svyrates.totals.functions import Linear, RatesOfSides
from svyrates.totals.linearized import LinearizedSpread, UnitTotals, blocks
from svyrates.totals.support import UnitSupport

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
]
