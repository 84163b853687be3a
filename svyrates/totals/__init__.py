"""Estimates of totals, their spread, and smooth functions of them."""

from svyrates.totals.cells import CellTotals, blocks
from svyrates.totals.estimates import ZERO, Estimates, SmoothFunction, Spread, Support
from svyrates.totals.functions import ByComplexStep, Linear, RatesOfSides
from svyrates.totals.linearized import LinearizedSpread
from svyrates.totals.matrices import lighter, stack_rows
from svyrates.totals.replicated import ReplicatedSpread, ReplicateTotals
from svyrates.totals.stated import StatedSpread
from svyrates.totals.support import ReplicateSupport, UnitSupport
from svyrates.totals.unit_totals import UnitTotals

__all__ = [
    "ZERO",
    "ByComplexStep",
    "CellTotals",
    "Estimates",
    "Linear",
    "LinearizedSpread",
    "RatesOfSides",
    "ReplicateSupport",
    "ReplicateTotals",
    "ReplicatedSpread",
    "SmoothFunction",
    "Spread",
    "StatedSpread",
    "Support",
    "UnitSupport",
    "UnitTotals",
    "blocks",
    "lighter",
    "stack_rows",
]
