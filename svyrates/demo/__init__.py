"""An invented survey for the demo, the docs and the tests.

The Orrelund Winter Homes Survey does not exist, and neither does the region of Orrelund. It asks
about 6,000 adults in each of two waves about their homes in winter. Blocks are drawn within 24
districts and serve both waves, with other dwellings in each; the small upland districts are sampled
densely, so that weights differ more than tenfold. Everything is made by code from one seed.

The population is built so that it holds one comparison for every verdict on the simple formula,
whatever the seed. `SHOWCASE` names them with their reasons; `svyrates.demo.showcase` tells how.
"""

from __future__ import annotations

from collections.abc import Mapping
from functools import cache
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from svyrates.demo.outcomes import cold_home, disconnected, helped, laid_out
from svyrates.demo.people import (
    AGE_GROUPS,
    DWELLING_TYPES,
    HEATINGS,
    SEXES,
    TENURES,
    People,
    people,
)
from svyrates.demo.places import DISTRICTS, Block, blocks
from svyrates.demo.showcase import LAYOUTS, SHOWCASE, Showcase
from svyrates.errors import QuestionError

__all__ = ["SHOWCASE", "Showcase", "demo_survey"]

WAVES = ("2021", "2024")
COLD_HOME = ("never", "sometimes", "often", "always")
HELP = {"help_grant": 0.11, "help_advice": 0.17, "help_family": 0.23}

# Chosen before anything was looked at, and never changed: the verdicts hold for other seeds too.
_SEED = 2024


def demo_survey(wave: str | None = None) -> pd.DataFrame:
    """The invented Orrelund Winter Homes Survey as a pandas frame.

    Parameters
    ----------
    wave : {"2021", "2024"}, optional
        One wave; both, stacked, without it.

    Returns
    -------
    pandas.DataFrame
        One row per adult, about 6,000 a wave; a fresh copy on each call.

        Design: `wave`; `wt`, which sums to the 694,000 adults of the region in each wave;
        `district`, 24 strata; `block`, numbered within districts and the same in both waves;
        `dwelling`, numbered within blocks, not the same in both waves; `blocks_in_district` and
        `dwellings_in_block`, numbers in the population.

        Groups: `terrain`, `sex`, `age_group`, `tenure` (sometimes missing), `dwelling_type`,
        `heating`.

        Outcomes: `cold_home`, how often the home is too cold, never to always, with missing
        answers; `disconnected`, energy supply cut off, rare; `help_grant`, `help_advice`,
        `help_family`, boxes of one page to tick, missing where the page was skipped. What
        each adult says of the own room or habits, 0/1: `draught`, `damp`, `condensation`,
        `smoky`, `mould`, `thermostat` (sets it), `arrears` (fell behind with an energy bill).

    Raises
    ------
    QuestionError
        For a wave that the survey does not have.

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> survey["district"].nunique(), round(survey["wt"].sum())
    (24, 694000)

    24 strata, and weights that sum to the adults of the region.
    """
    if wave is not None and wave not in WAVES:
        raise QuestionError(f"`wave` must be one of {', '.join(map(repr, WAVES))}; got {wave!r}.")
    both = build(_SEED)
    return both[both["wave"] == wave].reset_index(drop=True) if wave else both.copy()


@cache
def build(seed: int) -> pd.DataFrame:
    """Both waves from one seed; only uniform draws, whose stream numpy keeps stable."""
    random = np.random.Generator(np.random.PCG64(seed))
    place = blocks(random)
    lasting = {name: layout.order(place, random) for name, layout in LAYOUTS.items()}
    waves = [_one_wave(wave, place, lasting, random) for wave in WAVES]
    return pd.concat(waves, ignore_index=True)


def _one_wave(
    wave: str, place: Block, lasting: Mapping[str, NDArray[np.float64]], random: np.random.Generator
) -> pd.DataFrame:
    late = WAVES.index(wave)
    who = people(place, 1 + 100 * late, random)
    columns = _design(wave, place, who) | _groups(place, who, random)
    columns["cold_home"] = _categories(
        cold_home(place, who, 0.10 * late, random), COLD_HOME, ordered=True
    )
    for name, layout in LAYOUTS.items():
        columns[name] = laid_out(place, who, layout, lasting[name], random).astype(np.int64)
    columns["disconnected"] = disconnected(who, random).astype(np.int64)
    skipped = random.random(who.block.size) < 0.02
    for name, rate in HELP.items():
        ticked = helped(who, rate, random).astype(np.int64)
        columns[name] = pd.arrays.IntegerArray(ticked, skipped.copy())
    return pd.DataFrame(columns)


def _design(wave: str, place: Block, who: People) -> dict[str, Any]:
    names = np.array([name for name, _, _ in DISTRICTS], dtype=object)
    return {
        "wave": np.full(who.block.size, wave, dtype=object),
        "district": names[place.district[who.block]],
        "block": place.number[who.block].astype(np.int64),
        "dwelling": who.dwelling.astype(np.int64),
        "blocks_in_district": place.in_district[who.block].astype(np.int64),
        "dwellings_in_block": place.dwellings[who.block].astype(np.int64),
        "wt": who.weight,
    }


def _groups(place: Block, who: People, random: np.random.Generator) -> dict[str, Any]:
    terrain = np.where(place.upland[who.block], "upland", "lowland")
    unknown = random.random(int(who.home[-1]) + 1)[who.home] < 0.005
    return {
        "terrain": terrain.astype(object),
        "sex": _categories(who.sex, SEXES),
        "age_group": _categories(who.age_group, AGE_GROUPS, ordered=True),
        "tenure": _categories(np.where(unknown, -1, who.tenure), TENURES),
        "dwelling_type": _categories(who.dwelling_type, DWELLING_TYPES),
        "heating": _categories(who.heating, HEATINGS),
    }


def _categories(
    codes: NDArray[np.intp], labels: tuple[str, ...], *, ordered: bool = False
) -> pd.Categorical[Any]:
    names: Any = list(labels)
    listed: list[int] = codes.tolist()
    return pd.Categorical.from_codes(listed, categories=names, ordered=ordered)
