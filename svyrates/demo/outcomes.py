"""Outcomes: some drawn at random, and some laid out so that a comparison has a known verdict.

A *laid-out* outcome has a rate for every block and group: the group's rate in that kind of
district, moved by what the block has in common and by what it does to that group alone. Around
these rates the answers vary as much as independent answers would, but not independently: the
chance deviations of a group sum to zero over the blocks of a district. The design-based variance
is estimated from deviations between blocks and so is what it would be, while the rates themselves
hardly move from seed to seed. A verdict then follows from how the population is built, not from
luck.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from svyrates.demo.people import People
from svyrates.demo.places import Block

__all__ = ["Layout", "cold_home", "disconnected", "helped", "laid_out"]

BoolArray = NDArray[np.bool_]
FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]

# By tenure, in the order of TENURES: owners are the warmest and the least often cut off.
_COLD_TENURE = (-0.40, 0.15, 0.35, 0.0)
_COLD_AGE = (0.30, 0.10, -0.15, -0.20)
_CUT_OFF = (0.003, 0.013, 0.014, 0.006)
_HELP_TENURE = (0.6, 1.7, 1.2, 0.8)


@dataclass(frozen=True, slots=True)
class Layout:
    """How a laid-out outcome differs between groups, districts and blocks.

    Attributes
    ----------
    by : grouping column
    upland, lowland : rate of each of its groups there; None for the same in both
    shared : by how much a block raises or lowers the rates of all groups; half of the blocks each
    own : standard deviation, between blocks, of each group's own rate; None for none
    """

    by: str
    upland: tuple[float, ...]
    lowland: tuple[float, ...] | None = None
    shared: float = 0.0
    own: tuple[float, ...] | None = None

    def order(self, place: Block, random: np.random.Generator) -> FloatArray:
        """Which blocks differ which way, in every wave: (blocks, 1 + groups) uniforms."""
        return random.random((place.district.size, 1 + len(self.upland)))


def laid_out(
    place: Block, who: People, layout: Layout, order: FloatArray, random: np.random.Generator
) -> BoolArray:
    """Answers of one laid-out outcome, shape (adults,)."""
    n_blocks, n_groups = place.district.size, len(layout.upland)
    cell = who.block * n_groups + np.asarray(getattr(who, layout.by))
    size = np.bincount(cell, minlength=n_blocks * n_groups).reshape(n_blocks, n_groups)
    rate = np.where(place.upland[:, None], layout.upland, layout.lowland or layout.upland)
    rate = rate + layout.shared * np.sign(_zero_sum(place.district, order[:, 0]))[:, None]
    for each, own in enumerate(layout.own or (0.0,) * n_groups):
        # Deviations cancel over the blocks where the group lives.
        lives = np.flatnonzero(size[:, each])
        district = place.district[lives]
        real = rate[lives, each] + own * _zero_sum(district, order[lives, 1 + each])
        real = np.clip(real, 0.0, 1.0)
        chance = np.sqrt(real * (1.0 - real) / size[lives, each])
        rate[lives, each] = real + chance * _zero_sum(district, random.random(lives.size))
    target = np.asarray(size * np.clip(rate, 0.0, 1.0), dtype=np.float64)
    wanted = _whole(target, random.random(n_groups))
    return _chosen(wanted, cell, random.random(cell.size))


def _zero_sum(district: IntArray, order: FloatArray) -> FloatArray:
    """Equal steps that sum to zero in each district, sample variance one, taken in `order`."""
    values = np.empty(district.size)
    for each in np.unique(district):
        inside = np.flatnonzero(district == each)
        steps = np.arange(inside.size) - (inside.size - 1) / 2.0
        scale = np.sqrt((steps**2).sum() / max(inside.size - 1, 1)) or 1.0
        values[inside[np.argsort(order[inside], kind="stable")]] = steps / scale
    return values


def _whole(target: FloatArray, start: FloatArray) -> IntArray:
    """Round every column to whole numbers whose running sums stay within one of the targets'."""
    running = np.floor(np.cumsum(target, axis=0) + start)
    return np.diff(running, axis=0, prepend=np.floor(start)[None, :]).astype(np.intp)


def _chosen(wanted: IntArray, cell: IntArray, chance: FloatArray) -> BoolArray:
    """Choose the wanted number of adults in every cell, in random order."""
    order = np.lexsort((chance, cell))
    sizes = np.bincount(cell, minlength=wanted.size)
    rank = np.arange(cell.size) - np.repeat(np.cumsum(sizes) - sizes, sizes)
    chosen = np.empty(cell.size, dtype=bool)
    chosen[order] = rank < wanted.ravel()[cell[order]]
    return chosen


def cold_home(place: Block, who: People, rise: float, random: np.random.Generator) -> IntArray:
    """How often the home is too cold in winter: 0 never to 3 always, -1 without an answer.

    Tenants and the young are cold more often, and the young rent: a standard of age narrows the
    gaps between tenures. Uplanders are colder, blocks differ and stay as they are, and people who
    share a dwelling share much of their answer. The young skip the question more often.
    """
    level = np.array(_COLD_TENURE)[who.tenure] + np.array(_COLD_AGE)[who.age_group] + rise
    level += 1.2 * place.exposed[who.block] + 0.3 * place.upland[who.block]
    level += 1.6 * (random.random(int(who.home[-1]) + 1) - 0.5)[who.home]
    level += 1.6 * (random.random(level.size) - 0.5)
    skipped = random.random(level.size) < np.array((0.06, 0.04, 0.03, 0.03))[who.age_group]
    return np.where(skipped, -1, np.digitize(level, (-0.4, 0.5, 1.1)))


def disconnected(who: People, random: np.random.Generator) -> BoolArray:
    """Energy supply cut off last winter: rare, and the same for everyone in a dwelling."""
    return np.asarray(
        random.random(int(who.home[-1]) + 1)[who.home] < np.array(_CUT_OFF)[who.tenure]
    )


def helped(who: People, rate: float, random: np.random.Generator) -> BoolArray:
    """One box of the page on help: ticked more often by tenants."""
    return np.asarray(random.random(who.block.size) < rate * np.array(_HELP_TENURE)[who.tenure])
