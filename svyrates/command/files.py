"""Data files in, tables out."""

from __future__ import annotations

import csv
import difflib
import gzip
import io
import zipfile
import zlib
from collections.abc import Callable, Collection, Iterable, Iterator
from contextlib import AbstractContextManager, contextmanager
from dataclasses import dataclass
from fnmatch import fnmatchcase
from pathlib import Path
from typing import IO, Any, cast

import pandas as pd

from svyrates.errors import DataFileError, some
from svyrates.words import Table, progress_bar

__all__ = ["read_columns", "write_table"]

_COMPRESSIONS = {".gz": "gzip", ".bz2": "bz2", ".xz": "xz", ".zip": "zip", ".zst": "zstd"}
_TEXT = (".csv", ".tsv", ".txt")
# Reading goes at some tens of megabytes a second, so that larger files take more than a second.
_WORTH_PROGRESS = 20_000_000
_UNREADABLE = (
    pd.errors.ParserError,
    pd.errors.EmptyDataError,
    csv.Error,
    EOFError,
    gzip.BadGzipFile,
    zipfile.BadZipFile,
    zlib.error,
    ValueError,
    OSError,
)


def read_columns(
    path: Path,
    columns: Iterable[str],
    *,
    may_lack: Collection[str] = (),
    separator: str | None = None,
    encoding: str = "utf-8",
) -> pd.DataFrame:
    """Read the named columns of a data file.

    Parameters
    ----------
    path : Path
        CSV or TSV (also compressed), Parquet, or XPORT (.xpt).
    columns : names of the columns to read, or patterns such as `rw_*`; the others are left alone
    may_lack : those of them that are left out where the file does not have them
    separator : of a text file; a tab for .tsv, else a comma
    encoding : of a text or XPORT file

    Raises
    ------
    DataFileError
        Says what is wrong with the file, and never quotes its contents.
    """
    if not path.exists():
        near = difflib.get_close_matches(path.name, _neighbours(path), n=1)
        hint = f" Did you mean {near[0]!r}?" if near else ""
        raise DataFileError(f"{path}: there is no such file.{hint}")
    if path.is_dir():
        raise DataFileError(f"{path}: this is a folder, not a data file.")
    if path.stat().st_size == 0:
        raise DataFileError(f"{path}: the file is empty.")
    wanted = _Wanted(list(dict.fromkeys(columns)), frozenset(may_lack))
    suffixes = [suffix.lower() for suffix in path.suffixes]
    packed = _COMPRESSIONS.get(suffixes[-1] if suffixes else "")
    kind = suffixes[-2] if packed and len(suffixes) > 1 else suffixes[-1] if suffixes else ""
    if kind in _TEXT:
        frame = _read_text(path, wanted, packed, separator or _separator(kind), encoding)
    elif kind in (".parquet", ".pq") and not packed:
        frame = _read_parquet(path, wanted)
    elif kind == ".xpt" and not packed:
        frame = _read_xport(path, wanted, encoding)
    else:
        raise DataFileError(
            f"{path}: the suffix {''.join(path.suffixes)!r} is not one that can be read: .csv, "
            ".tsv or .txt (also with .gz, .bz2, .xz, .zip or .zst), .parquet, .xpt."
        )
    if frame.empty:
        raise DataFileError(f"{path}: the file has a header but no records.")
    return frame


def _neighbours(path: Path) -> list[str]:
    return [each.name for each in path.parent.iterdir()] if path.parent.is_dir() else []


def _separator(kind: str) -> str:
    return "\t" if kind == ".tsv" else ","


@dataclass(frozen=True, slots=True)
class _Wanted:
    """Columns to read, and those of them that the file need not have."""

    names: list[str]
    may_lack: frozenset[str]


def _choose(path: Path, wanted: _Wanted, names: list[str], hint: str = "") -> list[str]:
    """The columns wanted, patterns replaced by the columns that fit them."""
    twice = sorted({name for name in names if names.count(name) > 1})
    if twice:
        raise DataFileError(
            f"{path}: columns of the same name: {some(twice)}. Rename them in the file first."
        )
    chosen: dict[str, None] = {}
    absent = []
    for name in wanted.names:
        fitting = [name] if name in names else _fitting(name, names)
        chosen |= dict.fromkeys(fitting)
        if not fitting and name not in wanted.may_lack:
            absent.append(name)
    if not absent:
        return list(chosen)
    parts = []
    for name in absent:
        near = difflib.get_close_matches(name, names, n=1)
        parts.append(f"{name!r}" + (f" (did you mean {near[0]!r}?)" if near else ""))
    raise DataFileError(
        f"{path}: no column {', '.join(parts)}. The file has {len(names)} columns: "
        f"{some(names, 12)}.{hint}"
    )


def _fitting(pattern: str, names: list[str]) -> list[str]:
    if not any(mark in pattern for mark in "*?["):
        return []
    return [name for name in names if fnmatchcase(name, pattern)]


