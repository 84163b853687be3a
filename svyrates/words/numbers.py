"""Numbers as readers expect them.

Rounding is half away from zero on the shortest decimal text of the number, so that 0.125 reads
0.13 and 2.675 reads 2.68: what a reader gets who rounds the printed digits by hand. Rounding
happens only here, on display; data keep every digit.
"""

from __future__ import annotations

import math
from decimal import ROUND_HALF_UP, Context, Decimal
from typing import Any

__all__ = [
    "MISSING",
    "count",
    "fixed",
    "is_missing",
    "p_phrase",
    "p_value",
    "percent",
    "points",
    "rule_or_number",
    "significant",
]

MISSING = "–"
_SMALLEST_P = 0.0001
# Room for every digit that a float can have before the point, and then some after it.
_EXACT = Context(prec=800, rounding=ROUND_HALF_UP)


def is_missing(value: Any) -> bool:
    """Whether a value is None, NaN or a library's own missing value."""
    if value is None:
        return True
    try:
        return bool(value != value)
    except TypeError:
        # pandas.NA refuses to be true or false.
        return True


def _unusual(value: Any) -> str | None:
    if is_missing(value):
        return MISSING
    if math.isinf(value):
        return "∞" if value > 0 else "-∞"
    return None


def _rounded(value: Any, digits: int, *, times: int = 1) -> Decimal:
    exact = Decimal(repr(float(value))) * times
    rounded = exact.quantize(Decimal(1).scaleb(-digits), context=_EXACT)
    return abs(rounded) if rounded == 0 else rounded


def fixed(value: Any, digits: int) -> str:
    """Fixed number of decimals: ``fixed(0.125, 2)`` is ``'0.13'``."""
    return _unusual(value) or f"{_rounded(value, digits):f}"


def significant(value: Any, digits: int) -> str:
    """So many significant digits, without an exponent or idle zeros; whole parts stay whole."""
    unusual = _unusual(value)
    if unusual is not None:
        return unusual
    if value == 0:
        return "0"
    places = max(digits - 1 - math.floor(math.log10(abs(value))), 0)
    text = f"{_rounded(value, places):f}"
    return text.rstrip("0").rstrip(".") if "." in text else text


def rule_or_number(value: str | float) -> str:
    """A rule by its name, or the number that was given instead: ``'domain'``, ``'12.5'``."""
    return value if isinstance(value, str) else significant(value, 4)


def count(value: Any) -> str:
    """A whole number with commas between thousands."""
    return _unusual(value) or f"{_rounded(value, 0):,f}"


def percent(value: Any, digits: int = 1) -> str:
    """A proportion as a percentage: ``percent(0.1234)`` is ``'12.3%'``."""
    unusual = _unusual(value)
    return unusual if unusual is not None else f"{_rounded(value, digits, times=100):f}%"


def points(value: Any, digits: int = 1) -> str:
    """A difference of proportions in percentage points: ``points(0.034)`` is ``'+3.4 points'``."""
    unusual = _unusual(value)
    if unusual is not None:
        return unusual
    rounded = _rounded(value, digits, times=100)
    return f"{rounded:+f} points" if rounded else f"{rounded:f} points"


def p_phrase(value: Any) -> str:
    """A p-value for a sentence: ``'p = 0.0421'`` or ``'p < 0.0001'``."""
    text = p_value(value)
    return f"p {text[0]} {text[1:]}" if text[:1] in "<>" else f"p = {text}"


def p_value(value: Any) -> str:
    """A p-value with four decimals; never zero, never rounded up to one."""
    if is_missing(value):
        return MISSING
    if value < _SMALLEST_P:
        return "<0.0001"
    if 1.0 - _SMALLEST_P < value < 1.0:
        return ">0.9999"
    return fixed(value, 4)
