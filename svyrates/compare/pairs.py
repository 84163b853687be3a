"""Which pairs a question asks for: their sides as sums of cells, and their labels."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from enum import Enum
from typing import Any

import numpy as np
from numpy.typing import NDArray

from svyrates.errors import ComparisonError, some
from svyrates.rates.source import RateSource
from svyrates.rates.table import RateTable
from svyrates.totals import stack_rows

__all__ = [
    "EVERYONE",
    "EVERYONE_ELSE",
    "PairBlock",
    "Reference",
    "by_level",
    "held_columns",
    "matches",
    "plan_pairs",
]

IntArray = NDArray[np.intp]


class Reference(Enum):
    """What a group can be compared with besides another group."""

    EVERYONE = "everyone"
    EVERYONE_ELSE = "everyone else"

    def __repr__(self) -> str:
        return self.name


EVERYONE = Reference.EVERYONE
EVERYONE_ELSE = Reference.EVERYONE_ELSE


@dataclass(frozen=True, slots=True)
class PairBlock:
    """Pairs that share a source and a level of the columns held fixed.

    Attributes
    ----------
    source : where the rates come from
    sides : (sides, cells) sparse; each side as a signed sum of cells
    plus, minus : (pairs,) sides of each pair; a minus of -1 is a fixed number
    level : labels of the columns held fixed
    group, versus : labels of each pair
    """

    source: RateSource
    sides: Any
    plus: IntArray
    minus: IntArray
    level: tuple[object, ...]
    group: tuple[str, ...]
    versus: tuple[str, ...]

    def only(self, rows: IntArray) -> PairBlock:
        """Some of the pairs, with the sides that they need."""
        plus, minus = self.plus[rows], self.minus[rows]
        used = np.unique(np.concatenate((plus, minus[minus >= 0])))
        position = np.full(self.sides.shape[0], -1, dtype=np.intp)
        position[used] = np.arange(used.size)
        return replace(
            self,
            sides=self.sides[used],
            plus=position[plus],
            minus=np.where(minus >= 0, position[minus], -1),
            group=tuple(self.group[row] for row in rows),
            versus=tuple(self.versus[row] for row in rows),
        )


def plan_pairs(
    rates: RateTable, versus: Any, within: Sequence[str] | str | None
) -> tuple[tuple[str, ...], list[PairBlock], float | None]:
    """Lay out the pairs.

    Returns
    -------
    held : names of the columns held fixed
    blocks : the pairs, by level of those columns
    fixed : the number compared with, if it is one
    """
    names, rows = _labels(rates)
    held = held_columns(rates, names, within)
    varying = [name for name in names if name not in held]
    columns = [names.index(name) for name in varying]
    keys = [tuple(row[column] for column in columns) for row in rows]
    kind = _kind(rates, versus, keys)
    if kind in ("everyone", "else") and "outcome" in varying:
        raise ComparisonError(
            f"versus={versus!r} compares groups of people; hold the outcome fixed with `within`."
        )
    blocks = []
    for level, members in by_level(names, rows, held).items():
        labels = [" / ".join(map(str, keys[row])) or "all" for row in members]
        reference = [i for i, row in enumerate(members) if matches(keys[row], versus)]
        blocks.append(_block(rates, members, labels, level, kind, reference, versus))
    if not any(block.plus.size for block in blocks):
        raise ComparisonError(
            "There is no pair to compare: the table has one group. Give `by` when estimating, or "
            "compare with a number, as in versus=0.25."
        )
    return tuple(held), blocks, float(versus) if kind == "number" else None


def _labels(rates: RateTable) -> tuple[list[str], list[tuple[object, ...]]]:
    """Label columns with the outcome always first, and every row's labels."""
    rows = [(outcome, *labels) for outcome in rates.outcomes for labels in rates.groups]
    return ["outcome", *rates.columns], rows


def held_columns(
    rates: RateTable, names: list[str], within: Sequence[str] | str | None
) -> list[str]:
    """Columns held fixed: all but the last unless told otherwise."""
    together = len(rates.blocks) == 1 and len(rates.outcomes) > 1
    if within is None:
        return names[:-1] if rates.columns else [] if together else ["outcome"]
    asked = [within] if isinstance(within, str) else list(within)
    strange = [name for name in asked if name not in names]
    if strange:
        raise ComparisonError(
            f"within names {some(strange)}, which are not columns of this table. Its columns are "
            f"{some(names)}."
        )
    if "outcome" not in asked and not (together and len(asked) < len(names)):
        asked.append("outcome")
    return [name for name in names if name in asked]


