"""Standards: what share each category has in the population that rates are standardised to.

The named standards are files of age bands beside this module, each with its source.
"""

from __future__ import annotations

import json
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cache
from importlib.resources import files
from typing import Any

import numpy as np
from numpy.typing import NDArray

from svyrates.errors import QuestionError, some

__all__ = ["NAMED", "read_standard"]

FloatArray = NDArray[np.float64]
Labels = tuple[object, ...]
NAMED = ("us-2000", "european-2013", "who-2000-2025")

_NUMBER = r"(\d{1,3})"
_YEARS = r"(?:\s*years?)?(?:\s*old)?\s*"
_FORMS = (
    (re.compile(rf"^(?:ages?\s*)?{_NUMBER}\s*(?:-|–|—|to)\s*{_NUMBER}{_YEARS}$"), "both"),
    (
        re.compile(rf"^(?:ages?\s*)?{_NUMBER}\s*(?:\+|and\s+(?:over|older|above|up)){_YEARS}$"),
        "from",
    ),
    (re.compile(rf"^(?:>=|≥)\s*{_NUMBER}{_YEARS}$"), "from"),
    (re.compile(rf"^{_NUMBER}\s*years?\s+(?:and|or)\s+(?:over|older|above)$"), "from"),
    (re.compile(rf"^(?:<|under|below|less than)\s*{_NUMBER}{_YEARS}$"), "under"),
    (re.compile(rf"^{_NUMBER}$"), "single"),
)


@dataclass(frozen=True, slots=True)
class _Bands:
    title: str
    first: NDArray[np.float64]
    last: NDArray[np.float64]
    size: FloatArray


@cache
def _bands(name: str) -> _Bands:
    text = files("svyrates.rates").joinpath("standards", f"{name}.json").read_text("utf-8")
    whole = json.loads(text)
    rows = [(a, np.inf if b is None else b, size) for a, b, size in whole["bands"]]
    first, last, size = (np.array(column, dtype=np.float64) for column in zip(*rows, strict=True))
    return _Bands(whole["title"], first, last, size)


def read_standard(
    standard: Any, factors: Sequence[str], categories: Sequence[Labels]
) -> tuple[FloatArray | None, str]:
    """Share of every category, and what to call the standard; None for the sample's own.

    Parameters
    ----------
    standard : "sample", the name of a standard, or a dict of category -> share or count
    factors : columns adjusted for
    categories : labels of the categories, one per factor

    Raises
    ------
    QuestionError
        When categories and standard do not fit each other.
    """
    if isinstance(standard, str) and standard == "sample":
        return None, "the whole sample"
    if isinstance(standard, str):
        if standard not in NAMED:
            raise QuestionError(
                f"standard must be 'sample', {some(NAMED)}, or a dict of category -> share; got "
                f"{standard!r}."
            )
        if len(factors) != 1:
            raise QuestionError(
                f"standard={standard!r} is one of ages; adjust_for names {some(factors)}. Give a "
                "dict for crossed categories."
            )
        return _from_bands(standard, [str(category[0]) for category in categories])
    if not isinstance(standard, Mapping):
        raise QuestionError(
            f"standard must be 'sample', a name or a dict of category -> share; got "
            f"{type(standard).__name__}."
        )
    return _from_mapping(standard, categories), "the given standard"


def _from_mapping(given: Mapping[Any, Any], categories: Sequence[Labels]) -> FloatArray:
    found = np.full(len(categories), np.nan)
    used: set[Any] = set()
    for position, category in enumerate(categories):
        for key, size in given.items():
            label = key if isinstance(key, tuple) else (key,)
            if len(label) == len(category) and all(map(_same, label, category)):
                used.add(key)
                found[position] = _number(key, size)
    faults = []
    names = [category[0] if len(category) == 1 else category for category in categories]
    absent = [name for name, size in zip(names, found, strict=True) if np.isnan(size)]
    if absent:
        faults.append(f"has no share for {some(absent, 5)}")
    idle = [key for key in given if key not in used]
    if idle:
        faults.append(f"names {some(idle, 5)}, which do not occur")
    if faults:
        raise QuestionError(
            f"The standard {' and '.join(faults)}. It needs one share or count for every category; "
            "merge= joins categories."
        )
    if not found.sum() > 0:
        raise QuestionError("The standard's shares are all zero.")
    return np.asarray(found / found.sum())


def _number(key: object, size: Any) -> float:
    number = isinstance(size, int | float | np.number) and not isinstance(size, bool)
    if not number or not np.isfinite(float(size)) or float(size) < 0:
        raise QuestionError(
            f"The standard's share of {key!r} must be a number from 0 on; got {size!r}."
        )
    return float(size)


def _same(one: object, other: object) -> bool:
    return (one == other and isinstance(one, bool) == isinstance(other, bool)) or (
        isinstance(one, str) and one == str(other)
    )


def _from_bands(name: str, labels: list[str]) -> tuple[FloatArray, str]:
    """Sum the bands of a named standard to the age groups that the labels say."""
    bands = _bands(name)
    taken = np.zeros(bands.size.size, dtype=bool)
    shares = np.zeros(len(labels))
    for position, label in enumerate(labels):
        low, high = _ages(label)
        inside = (bands.first >= low) & (bands.last <= high)
        touched = (bands.first <= high) & (bands.last >= low)
        edges = sorted({int(first) for first in bands.first})
        if (inside != touched).any() or not inside.any():
            raise QuestionError(
                f"{bands.title}: the age group {label!r} cannot be summed from its bands, which "
                f"start at {', '.join(map(str, edges))}. Give a dict of your own."
            )
        if (taken & inside).any():
            raise QuestionError(f"{bands.title}: the age group {label!r} overlaps another one.")
        taken |= inside
        shares[position] = bands.size[inside].sum()
    return shares / shares.sum(), f"the {bands.title}"


def _ages(label: str) -> tuple[float, float]:
    """First and last year of age of a label such as "18-34", "75 and over", "80+", "under 5"."""
    text = label.strip().lower()
    for pattern, form in _FORMS:
        match = pattern.match(text)
        if match is None:
            continue
        first = float(match[1])
        if form == "both":
            return first, float(match[2])
        if form == "from":
            return first, np.inf
        return (0.0, first - 1.0) if form == "under" else (first, first)
    raise QuestionError(
        f"{label!r} does not read as an age group (such as '18-34' or '75 and over'). Relabel the "
        "column, or give the standard as a dict."
    )
