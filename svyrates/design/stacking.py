"""Frames of several waves under one another: common columns, common types, whatever the library."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import narwhals.stable.v2 as nw
import numpy as np
import pandas as pd
from numpy.typing import NDArray

from svyrates.design.columns import Frame

__all__ = ["apart", "missing_somewhere", "stack"]

Columns = Mapping[str, NDArray[Any]]
_WIDE = (nw.UInt64, nw.Int128, nw.UInt128)


def missing_somewhere(frames: Sequence[Frame]) -> list[str]:
    """Columns that some frame has and another has not, in order of appearance."""
    every = dict.fromkeys(name for frame in frames for name in frame.columns)
    return [name for name in every if not all(name in frame.columns for frame in frames)]


def apart(frames: Sequence[Frame], name: str) -> list[str]:
    """Types of a column, frame by frame, if they cannot be put under one another; else empty."""
    dtypes = [frame.schema[name] for frame in frames]
    kinds = {_kind(dtype) for dtype in dtypes}
    exact = len(set(map(str, dtypes))) > 1 and any(dtype in _WIDE for dtype in dtypes)
    return [str(dtype) for dtype in dtypes] if len(kinds) > 1 or exact else []


def _kind(dtype: Any) -> str:
    if dtype.is_numeric():
        return "numbers"
    return "text" if dtype in (nw.String, nw.Categorical, nw.Enum) else str(dtype)


def stack(
    frames: Sequence[Frame], names: Sequence[str], wave: str, labels: Sequence[str], added: Columns
) -> Any:
    """Put frames under one another.

    Parameters
    ----------
    frames : the waves
    names : the columns to keep, which every frame has in a type that fits
    wave, labels : the new first column, and what it says of each frame
    added : further columns, each (records of all waves,)

    Returns
    -------
    data frame
        Of the library of the frames. The wave is an ordered category where the library has one.
    """
    backend = frames[0].implementation
    position = np.repeat(np.arange(len(labels)), [len(frame) for frame in frames])
    if backend.is_pandas():
        dtype = pd.CategoricalDtype(list(labels), ordered=True)
        columns = {wave: pd.Categorical.from_codes(position, dtype=dtype)}
        kept = {
            name: _pandas_column([frame.get_column(name) for frame in frames]) for name in names
        }
        return pd.DataFrame({**columns, **kept, **added})
    said = [labels[place] for place in position.tolist()]
    kind = nw.Enum(list(labels)) if backend.is_polars() else nw.String()
    parts = [nw.new_series(wave, said, kind, backend=backend).to_frame()]
    if names:
        parts.append(nw.concat(_aligned(frames, names), how="vertical"))
    if added:
        parts.append(nw.from_dict(dict(added), backend=backend))
    return nw.concat(parts, how="horizontal").to_native()


def _pandas_column(parts: Sequence[nw.Series[Any]]) -> pd.Series[Any]:
    natives: list[pd.Series[Any]] = [part.to_native() for part in parts]
    dtypes = [native.dtype for native in natives]
    if all(isinstance(dtype, pd.CategoricalDtype) for dtype in dtypes) and len(set(dtypes)) > 1:
        # pandas would fall back to plain values, and the order of the categories would be lost.
        levels = dict.fromkeys(level for native in natives for level in native.cat.categories)
        natives = [native.astype(pd.CategoricalDtype(list(levels))) for native in natives]
    return pd.concat(natives, ignore_index=True)


def _aligned(frames: Sequence[Frame], names: Sequence[str]) -> list[Frame]:
    """The columns of every frame in one type each."""
    targets = {name: _common_type([frame.get_column(name) for frame in frames]) for name in names}
    return [
        frame.select(
            [
                nw.col(name) if target is None else nw.col(name).cast(target)
                for name, target in targets.items()
            ]
        )
        for frame in frames
    ]


def _common_type(parts: Sequence[nw.Series[Any]]) -> Any:
    """The type to cast to, None where all parts have one type already."""
    dtypes = [part.dtype for part in parts]
    natives = {str(getattr(part.to_native(), "type", part.dtype)) for part in parts}
    if any(dtype in (nw.Categorical, nw.Enum) for dtype in dtypes):
        return _common_categories(parts, dtypes, natives)
    if len(natives) == 1:
        return None
    if len(set(dtypes)) == 1:
        # pyarrow has several types for the same text or time.
        return dtypes[0]
    if all(dtype.is_integer() for dtype in dtypes):
        return nw.Int64
    return nw.Float64 if dtypes[0].is_numeric() else nw.String


def _common_categories(
    parts: Sequence[nw.Series[Any]], dtypes: Sequence[Any], natives: set[str]
) -> Any:
    if all(dtype == nw.Enum for dtype in dtypes):
        lists = [part.cat.get_categories().to_list() for part in parts]
        return nw.Enum(list(dict.fromkeys(level for levels in lists for level in levels)))
    if len(natives) > 1 or not all(dtype == nw.Categorical for dtype in dtypes):
        return nw.String
    if parts[0].implementation.is_polars():
        return None
    lists = [part.cat.get_categories().to_list() for part in parts]
    return None if all(levels == lists[0] for levels in lists) else nw.String
