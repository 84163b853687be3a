"""Compare a proportion between groups of survey respondents, with the design taken into account.

Names are fetched from their modules when first used, so that importing the package, and above all
its command line, stays light.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from svyrates.compare import (
        EVERYONE,
        EVERYONE_ELSE,
        AdjustmentTable,
        ComparisonTable,
        ContrastTable,
        DecompositionTable,
        HomogeneityTable,
        common_difference,
        compare_adjustment,
        compare_rates,
        contrast,
        difference_in_differences,
        gap_decomposition,
        homogeneity_test,
        trend_test,
    )
    from svyrates.demo import demo_survey
    from svyrates.design import (
        DesignSummary,
        ReplicateWeights,
        SampleDesign,
        combine_waves,
        make_replicates,
        merge_replicates,
    )
    from svyrates.errors import (
        ComparisonError,
        DataFileError,
        DesignError,
        DesignWarning,
        FigureError,
        QuestionError,
        RatesError,
        RatesWarning,
        SimpleFormulaWarning,
    )
    from svyrates.publish import (
        DisclosureRule,
        draw_against_simple,
        draw_change,
        draw_comparisons,
        draw_rates,
        svg_of,
        withhold_comparisons,
        withhold_rates,
    )
    from svyrates.rates import (
        ModelTable,
        Presentation,
        RateTable,
        Standard,
        Thresholds,
        adjusted_rates,
        estimate_rates,
        judge_presentation,
        rates_from_published,
        standardize_rates,
    )

__version__ = "0.1.0"

__all__ = [
    "EVERYONE",
    "EVERYONE_ELSE",
    "AdjustmentTable",
    "ComparisonError",
    "ComparisonTable",
    "ContrastTable",
    "DataFileError",
    "DecompositionTable",
    "DesignError",
    "DesignSummary",
    "DesignWarning",
    "DisclosureRule",
    "FigureError",
    "HomogeneityTable",
    "ModelTable",
    "Presentation",
    "QuestionError",
    "RateTable",
    "RatesError",
    "RatesWarning",
    "ReplicateWeights",
    "SampleDesign",
    "SimpleFormulaWarning",
    "Standard",
    "Thresholds",
    "adjusted_rates",
    "combine_waves",
    "common_difference",
    "compare_adjustment",
    "compare_rates",
    "contrast",
    "demo_survey",
    "difference_in_differences",
    "draw_against_simple",
    "draw_change",
    "draw_comparisons",
    "draw_rates",
    "estimate_rates",
    "gap_decomposition",
    "homogeneity_test",
    "judge_presentation",
    "make_replicates",
    "merge_replicates",
    "rates_from_published",
    "standardize_rates",
    "svg_of",
    "trend_test",
    "withhold_comparisons",
    "withhold_rates",
]

_HOMES = {
    "svyrates.compare": (
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
    ),
    "svyrates.demo": ("demo_survey",),
    "svyrates.design": (
        "DesignSummary",
        "ReplicateWeights",
        "SampleDesign",
        "combine_waves",
        "make_replicates",
        "merge_replicates",
    ),
    "svyrates.errors": (
        "ComparisonError",
        "DataFileError",
        "DesignError",
        "DesignWarning",
        "FigureError",
        "QuestionError",
        "RatesError",
        "RatesWarning",
        "SimpleFormulaWarning",
    ),
    "svyrates.publish": (
        "DisclosureRule",
        "draw_against_simple",
        "draw_change",
        "draw_comparisons",
        "draw_rates",
        "svg_of",
        "withhold_comparisons",
        "withhold_rates",
    ),
    "svyrates.rates": (
        "ModelTable",
        "Presentation",
        "RateTable",
        "Standard",
        "Thresholds",
        "adjusted_rates",
        "estimate_rates",
        "judge_presentation",
        "rates_from_published",
        "standardize_rates",
    ),
}
_HOME_OF = {name: home for home, names in _HOMES.items() for name in names}


def __getattr__(name: str) -> Any:
    if name not in _HOME_OF:
        raise AttributeError(f"module 'svyrates' has no attribute {name!r}")
    return getattr(import_module(_HOME_OF[name]), name)


def __dir__() -> list[str]:
    return sorted({*__all__, "__version__"})
