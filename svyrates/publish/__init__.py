"""What leaves the desk: what must not be shown, figures, and how the rest is said."""

from svyrates.publish.change import draw_change
from svyrates.publish.disclosure import WITHHELD, round_counts, withhold_cells, withhold_rows
from svyrates.publish.figures import draw_rates
from svyrates.publish.gaps import draw_against_simple, draw_comparisons
from svyrates.publish.protection import DisclosureRule, WithheldCells
from svyrates.publish.report import Answer, ReportFacts, build_report
from svyrates.publish.svg import svg_of
from svyrates.publish.withhold import withhold_comparisons, withhold_rates

__all__ = [
    "WITHHELD",
    "Answer",
    "DisclosureRule",
    "ReportFacts",
    "WithheldCells",
    "build_report",
    "draw_against_simple",
    "draw_change",
    "draw_comparisons",
    "draw_rates",
    "round_counts",
    "svg_of",
    "withhold_cells",
    "withhold_comparisons",
    "withhold_rates",
    "withhold_rows",
]
