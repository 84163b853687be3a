"""Subgroup rates: estimation, limits, design effects, and the table that holds them."""

from svyrates.rates.estimate import estimate_rates
from svyrates.rates.limits import INTERVALS, rate_limits
from svyrates.rates.published import rates_from_published
from svyrates.rates.table import Coverage, RateTable

__all__ = [
    "INTERVALS",
    "Coverage",
    "RateTable",
    "estimate_rates",
    "rate_limits",
    "rates_from_published",
]
