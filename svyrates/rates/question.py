"""The gate of a question: outcome, groups and subpopulation become codes, or one list of faults."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import product
from typing import Any

import narwhals.stable.v2 as nw
import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import sparse

from svyrates.design.columns import (
    Codes,
    ColumnFault,
    Frame,
    code_column,
    column,
    fault_or,
    is_plain,
    read_mask,
)
from svyrates.errors import some

__all__ = ["Grouping", "Outcome", "read_grouping", "read_outcomes", "read_where"]

CodeArray = NDArray[np.int32]
LevelArray = NDArray[np.int8]
BoolArray = NDArray[np.bool_]

MOST_CELLS = 10_000
_MISSING = 2


@dataclass(frozen=True, slots=True)
class Outcome:
    """One outcome: its `name`, how success was `defined`, and `level` (records,) 0, 1 or 2."""

    name: str
    defined: str
    level: LevelArray


@dataclass(frozen=True, slots=True)
class Grouping:
    """Who belongs to which group.

    Attributes
    ----------
    columns : names of the grouping columns; empty for everyone in one group
    labels : one tuple of labels per group, in the order of the table
    pattern : (records,) grouping pattern, -1 where the group is unknown
    membership : (patterns, cells) sparse, or an array of bool for masks; the groups come first
    overlapping : whether a record may be in several groups or in none; the last cell is then
        everyone with known masks
    """

    columns: tuple[str, ...]
    labels: tuple[tuple[object, ...], ...]
    pattern: CodeArray
    membership: Any
    overlapping: bool

    @property
    def n_groups(self) -> int:
        """Number of groups in the table."""
        return len(self.labels)


def read_outcomes(frame: Frame, outcome: Any, success: Any, faults: list[str]) -> list[Outcome]:
    """Read one outcome, a list of columns, or a mapping of name to column, pair or mask."""
    if isinstance(outcome, str):
        asked: list[tuple[str, Any]] = [(outcome, outcome)]
    elif isinstance(outcome, Mapping):
        asked = [(str(name), given) for name, given in outcome.items()]
    elif isinstance(outcome, Sequence):
        asked = [(str(name), name) for name in outcome]
    else:
        asked = [("outcome", outcome)]
    if not asked:
        faults.append("outcome names no column.")
    names = [name for name, _ in asked]
    if len(set(names)) < len(names):
        faults.append(f"outcome names a column twice: {some(names)}.")
    read = []
    for name, given in asked:
        found = fault_or(faults, _one_outcome, frame, name, given, success)
        if found is not None:
            read.append(found)
    return read


def _one_outcome(frame: Frame, name: str, given: Any, success: Any) -> Outcome:
    chosen = success.get(name) if isinstance(success, Mapping) else success
    if isinstance(given, tuple):
        if len(given) != 2:
            raise ColumnFault(f"outcome {name!r}: give (column, success values); got {given!r}.")
        given, chosen = given
    if not isinstance(given, str):
        if chosen is not None:
            raise ColumnFault(f"outcome {name!r} is a mask already: leave `success` out.")
        yes, unknown = read_mask(frame, given, f"outcome {name!r}")
        level = yes.astype(np.int8)
        level[unknown] = _MISSING
        return Outcome(name, "true", level)
    role = f"outcome {name!r}" if name == given else f"outcome {name!r}, column"
    series = column(frame, given, role)
    if chosen is None:
        return Outcome(name, "1" if series.dtype != nw.Boolean else "true", _binary(series, given))
    wanted = _as_list(chosen)
    coded = code_column(frame, given, role)
    absent = [value for value in wanted if _position(coded.levels, value) is None]
    if absent or not wanted:
        raise ColumnFault(
            f"{role}: success {some(wanted)} names values that do not occur: {some(absent)}. "
            f"The column holds {some(coded.levels, 12)}."
        )
    yes_codes = {_position(coded.levels, value) for value in wanted}
    lookup = np.array(
        [int(code in yes_codes) for code in range(len(coded.levels))] + [_MISSING], dtype=np.int8
    )
    return Outcome(name, " or ".join(str(value) for value in wanted), lookup[coded.codes])


def _as_list(values: Any) -> list[Any]:
    if isinstance(values, str) or not isinstance(values, Sequence | set | frozenset | np.ndarray):
        return [values]
    return list(values)


def _position(levels: Sequence[object], wanted: object) -> int | None:
    """Find a label by value and kind: 1 and True and '1' are three labels."""
    for position, level in enumerate(levels):
        if level == wanted and isinstance(level, bool) == isinstance(wanted, bool | np.bool_):
            return position
    return None


def _binary(series: nw.Series[Any], name: str) -> LevelArray:
    """Levels of a 0/1 or boolean column."""
    if series.dtype.is_integer() and (is_plain(series) or not series.is_null().any()):
        values = series.to_numpy()
        if values.min() >= 0 and values.max() <= 1:
            return values.astype(np.int8)
    if not (series.dtype.is_numeric() or series.dtype in (nw.Boolean, nw.Object)):
        shown = some(sorted(map(str, series.drop_nulls().unique().to_list())), 8)
        raise ColumnFault(
            f"outcome {name!r} holds {series.dtype} values ({shown}): say which count as success "
            "with success=[...]."
        )
    if series.dtype.is_numeric():
        values = series.cast(nw.Float64).to_numpy()
        unknown = np.isnan(values)
        other = values[~unknown & (values != 0.0) & (values != 1.0)]
        if other.size:
            raise ColumnFault(
                f"outcome {name!r} holds values other than 0 and 1 in {other.size} rows "
                f"({some(np.unique(other).tolist())}): say which count as success with "
                "success=[...], and recode codes for 'refused' or 'unknown' to missing."
            )
        level = np.where(unknown, _MISSING, values == 1.0)
        return level.astype(np.int8)
    yes, unknown = read_mask(series.to_frame(), series.name, f"outcome {name!r}")
    return np.where(unknown, _MISSING, yes).astype(np.int8)


def read_where(frame: Frame, where: Any, faults: list[str]) -> tuple[BoolArray | None, int]:
    """Read the subpopulation; records with a null in it are outside, and counted."""
    if where is None:
        return None, 0
    found = fault_or(faults, read_mask, frame, where, "where")
    if found is None:
        return None, 0
    inside, unknown = found
    if not inside.any():
        faults.append("where selects no records.")
    return inside, int(np.count_nonzero(unknown))


def read_grouping(
    frame: Frame,
    by: Any,
    faults: list[str],
    merge: Mapping[str, Mapping[object, object]] | None = None,
) -> Grouping:
    """Read `by`: None, one column, several columns (crossed), or masks (may overlap)."""
    if by is None:
        pattern = np.zeros(len(frame), dtype=np.int32)
        return Grouping((), ((),), pattern, sparse.csr_array(np.ones((1, 1))), False)
    if isinstance(by, Mapping):
        return _overlapping(frame, by, faults)
    names = [by] if isinstance(by, str) else list(by)
    if len(set(map(str, names))) < len(names):
        faults.append(f"by names a column twice: {some(names)}.")
    coded = [fault_or(faults, code_column, frame, name, "by") for name in names]
    if merge:
        coded = _merged(names, coded, merge, faults)
    known = [codes for codes in coded if codes is not None]
    for name, codes in zip(names, coded, strict=True):
        if codes is not None and not codes.levels:
            faults.append(f"by {name!r} has no known values: all rows are missing.")
    n_cells = int(np.prod([float(len(codes.levels)) for codes in known])) if known else 0
    if n_cells > MOST_CELLS:
        sizes = " × ".join(str(len(codes.levels)) for codes in known)
        faults.append(
            f"by {some(names)} makes {n_cells:,} groups ({sizes}), more than {MOST_CELLS:,}. "
            "Group the values of a column, or ask one level at a time with `where`."
        )
    if faults:
        return _nothing(len(frame))
    return _crossed(names, known, n_cells)


def _merged(
    names: list[str],
    coded: list[Codes | None],
    merge: Mapping[str, Mapping[object, object]],
    faults: list[str],
) -> list[Codes | None]:
    """Let levels join others, column by column."""
    strange = [name for name in merge if name not in names]
    if strange:
        faults.append(f"merge names {some(strange)}; the columns are {some(names)}.")
    return [
        _joined(name, codes, merge[name], faults) if codes is not None and name in merge else codes
        for name, codes in zip(names, coded, strict=True)
    ]


def _joined(name: str, codes: Codes, joins: Mapping[object, object], faults: list[str]) -> Codes:
    levels = codes.levels
    absent = [level for pair in joins.items() for level in pair if _position(levels, level) is None]
    chains = [level for level in joins.values() if level in joins]
    if absent or chains:
        faults.append(
            f"merge of {name!r}: "
            + (f"{some(absent)} are no levels; these are {some(levels, 12)}. " if absent else "")
            + (f"{some(chains)} both joins a level and takes one in." if chains else "")
        )
        return codes
    target = list(range(len(levels)))
    for level, partner in joins.items():
        target[_position(levels, level) or 0] = _position(levels, partner) or 0
    kept = sorted(set(target))
    number = np.array([kept.index(position) for position in target] + [-1], dtype=np.int32)
    return Codes(number[codes.codes], tuple(levels[position] for position in kept))


def _crossed(names: list[str], coded: list[Codes], n_cells: int) -> Grouping:
    pattern = coded[0].codes
    unknown = pattern < 0
    for codes in coded[1:]:
        unknown = unknown | (codes.codes < 0)
        pattern = pattern * np.int32(len(codes.levels)) + codes.codes
    if len(coded) > 1:
        pattern[unknown] = -1
    labels = tuple(product(*(codes.levels for codes in coded)))
    membership = sparse.eye_array(n_cells, format="csr")
    return Grouping(tuple(names), labels, pattern, membership, False)


def _nothing(n_records: int) -> Grouping:
    return Grouping((), (), np.full(n_records, -1, np.int32), sparse.csr_array((1, 1)), False)


def _overlapping(frame: Frame, by: Mapping[Any, Any], faults: list[str]) -> Grouping:
    if not by:
        faults.append("by is an empty mapping: give at least one mask.")
        return _nothing(len(frame))
    pattern = np.zeros(len(frame), dtype=np.int64)
    unknown = np.zeros(len(frame), dtype=bool)
    members: Any = np.zeros((1, 0), dtype=bool)
    for name, mask in by.items():
        read = fault_or(faults, read_mask, frame, mask, f"by {name!r}")
        if read is None:
            continue
        inside, null = read
        unknown |= null
        # Renumbering after every mask keeps the patterns to those that occur.
        pattern, uniques = pd.factorize(pattern * 2 + inside)
        before, added = np.divmod(np.asarray(uniques), 2)
        members = np.column_stack((members[before], added.astype(bool)))
    if faults:
        return _nothing(len(frame))
    cells = np.column_stack((members, np.ones(len(members), dtype=bool)))
    codes = pattern.astype(np.int32)
    codes[unknown] = -1
    labels = tuple((str(name),) for name in by)
    return Grouping(("group",), labels, codes, cells, True)
