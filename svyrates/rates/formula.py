"""A model formula is data, not code: it is read here, and patsy sees a rebuilt copy of it.

patsy evaluates Python. So the text is read by a small parser of our own, and what patsy gets is
written anew from what was read: columns become `x0`, `x1`, …, numbers and labels are written by
`repr`, and functions are names of a short list. Nothing of the text itself reaches patsy.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from dataclasses import dataclass
from typing import NoReturn

from svyrates.errors import QuestionError

__all__ = ["FUNCTIONS", "ParsedFormula", "parse_formula"]

FUNCTIONS = ("C", "I", "log", "exp", "sqrt", "center", "standardize", "bs", "cr")
_TOKEN = re.compile(
    r"\s*(?:(?P<quoted>`[^`]*`)|(?P<name>[^\W\d]\w*)|(?P<number>\d+(?:\.\d*)?(?:[eE][+-]?\d+)?)"
    r"|(?P<label>\"[^\"]*\"|'[^']*')|(?P<sign>\*\*|[-+*/:(),=]))"
)
# How tightly a sign binds between terms, and in arithmetic.
_TERMS = {"+": 1, "-": 1, "*": 2, "/": 2, ":": 3, "**": 4}
_ARITHMETIC = {"+": 1, "-": 1, "*": 2, "/": 2, "**": 4}
_LONGEST, _DEEPEST = 10_000, 60
# Terms that a formula may expand to, and signs within a function: `a * b * c …` doubles with each.
_MOST_TERMS = 200
# A piece that has been read: rebuilt, and how many terms or operands it expands to.
Piece = tuple[str, int]


@dataclass(frozen=True, slots=True)
class ParsedFormula:
    """A formula that has been read.

    Attributes
    ----------
    text : as it was given
    outcome : column on the left
    columns : columns on the right, in order; `x0`, `x1`, … in `right`
    right : the right side, rebuilt for patsy
    """

    text: str
    outcome: str
    columns: tuple[str, ...]
    right: str


def parse_formula(text: object) -> ParsedFormula:
    """Read a formula such as ``"cold_home ~ tenure + C(age_group)"``.

    It may hold columns, `+ - * : / **`, parentheses, 0 and 1 for the intercept, and the functions
    of `FUNCTIONS`; names that are no identifiers stand in backquotes.

    Raises
    ------
    QuestionError
        Says what is not allowed, and at which character.
    """
    if not isinstance(text, str):
        raise QuestionError(f"A formula is text, such as 'y ~ group + age'; got {text!r}.")
    if len(text) > _LONGEST:
        raise QuestionError(f"The formula has {len(text)} characters, more than {_LONGEST}.")
    left, tilde, right = text.partition("~")
    if not tilde or not left.strip() or not right.strip():
        raise QuestionError(f"A formula has one '~', as in 'y ~ group + age'; got {text!r}.")
    of_left = _Reader(text, 0, len(left))
    outcome = of_left.outcome()
    reader = _Reader(text, len(left) + 1, len(text))
    rebuilt = reader.whole()
    if not reader.columns:
        raise QuestionError(f"The formula {text!r} names no column on the right.")
    return ParsedFormula(text, outcome, tuple(reader.columns), rebuilt)


class _Reader:
    """Reads one side of a formula from left to right and rebuilds it."""

    def __init__(self, text: str, start: int, stop: int) -> None:
        self.text = text
        self.columns: dict[str, str] = {}
        self.tokens: list[tuple[str, str, int]] = []
        self.position = 0
        self.depth = 0
        while start < stop:
            match = _TOKEN.match(text, start, stop)
            if match is None:
                if not text[start:stop].strip():
                    break
                self.refuse(f"{text[start:stop].strip()[:1]!r}", start)
            kind = str(match.lastgroup)
            self.tokens.append((kind, match[kind], match.start(kind)))
            start = match.end()
        self.tokens.append(("end", "", stop))

    def refuse(self, what: str, place: int | None = None) -> NoReturn:
        at = self.tokens[self.position][2] if place is None else place
        raise QuestionError(
            f"The formula {self.text[:200]!r} has {what} at character {at + 1}. It may have "
            "columns (in backquotes where the name is no identifier), + - * : / **, 0 and 1, and "
            f"{', '.join(FUNCTIONS)}."
        )

    def outcome(self) -> str:
        """The only name of the left side."""
        kind, word, _ = self.next()
        if kind not in ("name", "quoted") or self.peek()[0] != "end":
            self.refuse("more than a column on the left", 0)
        return word.strip("`")

    def whole(self) -> str:
        """All terms of the right side."""
        built, _ = self.expression(_TERMS, self.term)
        if self.peek()[0] != "end":
            self.refuse(f"{self.peek()[1]!r}, which does not fit,")
        return built

    def peek(self) -> tuple[str, str, int]:
        return self.tokens[self.position]

    def next(self) -> tuple[str, str, int]:
        token = self.tokens[self.position]
        if token[0] == "end":
            self.refuse("an end too early")
        self.position += 1
        return token

    def expect(self, sign: str) -> None:
        if self.peek()[1] != sign or self.peek()[0] != "sign":
            self.refuse(f"no {sign!r} where one is needed,")
        self.position += 1

    def expression(
        self, binding: dict[str, int], operand: Callable[[], Piece], least: int = 0
    ) -> Piece:
        """Operands and signs by precedence, every pair in parentheses of its own."""
        self.depth += 1
        if self.depth > _DEEPEST:
            self.refuse("too many levels of parentheses")
        built, size = operand()
        while self.peek()[0] == "sign" and binding.get(self.peek()[1], -1) > least:
            sign = self.next()[1]
            if sign == "**" and binding is _TERMS:
                other, more = self.power()
                size = (size + 1) ** more - 1
            else:
                # Powers of powers are read from the right.
                other, more = self.expression(binding, operand, binding[sign] - (sign == "**"))
                crossed = binding is _TERMS and sign in "*:"
                size = size * more + (size + more) * (sign != ":") if crossed else size + more
            if size > _MOST_TERMS:
                self.refuse(f"more than {_MOST_TERMS} terms")
            built = f"({built} {sign} {other})"
        self.depth -= 1
        return built, size

    def power(self) -> Piece:
        kind, word, _ = self.next()
        if kind != "number" or not word.isdigit() or not 1 <= int(word) <= 6:
            self.refuse("a power of terms that is no whole number from 1 to 6,")
        return str(int(word)), int(word)

    def term(self) -> Piece:
        """A column, 0 or 1, a function, or terms in parentheses."""
        kind, word, place = self.next()
        if kind == "sign" and word == "(":
            piece = self.expression(_TERMS, self.term)
            self.expect(")")
            return piece
        if kind == "sign" and word in "+-" and self.peek()[1] in ("0", "1"):
            return f"{word}{self.next()[1]}", 1
        if kind == "number" and word in ("0", "1"):
            return word, 1
        if kind == "name" and self.peek()[1] == "(":
            return self.function(word, place), 1
        return self.column(kind, word, place), 1

    def column(self, kind: str, word: str, place: int) -> str:
        if kind not in ("name", "quoted") or word == "``":
            self.refuse(f"{word!r}, which is no column,", place)
        name = word.strip("`")
        return self.columns.setdefault(name, f"x{len(self.columns)}")

    def function(self, name: str, place: int) -> str:
        if name not in FUNCTIONS:
            self.refuse(f"the function {name!r}, which is not allowed,", place)
        self.expect("(")
        if name in ("C", "bs", "cr"):
            built = self.column(*self.next())
            while self.peek()[1] == ",":
                self.next()
                built += ", " + (self.contrast() if name == "C" else self.option())
        else:
            built, _ = self.expression(_ARITHMETIC, self.operand)
        self.expect(")")
        return f"{name}({built})"

    def contrast(self) -> str:
        """`Treatment("label")`, the reference level."""
        if self.next()[1] != "Treatment":
            self.refuse('something else than Treatment("level") in C(),')
        self.expect("(")
        if self.peek()[1] == "reference":
            self.next()
            self.expect("=")
        kind, word, _ = self.next()
        if kind not in ("label", "number"):
            self.refuse("a reference level that is neither a label in quotes nor a number,")
        self.expect(")")
        return f"Treatment({word[1:-1]!r})" if kind == "label" else f"Treatment({self.real(word)})"

    def option(self) -> str:
        """`df=4` or `degree=3` of a spline."""
        name = self.next()[1]
        if name not in ("df", "degree"):
            self.refuse(f"the option {name!r}; splines have df and degree,")
        self.expect("=")
        kind, word, _ = self.next()
        if kind != "number" or not word.isdigit() or int(word) > 50:
            self.refuse(f"{name} that is no whole number up to 50,")
        return f"{name}={int(word)}"

    def operand(self) -> Piece:
        """A column, a number, or arithmetic in parentheses."""
        kind, word, place = self.next()
        if kind == "sign" and word == "(":
            built, size = self.expression(_ARITHMETIC, self.operand)
            self.expect(")")
            return f"({built})", size
        if kind == "sign" and word == "-":
            built, size = self.expression(_ARITHMETIC, self.operand, 3)
            return f"(-{built})", size
        if kind == "number":
            return self.real(word), 1
        return self.column(kind, word, place), 1

    def real(self, word: str) -> str:
        """A number, written by `repr`; never a whole one, whose powers have no bound."""
        if not math.isfinite(float(word)):
            self.refuse(f"the number {word}, which is too large,")
        return repr(float(word))