def _read_text(
    path: Path, wanted: _Wanted, packed: str | None, separator: str, encoding: str
) -> pd.DataFrame:
    if len(separator) != 1:
        raise DataFileError(f"the separator must be one character; got {separator!r}.")
    encoding = "utf-8-sig" if encoding.lower().replace("-", "") == "utf8" else encoding
    options: dict[str, Any] = {"sep": separator, "encoding": encoding, "compression": packed}
    try:
        header = pd.read_csv(
            path, header=None, nrows=1, dtype=str, keep_default_na=False, **options
        )
        names = [str(name) for name in header.iloc[0]]
        other = next((mark for mark in ";\t|," if mark != separator and mark in names[0]), None)
        hint = f" It looks separated by {other!r}: use --separator." if other else ""
        chosen = _choose(path, wanted, names, hint if len(names) == 1 else "")
        with _watched(path) as file:
            frame: pd.DataFrame = pd.read_csv(file, usecols=chosen, low_memory=False, **options)
    except UnicodeError as problem:
        raise DataFileError(
            f"{path}: the text is not {encoding}. Name its encoding, for example with "
            "--encoding latin-1."
        ) from problem
    except LookupError as problem:
        raise DataFileError(f"there is no encoding {encoding!r}.") from problem
    except DataFileError:
        raise
    except _UNREADABLE as problem:
        kind = "compressed or malformed" if packed else "malformed"
        raise DataFileError(
            f"{path}: cannot be read as a table ({type(problem).__name__}): the file seems "
            f"{kind}, or its suffix does not fit its contents."
        ) from problem
    return frame[chosen]


def _read_parquet(path: Path, wanted: _Wanted) -> pd.DataFrame:
    try:
        import pyarrow as pa
        import pyarrow.parquet as pq
    except ImportError as problem:
        raise DataFileError(
            f"{path}: reading Parquet needs pyarrow: pip install 'svyrates[parquet]'."
        ) from problem
    try:
        chosen = _choose(path, wanted, pq.read_schema(path).names)
        with _sign_of_life(path):
            return cast("pd.DataFrame", pq.read_table(path, columns=chosen).to_pandas())
    except (pa.ArrowException, OSError) as problem:
        raise DataFileError(
            f"{path}: cannot be read as Parquet ({type(problem).__name__})."
        ) from problem


def _read_xport(path: Path, wanted: _Wanted, encoding: str) -> pd.DataFrame:
    try:
        with _sign_of_life(path):
            frame = pd.read_sas(path, format="xport", encoding=encoding)
    except UnicodeError as problem:
        raise DataFileError(
            f"{path}: the text is not {encoding}. Name its encoding, for example with "
            "--encoding latin-1."
        ) from problem
    except LookupError as problem:
        raise DataFileError(f"there is no encoding {encoding!r}.") from problem
    except (*_UNREADABLE, IndexError, KeyError) as problem:
        raise DataFileError(
            f"{path}: cannot be read as an XPORT file ({type(problem).__name__})."
        ) from problem
    chosen = _choose(path, wanted, [str(name) for name in frame.columns])
    frame = frame[chosen].copy()
    for name in chosen:
        column = frame[name]
        if column.dtype.kind == "f":
            # The reader returns this smallest number of the format where the file holds zero.
            frame[name] = column.where(column.abs() > 1e-70, 0.0).where(column.notna())
        else:
            frame[name] = column.replace("", None)
    return frame


@contextmanager
def _watched(path: Path) -> Iterator[IO[bytes] | Path]:
    """The file, with a progress bar on the terminal if it is large."""
    size = path.stat().st_size
    with progress_bar(f"Reading {path.name}", size, worth=size > _WORTH_PROGRESS) as progress:
        if size <= _WORTH_PROGRESS:
            yield path
            return
        with path.open("rb") as file:
            yield cast("IO[bytes]", _Counted(file, progress))


def _sign_of_life(path: Path) -> AbstractContextManager[object]:
    """A bar without steps for a large file that is read in one piece."""
    worth = path.stat().st_size > _WORTH_PROGRESS
    return progress_bar(f"Reading {path.name}", 1, worth=worth)


class _Counted(io.BufferedIOBase):
    """A binary file that tells how far it has been read."""

    def __init__(self, file: IO[bytes], progress: Callable[[int], None]) -> None:
        self._file, self._progress = file, progress

    def readable(self) -> bool:
        return True

    def read(self, size: int | None = -1) -> bytes:
        content = self._file.read(-1 if size is None else size)
        self._progress(len(content))
        return content

    def read1(self, size: int = -1) -> bytes:
        return self.read(size)

    def seekable(self) -> bool:
        return True

    def seek(self, offset: int, whence: int = 0) -> int:
        return self._file.seek(offset, whence)

    def tell(self) -> int:
        return self._file.tell()


def write_table(path: Path, table: Table) -> None:
    """Write a table as CSV or JSON, by suffix; the folder is made if need be."""
    writers = {".csv": table.csv, ".json": table.json}
    writer = writers.get(path.suffix.lower())
    if writer is None:
        raise DataFileError(f"{path}: results are written as {some(list(writers))}.")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(writer(), encoding="utf-8", newline="")
    except OSError as problem:
        raise DataFileError(f"{path}: cannot be written ({problem.strerror}).") from problem
