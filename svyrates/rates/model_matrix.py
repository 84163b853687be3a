"""From a formula and the columns it names to a model matrix, and the same with a column changed."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass
from itertools import product
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from svyrates.design.columns import Codes, Frame, code_column, column, fault_or, numbers
from svyrates.errors import QuestionError, all_faults
from svyrates.rates.formula import ParsedFormula

__all__ = ["ModelColumns", "ModelMatrix", "build_matrix", "read_model_columns"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
_MOST_COLUMNS = 1_000


@dataclass(frozen=True, slots=True)
class ModelColumns:
    """Columns of a formula.

    Attributes
    ----------
    values : name -> numbers (records,) or coded labels
    known : (records,) where all of them have a value
    """

    values: dict[str, FloatArray | Codes]
    known: BoolArray

    def categorical(self, name: str, kept: NDArray[np.intp]) -> Any:
        """One column of some records, as patsy takes it."""
        found = self.values[name]
        if not isinstance(found, Codes):
            return found[kept]
        codes = found.codes[kept]
        occurring = np.bincount(codes, minlength=len(found.levels)) > 0
        number = np.cumsum(occurring) - 1
        levels = [str(level) for level, here in zip(found.levels, occurring, strict=True) if here]
        return pd.Categorical.from_codes(number[codes].tolist(), categories=pd.Index(levels))


def read_model_columns(
    frame: Frame, names: tuple[str, ...], by: str | None, faults: list[str]
) -> ModelColumns:
    """Read the columns of a formula; `by` is read as labels whatever its type."""
    values: dict[str, FloatArray | Codes] = {}
    known = np.ones(len(frame), dtype=bool)
    for name in names:
        series = fault_or(faults, column, frame, name, "formula")
        if series is None:
            continue
        if series.dtype.is_numeric() and name != by:
            found = fault_or(faults, numbers, frame, name, "formula")
            if found is not None:
                values[name] = found
                known &= np.isfinite(found)
            continue
        coded = fault_or(faults, code_column, frame, name, "formula")
        if coded is not None:
            values[name] = coded
            known &= coded.codes >= 0
    return ModelColumns(values, known)


@dataclass(frozen=True, slots=True)
class ModelMatrix:
    """A model matrix that can be built again with one column changed.

    Attributes
    ----------
    matrix : (rows, k)
    names : (k,) names of its columns
    terms : name -> positions of its columns, the intercept left out
    """

    matrix: FloatArray
    names: tuple[str, ...]
    terms: dict[str, slice]
    _info: Any
    _data: dict[str, Any]

    def categories(self, key: str) -> list[str]:
        """Levels of a categorical column that occur."""
        return [str(level) for level in self._data[key].categories]

    def codes(self, key: str) -> NDArray[np.intp]:
        """Which of them each row has, (rows,)."""
        return np.asarray(self._data[key].codes, dtype=np.intp)

    def with_level(self, key: str, level: object) -> FloatArray:
        """The matrix with a categorical column set to one level in every row."""
        from patsy import build_design_matrices

        data = dict(self._data)
        own = data[key]
        codes = np.full(len(own), own.categories.get_loc(str(level)), dtype=np.intp)
        data[key] = pd.Categorical.from_codes(codes.tolist(), categories=own.categories)
        return np.asarray(build_design_matrices([self._info], data)[0], dtype=np.float64)


def build_matrix(
    parsed: ParsedFormula, columns: ModelColumns, kept: NDArray[np.intp]
) -> ModelMatrix:
    """Model matrix of some records."""
    from patsy import EvalEnvironment, NAAction, PatsyError, build_design_matrices, incr_dbuilder

    data = {f"x{i}": columns.categorical(name, kept) for i, name in enumerate(parsed.columns)}
    # Nothing of the caller's can be seen from here.
    names_at_hand = EvalEnvironment([{"log": np.log, "exp": np.exp, "sqrt": np.sqrt}])
    undefined_stays = NAAction(on_NA="raise", NA_types=[])
    try:
        with np.errstate(all="ignore"):
            info = incr_dbuilder(
                parsed.right, lambda: iter([data]), names_at_hand, NA_action=undefined_stays
            )
            # Columns are counted before any is made: labels multiply in interactions.
            few = len(info.column_names) <= _MOST_COLUMNS
            built = build_design_matrices([info], data, NA_action=undefined_stays) if few else None
    except (PatsyError, ValueError, TypeError, ArithmeticError) as problem:
        reason = _readable(str(problem).partition("\n")[0], parsed)
        raise QuestionError(f"The formula {parsed.text!r} cannot be built: {reason}.") from problem
    if built is None:
        raise QuestionError(
            f"The formula {parsed.text!r} makes {len(info.column_names):,} columns, more than "
            f"{_MOST_COLUMNS:,}. Is a column with many labels meant as numbers?"
        )
    matrix = np.asarray(built[0], dtype=np.float64)
    faults = []
    bad = int(np.count_nonzero(~np.isfinite(matrix).all(axis=1)))
    if bad:
        faults.append(f"terms are infinite or undefined in {bad} records, such as log of 0.")
    all_faults(QuestionError, f"The formula {parsed.text!r} has", faults)
    names = tuple(_coefficients(info, parsed))
    terms = {
        _readable(name, parsed): where
        for name, where in info.term_name_slices.items()
        if name != "Intercept"
    }
    return ModelMatrix(matrix, names, terms, info, data)


def _coefficients(info: Any, parsed: ParsedFormula) -> Iterator[str]:
    """Names of the coefficients in order, such as "tenure = owner × age"."""
    for term in info.terms:
        for part in info.term_codings[term]:
            if not part.factors:
                yield "Intercept"
                continue
            each = [list(_of_factor(info.factor_infos[f], f, part, parsed)) for f in part.factors]
            # The first factor varies fastest.
            for reversed_names in product(*reversed(each)):
                yield " × ".join(reversed(reversed_names))


def _of_factor(found: Any, factor: Any, part: Any, parsed: ParsedFormula) -> Iterator[str]:
    if found.type == "numerical":
        name = _readable(factor.name(), parsed)
        several = found.num_columns > 1
        yield from (f"{name} {i + 1}" if several else name for i in range(found.num_columns))
        return
    position = re.search(r"x(\d+)", factor.name())
    assert position is not None  # noqa: S101 - a factor is made of columns
    column_name = parsed.columns[int(position[1])]
    for suffix in part.contrast_matrices[factor].column_suffixes:
        yield f"{column_name} = {suffix[1:-1].removeprefix('T.')}"


def _readable(text: str, parsed: ParsedFormula) -> str:
    """Put the columns' own names back, and leave out what only patsy needs."""
    text = re.sub(r"(?<=\d)\.0\b", "", re.sub(r"\(\(([^()]*)\)\)", r"(\1)", text))
    return re.sub(r"\bx(\d+)\b", lambda match: parsed.columns[int(match[1])], text)
