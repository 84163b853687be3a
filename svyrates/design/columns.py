"""The one door through which a user's frame comes in: columns become arrays and codes here.

Nothing deeper in the package knows about data frames. Whatever library the frame belongs to, the
same values give the same codes, the same labels and the same order of labels.
"""

from __future__ import annotations

import difflib
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import narwhals.stable.v2 as nw
import numpy as np
import pandas as pd
from numpy.typing import NDArray

from svyrates.errors import DesignError, some

__all__ = ["Codes", "ColumnFault", "Frame", "code_column", "numbers", "open_frame", "read_mask"]

Frame = nw.DataFrame[Any]
FloatArray = NDArray[np.float64]
CodeArray = NDArray[np.int32]
BoolArray = NDArray[np.bool_]

_EXACT_INTEGERS = 2.0**53
_DENSE_SPAN = 1 << 16


class ColumnFault(Exception):  # noqa: N818 - it is a fault for a list, not an error to raise
    """What is wrong with one column, worded for a list of faults (never leaves the package)."""


@dataclass(frozen=True, slots=True)
class Codes:
    """A column as integers: `codes` (records,) point into `levels`; -1 marks a missing value."""

    codes: CodeArray
    levels: tuple[object, ...]


def open_frame(data: object) -> Frame:
    """Wrap the user's frame without copying it; a lazy frame or relation is collected once."""
    if isinstance(data, pd.DataFrame):
        _check_names([*data.columns])
    try:
        frame: Any = nw.from_native(data)
    except TypeError as problem:
        raise DesignError(
            f"`data` must be a data frame (pandas, polars, pyarrow, or another that narwhals "
            f"reads); got {type(data).__name__}."
        ) from problem
    if isinstance(frame, nw.LazyFrame):
        frame = frame.collect()
    if not isinstance(frame, nw.DataFrame):
        raise DesignError(f"`data` must be a data frame; got {type(data).__name__}.")
    _check_names(frame.columns)
    if len(frame) == 0:
        raise DesignError("`data` has no records: 0 rows arrived. Check the filter or the file.")
    return frame


def _check_names(names: Sequence[object]) -> None:
    odd = [name for name in names if not isinstance(name, str)]
    if odd:
        raise DesignError(
            f"{len(odd)} column names are not text ({some(odd)}). Rename the columns, for example "
            "with `data.columns = [str(name) for name in data.columns]`."
        )
    seen: set[object] = set()
    twice = [name for name in names if name in seen or seen.add(name)]  # type: ignore[func-returns-value]
    if twice:
        raise DesignError(
            f"`data` has columns of the same name: {some(sorted(set(map(str, twice))))}. "
            "Rename or drop the duplicates."
        )


def column(frame: Frame, name: object, role: str) -> nw.Series[Any]:
    """Fetch one column, or say which one is not there and what comes near it."""
    if not isinstance(name, str):
        raise ColumnFault(f"{role} must be a column name; got {type(name).__name__} {name!r}.")
    if name not in frame.columns:
        near = difflib.get_close_matches(name, frame.columns, n=3, cutoff=0.6)
        hint = f"Did you mean {some(near)}?" if near else f"The columns are {some(frame.columns)}."
        raise ColumnFault(f"{role}: there is no column {name!r}. {hint}")
    return frame.get_column(name)


def numbers(frame: Frame, name: object, role: str) -> FloatArray:
    """Read a numeric column as floats, shape (records,); missing values become NaN."""
    series = column(frame, name, role)
    if series.dtype.is_numeric():
        if series.dtype.is_integer():
            missing = series.is_null()
            if not missing.any():
                return series.to_numpy().astype(np.float64)
        values = series.cast(nw.Float64).to_numpy()
        return np.asarray(values, dtype=np.float64)
    if series.dtype == nw.Object:
        return _numbers_from_objects(series, role, str(name))
    raise ColumnFault(
        f"{role} {name!r} holds {series.dtype} values, not numbers. Convert the column first."
    )


def _numbers_from_objects(series: nw.Series[Any], role: str, name: str) -> FloatArray:
    native = pd.Series(series.to_numpy(), dtype=object)
    kind = pd.api.types.infer_dtype(native, skipna=True)
    if kind not in {"integer", "floating", "mixed-integer-float", "decimal", "empty"}:
        raise ColumnFault(f"{role} {name!r} holds {kind} values, not numbers. Convert it first.")
    return np.asarray(native.astype(float), dtype=np.float64)


def code_column(frame: Frame, name: object, role: str) -> Codes:
    """Turn a column of any type into codes with sorted labels, or its own order of categories."""
    return code_series(column(frame, name, role), role, str(name))


