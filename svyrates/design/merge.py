"""Replicate weights that come in a file of their own, merged on keys."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import narwhals.stable.v2 as nw

from svyrates.design.columns import ColumnFault, column, open_frame
from svyrates.errors import DesignError, DesignWarning, all_faults, some, warn

__all__ = ["merge_replicates"]


def merge_replicates(data: Any, weights: Any, on: str | Sequence[str]) -> Any:
    """Join a file of replicate weights to the data, record by record.

    Parameters
    ----------
    data : data frame
        The survey, one row per respondent.
    weights : data frame of the same library
        The replicate weights, with the keys.
    on : str or list of str
        Key columns, which tell the records apart in `weights`.

    Returns
    -------
    data frame
        The records of `data` in their order, with the columns of `weights`.

    Raises
    ------
    DesignError
        When a key is missing, repeats in `weights`, or a record of `data` finds no weights.

    Warns
    -----
    DesignWarning
        When some weights belong to no record.

    Examples
    --------
    >>> import pandas as pd
    >>> import svyrates as sr
    >>> survey = pd.DataFrame({"id": [7, 8], "y": [1, 0]})
    >>> file = pd.DataFrame({"id": [8, 7], "rw_1": [2.0, 0.0], "rw_2": [0.0, 2.0]})
    >>> sr.merge_replicates(survey, file, on="id")["rw_1"].tolist()
    [0.0, 2.0]

    Each record has the weights of its own key.
    """
    keys = [on] if isinstance(on, str) else list(on)
    left, right = open_frame(data), open_frame(weights)
    faults: list[str] = []
    for name, frame in (("data", left), ("weights", right)):
        for key in keys:
            try:
                missing = int(column(frame, key, f"on, in {name}").is_null().sum())
            except ColumnFault as fault:
                faults.append(str(fault))
                continue
            if missing:
                faults.append(f"key {key!r} is missing in {missing} rows of {name}.")
    both = [name for name in right.columns if name in left.columns and name not in keys]
    if both:
        faults.append(f"both frames have columns {some(both)}; drop them from one.")
    if not faults:
        faults += _key_faults(left, right, keys)
    all_faults(DesignError, "The merge has", faults)
    unused = len(right) - len(right.join(left.select(keys).unique(), on=keys, how="semi"))
    if unused:
        warn(f"{unused} of {len(right)} rows of weights belong to no record.", DesignWarning)
    order = "__order__"
    while order in left.columns or order in right.columns:
        order += "_"
    joined = left.with_row_index(order).join(right, on=keys, how="left").sort(order).drop(order)
    return joined.to_native()


def _key_faults(left: nw.DataFrame[Any], right: nw.DataFrame[Any], keys: list[str]) -> list[str]:
    named = ", ".join(keys)
    faults = []
    repeated = len(right) - len(right.select(keys).unique())
    if repeated:
        faults.append(f"{repeated} rows of weights repeat a key ({named}): which one is meant?")
    alone = left.join(right.select(keys), on=keys, how="anti")
    if len(alone):
        examples = alone.select(keys).head(3).rows()
        faults.append(
            f"{len(alone)} of {len(left)} records find no weights by {named} (such as "
            f"{some([row[0] if len(row) == 1 else row for row in examples])}). Are the keys of the "
            "same type, and is it the right file?"
        )
    return faults
