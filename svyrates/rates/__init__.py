"""Subgroup rates: estimation, limits, design effects, and the table that holds them."""

from svyrates.rates.adjusted import adjusted_rates
from svyrates.rates.estimate import estimate_rates
from svyrates.rates.limits import INTERVALS, rate_limits
from svyrates.rates.model_table import ModelTable
from svyrates.rates.presentation import (
    Presentation,
    Standard,
    Thresholds,
    judge_presentation,
)
from svyrates.rates.published import rates_from_published
from svyrates.rates.standardized import standardize_rates
from svyrates.rates.table import Coverage, RateTable

__all__ = [
    "INTERVALS",
    "Coverage",
    "ModelTable",
    "Presentation",
    "RateTable",
    "Standard",
    "Thresholds",
    "adjusted_rates",
    "estimate_rates",
    "judge_presentation",
    "rate_limits",
    "rates_from_published",
    "standardize_rates",
]