def code_series(series: nw.Series[Any], role: str, name: str) -> Codes:
    """Code one series; the order of labels does not depend on the library it comes from."""
    dtype = series.dtype
    if dtype.is_integer():
        missing = None if is_plain(series) else series.is_null()
        if missing is not None and missing.any():
            return _code_integers(series.fill_null(0).to_numpy(), missing.to_numpy())
        return _code_integers(series.to_numpy(), None)
    if dtype == nw.Boolean:
        unknown = series.is_null().to_numpy()
        values = series.fill_null(False).to_numpy().astype(np.int32)
        coded = _code_integers(values, unknown if unknown.any() else None)
        return Codes(coded.codes, tuple(bool(level) for level in coded.levels))
    if dtype.is_float():
        return _code_floats(series.cast(nw.Float64).to_numpy(), role, name)
    if dtype in (nw.Categorical, nw.Enum):
        return _code_categories(series)
    if dtype in (nw.List, nw.Array, nw.Struct):
        raise ColumnFault(f"{role} {name!r} holds nested values ({dtype}); it needs plain ones.")
    return _code_values(series, role, name)


def is_plain(series: nw.Series[Any]) -> bool:
    """Whether the series is a numpy array inside, whose integers cannot be missing."""
    native = series.to_native()
    return isinstance(native, pd.Series) and isinstance(native.dtype, np.dtype)


def _code_integers(values: NDArray[Any], missing: BoolArray | None) -> Codes:
    known = values if missing is None else values[~missing]
    if known.size == 0:
        return Codes(np.full(values.size, -1, dtype=np.int32), ())
    low, high = int(known.min()), int(known.max())
    span = high - low + 1
    if span <= max(4 * values.size, _DENSE_SPAN) and abs(low) < 2**62:
        shifted = values.astype(np.int64) - low if low else values.astype(np.int64, copy=False)
        if missing is not None:
            shifted = np.where(missing, 0, shifted)
        seen = np.zeros(span, dtype=bool)
        seen[shifted if missing is None else shifted[~missing]] = True
        position = (np.cumsum(seen) - 1).astype(np.int32)
        codes = position[shifted]
        levels = (np.flatnonzero(seen) + low).tolist()
    else:
        found, uniques = pd.factorize(known, sort=True)
        levels = uniques.tolist()
        codes = np.zeros(values.size, dtype=np.int32)
        codes[slice(None) if missing is None else ~missing] = found
    if missing is not None:
        codes[missing] = -1
    return Codes(codes, tuple(levels))


def _code_floats(values: FloatArray, role: str, name: str) -> Codes:
    missing = np.isnan(values)
    if np.isinf(values).any():
        rows = int(np.isinf(values).sum())
        raise ColumnFault(f"{role} {name!r} is infinite in {rows} rows. Recode these rows.")
    known = np.where(missing, 0.0, values)
    # Integers with missing values become floats in some libraries and not in others; the labels
    # must not tell which library the frame came from.
    if np.all(np.abs(known) < _EXACT_INTEGERS) and np.all(known == np.floor(known)):
        return _code_integers(known.astype(np.int64), missing if missing.any() else None)
    codes, uniques = pd.factorize(values, sort=True)
    return Codes(codes.astype(np.int32), tuple(uniques.tolist()))


def _code_categories(series: nw.Series[Any]) -> Codes:
    native = series.to_native()
    if isinstance(native, pd.Series):
        codes = native.cat.codes.to_numpy().astype(np.int32)
        return Codes(codes, tuple(_plain(level) for level in native.cat.categories))
    levels = [str(level) for level in series.cat.get_categories().to_list()]
    # This type keeps no order of its own in polars: whatever was seen first in the process leads.
    if series.implementation.is_polars() and series.dtype == nw.Categorical:
        levels = sorted(set(series.cast(nw.String).drop_nulls().unique().to_list()))
    return _by_lookup(series.cast(nw.String), levels)


def _code_values(series: nw.Series[Any], role: str, name: str) -> Codes:
    native = series.to_native()
    if isinstance(native, pd.Series):
        try:
            first_seen, uniques = pd.factorize(native, use_na_sentinel=True)
        except TypeError as problem:
            raise ColumnFault(f"{role} {name!r} holds nested values; it needs plain ones.") from (
                problem
            )
        levels = [_plain(level) for level in uniques]
        order = _sorted_positions(levels, role, name)
        rank = np.empty(len(order) + 1, dtype=np.int32)
        rank[order] = np.arange(len(order), dtype=np.int32)
        rank[-1] = -1
        return Codes(rank[first_seen], tuple(levels[position] for position in order))
    levels = series.drop_nulls().unique().to_list()
    order = _sorted_positions(levels, role, name)
    return _by_lookup(series, [levels[position] for position in order])


