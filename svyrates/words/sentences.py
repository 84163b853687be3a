"""Pieces of plain English."""

from __future__ import annotations

from collections.abc import Sequence

from svyrates.words.numbers import count

__all__ = ["join_words", "plural"]


def join_words(words: Sequence[str]) -> str:
    """List words: ``join_words(["a", "b", "c"])`` is ``'a, b and c'``."""
    if len(words) < 2:
        return "".join(words)
    return f"{', '.join(words[:-1])} and {words[-1]}"


def plural(number: int, one: str, many: str | None = None) -> str:
    """A number with its noun: ``plural(3, "record")`` is ``'3 records'``."""
    return f"{count(number)} {one if number == 1 else many or one + 's'}"