def by_level(
    names: list[str], rows: list[tuple[object, ...]], held: list[str]
) -> dict[tuple[object, ...], list[int]]:
    """Rows of each level of the columns held fixed."""
    found: dict[tuple[object, ...], list[int]] = {}
    positions = [names.index(name) for name in held]
    for row, labels in enumerate(rows):
        found.setdefault(tuple(labels[position] for position in positions), []).append(row)
    return found


def _kind(rates: RateTable, versus: Any, keys: list[tuple[object, ...]]) -> str:
    """Tell a group from a number, and say what is wrong with anything else."""
    if versus is None:
        return "pairs"
    if versus is EVERYONE or versus is EVERYONE_ELSE:
        if not rates.columns:
            raise ComparisonError(
                f"versus={versus!r} needs groups: give `by` when estimating the rates."
            )
        if not all(block.source.adds_cells for block in rates.blocks):
            raise ComparisonError(
                f"versus={versus!r} needs the totals behind the rates, and this table has rates "
                "only. Compare its groups with each other, or with a number."
            )
        return "everyone" if versus is EVERYONE else "else"
    labels = list(dict.fromkeys(keys))
    if any(matches(label, versus) for label in labels):
        return "group"
    number = isinstance(versus, int | float | np.number) and not isinstance(versus, bool)
    if number and 0.0 < float(versus) < 1.0:
        return "number"
    shown = some([label[0] if len(label) == 1 else label for label in labels], 10)
    if number:
        raise ComparisonError(
            f"versus={versus!r} is neither a group nor a proportion between 0 and 1. The groups "
            f"are {shown}."
        )
    raise ComparisonError(f"versus={versus!r} is not a group. The groups are {shown}.")


def matches(label: tuple[object, ...], wanted: Any) -> bool:
    """Whether a group's label is the one wanted: by value and kind, or by its text."""
    plain: object = label[0] if len(label) == 1 else label
    if isinstance(wanted, str):
        return " / ".join(str(part) for part in label) == wanted
    if isinstance(wanted, list):
        wanted = tuple(wanted)
    return bool(plain == wanted) and isinstance(plain, bool) == isinstance(wanted, bool)


def _block(
    rates: RateTable,
    members: list[int],
    labels: list[str],
    level: tuple[object, ...],
    kind: str,
    reference: list[int],
    versus: Any,
) -> PairBlock:
    n_groups = len(rates.groups)
    block, _ = rates.block_of(members[0] // n_groups)
    cells_of = dict(
        zip(
            (o * n_groups + g for o in block.outcomes for g in range(n_groups)),
            rates.cells_of(block),
            strict=True,
        )
    )
    cells = [cells_of[row] for row in members]
    source = block.source
    own = source.rows_of(cells)
    k = len(cells)
    if kind == "pairs":
        plus, minus = np.triu_indices(k, 1)
        named = labels
    elif kind == "group":
        plus = np.array([i for i in range(k) if i not in reference], dtype=np.intp)
        minus = np.full(plus.size, reference[0])
        named = labels
    elif kind == "number":
        plus, minus = np.arange(k), np.full(k, -1)
        named = [f"{float(versus):g}"]
    elif kind == "everyone":
        own = stack_rows([own, _everyone(rates, source, members, cells, n_groups)])
        plus, minus = np.arange(k), np.full(k, k)
        named = [*labels, EVERYONE.value]
    else:
        everyone = _everyone(rates, source, members, cells, n_groups)
        rest = everyone[np.zeros(k, dtype=np.intp)] - own
        own = stack_rows([own, rest])
        plus, minus = np.arange(k), np.arange(k, 2 * k)
        named = [*labels, *[EVERYONE_ELSE.value] * k]
    return PairBlock(
        source,
        own,
        plus,
        minus,
        level,
        tuple(labels[i] for i in plus),
        tuple(named[j] for j in minus),
    )


def _everyone(
    rates: RateTable, source: RateSource, members: list[int], cells: list[int], n_groups: int
) -> Any:
    """The union of the groups compared; with masks, also those who are in none of them."""
    if not rates.overlapping:
        return source.row(dict.fromkeys(cells, 1.0))
    return source.row({cells[0] - members[0] % n_groups + n_groups: 1.0})
