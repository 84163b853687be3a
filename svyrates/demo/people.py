"""The adults of one wave: who they are, where they live and what they weigh."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from svyrates.demo.places import DISTRICTS, Block

__all__ = ["AGE_GROUPS", "DWELLING_TYPES", "HEATINGS", "SEXES", "TENURES", "People", "people"]

IntArray = NDArray[np.intp]

SEXES = ("woman", "man")
AGE_GROUPS = ("18-34", "35-54", "55-74", "75 and over")
TENURES = ("owner", "social tenant", "private tenant", "rent-free")
DWELLING_TYPES = ("house", "flat", "park home")
HEATINGS = ("gas boiler", "electric", "oil", "heat network")

# By age group: share of adults, share of owners, share of the others who have a social landlord.
_AGE_SHARES = (0.27, 0.34, 0.27, 0.12)
_OWNERS = (0.30, 0.55, 0.68, 0.70)
_SOCIAL = (0.30, 0.45, 0.60, 0.65)
_RENT_FREE = 0.10

# The young answer least often, so those who do answer stand for more people.
_NON_RESPONSE = (1.30, 1.05, 0.85, 0.90)
_WOMEN_SHARE = 0.515

# The first two blocks of these districts have a park, or oil heating.
_PARK_DISTRICTS = (1, 5, 8)
_OIL_DISTRICTS = (0, 2, 3, 6, 9, 11)
# One block of the lowland is the pilot area of a heat network.
_PILOT_DISTRICT = 14


@dataclass(frozen=True, slots=True)
class People:
    """One wave's adults, one element each; categories are positions in the tuples above.

    Attributes
    ----------
    block : position among the sampled blocks
    home : position among the wave's dwellings
    dwelling : number of the dwelling within its block
    weight : adults of the region that the person stands for
    """

    block: IntArray
    home: IntArray
    dwelling: IntArray
    sex: IntArray
    age_group: IntArray
    tenure: IntArray
    dwelling_type: IntArray
    heating: IntArray
    weight: NDArray[np.float64]


def people(place: Block, first_dwelling: int, random: np.random.Generator) -> People:
    """Draw 48 to 60 adults a block in dwellings of one to three, and give them their traits."""
    n_blocks = place.district.size
    takes = 48 + 2 * np.floor(7.0 * random.random(n_blocks)).astype(np.intp)
    block = np.repeat(np.arange(n_blocks), takes)
    dwelling = _dwellings(takes, random)
    first = np.diff(block * 1000 + dwelling, prepend=-1) != 0
    home = np.cumsum(first) - 1
    # Takes are even, so women and men alternate: every block has as many of each.
    sex = np.arange(block.size) % 2
    age_group = _ages(home, random)
    tenure = _tenures(place, block[first], age_group[first], random)
    dwelling_type, heating = _homes(place, block[first], random)
    return People(
        block=block,
        home=home,
        dwelling=dwelling + first_dwelling,
        sex=sex,
        age_group=age_group,
        tenure=tenure[home],
        dwelling_type=dwelling_type[home],
        heating=heating[home],
        weight=_weights(place.district[block], sex, age_group),
    )


def _dwellings(takes: IntArray, random: np.random.Generator) -> IntArray:
    """Dwelling numbers within each block, from 0; a new one starts after one to three adults."""
    numbers = []
    for take in takes:
        sizes = np.digitize(random.random(take), (0.34, 0.86)) + 1
        numbers.append(np.repeat(np.arange(take), sizes)[:take])
    return np.concatenate(numbers)


def _ages(home: IntArray, random: np.random.Generator) -> IntArray:
    """Age groups; three quarters of those who share a dwelling are of one generation."""
    bounds = np.cumsum(_AGE_SHARES)[:-1]
    shared = np.digitize(random.random(int(home[-1]) + 1), bounds)[home]
    own = np.digitize(random.random(home.size), bounds)
    return np.where(random.random(home.size) < 0.75, shared, own)


def _tenures(
    place: Block, home_block: IntArray, age_group: IntArray, random: np.random.Generator
) -> IntArray:
    """Tenures follow age, and cluster: every block leans towards owning or renting."""
    owner = np.array(_OWNERS)[age_group] - 0.5 * place.renting[home_block]
    rest = 1.0 - owner
    bounds = np.stack((owner, owner + np.array(_SOCIAL)[age_group] * rest, 1.0 - _RENT_FREE * rest))
    return np.asarray((random.random(home_block.size) >= bounds).sum(axis=0), dtype=np.intp)


def _homes(
    place: Block, home_block: IntArray, random: np.random.Generator
) -> tuple[IntArray, IntArray]:
    """Park homes and oil heating sit in few blocks; the heat network in a single one."""
    lead = place.number <= 2
    park = (np.isin(place.district, _PARK_DISTRICTS) & lead)[home_block]
    oil = (np.isin(place.district, _OIL_DISTRICTS) & lead)[home_block]
    pilot = ((place.district == _PILOT_DISTRICT) & (place.number == 1))[home_block]
    kind, fuel = random.random(home_block.size), random.random(home_block.size)
    dwelling_type = np.where(park & (kind < 0.75), 2, np.where(kind > 0.62, 1, 0))
    heating = np.where(fuel > 0.85, 1, 0)
    heating = np.where(oil & (fuel < 0.75), 2, heating)
    heating = np.where(pilot & (fuel < 0.6), 3, heating)
    return dwelling_type, heating


def _weights(district: IntArray, sex: IntArray, age_group: IntArray) -> NDArray[np.float64]:
    """Weights, raised where response is low, that sum to every district's women and men."""
    adults = np.array([size for _, size, _ in DISTRICTS], dtype=np.float64)
    known = adults[:, None] * np.array((_WOMEN_SHARE, 1.0 - _WOMEN_SHARE))
    raised = np.array(_NON_RESPONSE)[age_group]
    answered = np.bincount(district * 2 + sex, raised, minlength=known.size).reshape(-1, 2)
    return np.asarray(raised * (known / answered)[district, sex])
