"""Estimates of totals, their spread, and smooth functions of them."""

from svyrates.totals.cells import CellTotals, blocks
from svyrates.totals.estimates import ZERO, Estimates, SmoothFunction, Spread, Support
from svyrates.totals.functions import ByComplexStep, Linear, RatesOfSides
from svyrates.totals.influence import InfluenceTotals
from svyrates.totals.linearized import LinearizedSpread
from svyrates.totals.matrices import lighter, scaled, stack_rows
from svyrates.totals.replicated import ReplicatedSpread, ReplicateTotals
from svyrates.totals.stated import StatedSpread
from svyrates.totals.support import ReplicateSupport, UnitSupport
from svyrates.totals.unit_totals import UnitTotals
from svyrates.totals.wald import WaldTest, joint_wald

__all__ = [
    "ZERO",
    "ByComplexStep",
    "CellTotals",
    "Estimates",
    "InfluenceTotals",
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
    "WaldTest",
    "blocks",
    "joint_wald",
    "lighter",
    "scaled",
    "stack_rows",
]
