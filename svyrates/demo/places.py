"""The invented region of Orrelund: 24 districts, their adults, and the blocks drawn in them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["ADULTS", "DISTRICTS", "Block", "blocks"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]

# Name, adults, blocks drawn. The small upland districts were sampled far more densely, so that
# their people carry small weights and the lowland's large ones.
_UPLAND = (
    ("Ardengill", 9_200, 6),
    ("Brackfell", 10_400, 6),
    ("Caldermoss", 8_100, 4),
    ("Dunnevale", 11_300, 8),
    ("Eskrigg Water", 7_600, 4),
    ("Fennick Edge", 9_900, 6),
    ("Garrowside", 10_800, 6),
    ("Hollinscar", 8_700, 6),
    ("Ivenbeck", 12_100, 8),
    ("Jarlmoor", 7_900, 4),
    ("Keldrun", 9_500, 6),
    ("Lorrick Tops", 11_700, 8),
)
_LOWLAND = (
    ("Marlhythe", 46_000, 3),
    ("Netherlode", 38_500, 2),
    ("Orrelmouth", 72_300, 5),
    ("Pellbrook", 41_200, 3),
    ("Quarrinfield", 35_800, 2),
    ("Rushavon", 52_600, 4),
    ("Selvane", 44_100, 3),
    ("Tarnlow", 57_900, 4),
    ("Ulverlea", 39_400, 3),
    ("Varnport", 63_500, 5),
    ("Withenlow Cross", 48_800, 3),
    ("Yarrowgate", 36_700, 3),
)
DISTRICTS: tuple[tuple[str, int, int], ...] = _UPLAND + _LOWLAND
ADULTS = sum(adults for _, adults, _ in DISTRICTS)
_ADULTS_IN_A_BLOCK = 210


@dataclass(frozen=True, slots=True)
class Block:
    """The sampled blocks, one element each: what stays as it is from wave to wave.

    Attributes
    ----------
    district : position in `DISTRICTS`
    number : number of the block within its district, from 1
    upland : whether the district is one of the small ones
    in_district : blocks of the district in the population
    dwellings : dwellings of the block in the population
    renting, exposed : how far the block leans to renting, and to cold, in [-0.5, 0.5)
    """

    district: IntArray
    number: IntArray
    upland: NDArray[np.bool_]
    in_district: IntArray
    dwellings: IntArray
    renting: FloatArray
    exposed: FloatArray


def blocks(random: np.random.Generator) -> Block:
    """All sampled blocks in order, district by district; the two waves share them."""
    drawn = np.array([n for _, _, n in DISTRICTS])
    district = np.repeat(np.arange(drawn.size), drawn)
    number = np.concatenate([np.arange(1, n + 1) for n in drawn])
    population = np.array([adults // _ADULTS_IN_A_BLOCK for _, adults, _ in DISTRICTS])
    return Block(
        district,
        number,
        district < len(_UPLAND),
        population[district],
        100 + np.floor(35.0 * random.random(district.size)).astype(np.intp),
        random.random(district.size) - 0.5,
        random.random(district.size) - 0.5,
    )