def _by_lookup(series: nw.Series[Any], levels: list[Any]) -> Codes:
    missing = series.is_null().to_numpy()
    if not levels:
        return Codes(np.full(missing.size, -1, dtype=np.int32), ())
    looked_up = series.fill_null(levels[0]).replace_strict(
        levels, list(range(len(levels))), return_dtype=nw.Int32
    )
    codes = np.array(looked_up.to_numpy(), dtype=np.int32)
    codes[missing] = -1
    return Codes(codes, tuple(levels))


def _sorted_positions(levels: list[Any], role: str, name: str) -> list[int]:
    kinds = {type(level).__name__ for level in levels}
    numeric = kinds <= {"int", "float", "Decimal"}
    if len(kinds) > 1 and not numeric:
        raise ColumnFault(
            f"{role} {name!r} mixes kinds of values ({some(sorted(kinds))}), so 1 and '1' would "
            "be two groups. Convert the column to one kind first."
        )
    try:
        return sorted(range(len(levels)), key=levels.__getitem__)
    except TypeError as problem:
        raise ColumnFault(f"{role} {name!r}: its values cannot be put in order.") from problem


def _plain(value: Any) -> object:
    return value.item() if isinstance(value, np.generic) else value


def read_mask(frame: Frame, mask: object, role: str) -> tuple[BoolArray, BoolArray]:
    """Read a mask: a boolean array, a column name or a narwhals expression.

    Returns
    -------
    member, unknown : arrays of bool, shape (records,)
        `member` is true where the mask is; `unknown` where it is null.
    """
    if isinstance(mask, pd.Series):
        _check_index(frame, mask, role)
    series = _mask_series(frame, mask, role)
    if len(series) != len(frame):
        raise ColumnFault(f"{role} has {len(series)} values for {len(frame)} records.")
    unknown = series.is_null().to_numpy().astype(bool)
    if series.dtype == nw.Boolean:
        return series.fill_null(False).to_numpy().astype(bool), unknown
    try:
        values = numbers(series.alias("mask").to_frame(), "mask", role)
    except ColumnFault:
        values = _booleans_from_objects(series)
    unknown = np.isnan(values)
    if not np.isin(values[~unknown], (0.0, 1.0)).all():
        raise ColumnFault(f"{role} must hold true and false (or 1 and 0); it holds {series.dtype}.")
    return values == 1.0, unknown


def _mask_series(frame: Frame, mask: object, role: str) -> nw.Series[Any]:
    if isinstance(mask, str):
        return column(frame, mask, role)
    if isinstance(mask, nw.Expr) or type(mask).__name__ == "Expr":
        try:
            return frame.select(mask.alias("mask")).get_column("mask")  # type: ignore[attr-defined]
        except Exception as problem:
            reason = str(problem).splitlines()[0] if str(problem) else type(problem).__name__
            raise ColumnFault(f"{role}: the expression cannot be evaluated: {reason}") from problem
    if isinstance(mask, nw.Series):
        return mask
    try:
        return nw.from_native(mask, series_only=True)
    except TypeError:
        pass
    values = np.asarray(mask)
    if values.ndim != 1:
        raise ColumnFault(
            f"{role} must be a boolean array with one value per record, a column name or a "
            f"narwhals expression; got {type(mask).__name__} of shape {values.shape}."
        )
    return nw.from_native(pd.Series(values), series_only=True)


def _booleans_from_objects(series: nw.Series[Any]) -> FloatArray:
    native = pd.Series(series.to_numpy(), dtype=object)
    known = native[native.notna()]
    if not all(isinstance(value, bool | np.bool_) for value in known):
        return np.full(len(native), 2.0)
    return np.asarray(native.astype(float), dtype=np.float64)


def _check_index(frame: Frame, mask: pd.Series[Any], role: str) -> None:
    native = frame.to_native()
    if isinstance(native, pd.DataFrame) and not native.index.equals(mask.index):
        raise ColumnFault(
            f"{role} is a pandas Series whose index differs from the data's, so its values may "
            "belong to other records. Build it from the same frame, or pass an array."
        )


def fault_or(faults: list[str], read: Any, *arguments: Any) -> Any:
    """Call a reader; put its fault on the list and return None instead of raising."""
    try:
        return read(*arguments)
    except ColumnFault as fault:
        faults.append(str(fault))
        return None
