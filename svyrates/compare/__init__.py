"""Comparisons of rates, and the verdict on the simple independent-sample formula."""

from svyrates.compare.pairs import EVERYONE, EVERYONE_ELSE
from svyrates.compare.run import compare_rates
from svyrates.compare.table import ComparisonTable

__all__ = ["EVERYONE", "EVERYONE_ELSE", "ComparisonTable", "compare_rates"]
