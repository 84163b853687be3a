"""One comparison for every verdict on the simple formula, and what in the population makes it.

A verdict has two causes at most: what the weights do to the difference, and what the design does
to its variance.

* The weights matter where groups differ in one way in the upland, which is oversampled and has
  small weights, and in another in the lowland, where most people live.
* Clusters inflate the variance where a group sits in few blocks that differ widely. They deflate
  the variance of a *difference* where blocks differ widely but both groups live in all of them:
  what a block does to both cancels.

Every block's sample holds as many women as men, so `sex` shows what cancels; dwelling types,
heatings and tenures show the rest.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType

from svyrates.demo.outcomes import Layout

__all__ = ["LAYOUTS", "SHOWCASE", "Showcase"]


@dataclass(frozen=True, slots=True)
class Showcase:
    """A comparison with a known verdict, in either wave.

    Attributes
    ----------
    outcome : column of the outcome
    by, group, versus : the grouping column and the two groups compared
    reason : what in the population makes the verdict
    success : values of the outcome that count; None for a 0/1 column
    wave : the wave that the docs show
    """

    outcome: str
    by: str
    group: str
    versus: str
    reason: str
    success: tuple[str, ...] | None = None
    wave: str = "2024"


# Rates and deviations are by group, in the order of its categories.
LAYOUTS: Mapping[str, Layout] = MappingProxyType(
    {
        "draught": Layout("dwelling_type", (0.34, 0.60, 0.50), lowland=(0.50, 0.30, 0.50)),
        "damp": Layout("dwelling_type", (0.34, 0.34, 0.46), own=(0.0, 0.0, 0.49)),
        "condensation": Layout("sex", (0.50, 0.50), lowland=(0.525, 0.475), shared=0.40),
        "arrears": Layout("tenure", (0.12, 0.42, 0.25, 0.15), lowland=(0.10, 0.18, 0.25, 0.15)),
        "smoky": Layout("heating", (0.15, 0.10, 0.55, 0.10), own=(0.0, 0.0, 0.35, 0.0)),
        "mould": Layout("sex", (0.46, 0.34), shared=0.33),
        "thermostat": Layout("sex", (0.62, 0.47)),
    }
)

SHOWCASE: Mapping[str, Showcase] = MappingProxyType(
    {
        "opposite": Showcase(
            "draught",
            by="dwelling_type",
            group="house",
            versus="flat",
            reason="flats are the draughtier homes in the oversampled upland, houses where most "
            "people live; without weights the upland decides",
        ),
        "false-alarm": Showcase(
            "damp",
            by="dwelling_type",
            group="house",
            versus="park home",
            reason="park homes stand in six blocks, two in each of three districts, one of them "
            "damp and one dry: hundreds of answers tell of six places",
        ),
        "missed": Showcase(
            "condensation",
            by="sex",
            group="woman",
            versus="man",
            reason="the gap is found in the lowland alone, where most people but few of the sample "
            "live; and blocks differ widely but alike for both sexes, so the design sees it",
        ),
        "shifted": Showcase(
            "arrears",
            by="tenure",
            group="owner",
            versus="social tenant",
            reason="the gap is 30 points in the oversampled upland and 8 where most people live",
        ),
        "overconfident": Showcase(
            "smoky",
            by="heating",
            group="gas boiler",
            versus="oil",
            reason="oil heating is found in twelve blocks that differ widely; the gap is wide "
            "enough to be seen all the same",
        ),
        "underconfident": Showcase(
            "mould",
            by="sex",
            group="woman",
            versus="man",
            reason="blocks differ widely but alike for both sexes; the gap is wide and either "
            "formula finds it",
        ),
        "agrees": Showcase(
            "thermostat",
            by="sex",
            group="woman",
            versus="man",
            reason="blocks differ no more than chance would have it, and the gap is the same in "
            "upland and lowland",
        ),
        "undetermined": Showcase(
            "cold_home",
            by="heating",
            group="gas boiler",
            versus="heat network",
            reason="the heat network serves a single sampled block, which leaves no degrees of "
            "freedom",
            success=("often", "always"),
        ),
    }
)
