"""Comparisons of rates, and the verdict on the simple independent-sample formula."""

from svyrates.compare.adjustment import AdjustmentTable, compare_adjustment
from svyrates.compare.contrast import contrast, difference_in_differences
from svyrates.compare.contrast_table import ContrastTable
from svyrates.compare.decomposition import gap_decomposition
from svyrates.compare.decomposition_table import DecompositionTable
from svyrates.compare.homogeneity import homogeneity_test
from svyrates.compare.homogeneity_table import HomogeneityTable
from svyrates.compare.pairs import EVERYONE, EVERYONE_ELSE
from svyrates.compare.run import compare_rates
from svyrates.compare.stratified import common_difference
from svyrates.compare.table import ComparisonTable
from svyrates.compare.trend import trend_test

__all__ = [
    "EVERYONE",
    "EVERYONE_ELSE",
    "AdjustmentTable",
    "ComparisonTable",
    "ContrastTable",
    "DecompositionTable",
    "HomogeneityTable",
    "common_difference",
    "compare_adjustment",
    "compare_rates",
    "contrast",
    "difference_in_differences",
    "gap_decomposition",
    "homogeneity_test",
    "trend_test",
]
