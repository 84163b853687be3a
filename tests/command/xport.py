"""A tiny writer of XPORT files (version 5), from the published record layout (TS-140)."""

from __future__ import annotations

import math
import struct

__all__ = ["xport"]


def _ibm(value: float | None) -> bytes:
    """A double in the format of the IBM mainframes; None is the missing value."""
    if value is None:
        return b"." + bytes(7)
    if value == 0:
        return bytes(8)
    fraction, exponent = math.frexp(abs(value))
    while exponent % 4:
        fraction, exponent = fraction / 2, exponent + 1
    head = (0x80 if value < 0 else 0) | (exponent // 4 + 64)
    return bytes([head]) + int(fraction * 2**56).to_bytes(7, "big")


def _padded(content: bytes) -> bytes:
    return content + b" " * (-len(content) % 80)


def xport(columns: dict[str, list[float | None] | list[str]]) -> bytes:
    """Bytes of a file with one data set."""
    width = dict.fromkeys(columns, 8)
    for name, values in columns.items():
        if isinstance(values[0], str):
            width[name] = max(len(str(value)) for value in values)
    head = b"HEADER RECORD*******%-8sHEADER RECORD!!!!!!!%s"
    zeros = b"0" * 30
    stamp = b"01JAN24:00:00:00"
    out = head % (b"LIBRARY", zeros) + b"  "
    out += b"%-8s%-8s%-8s%-8s%-8s%24s" % (b"SAS", b"SAS", b"SASLIB", b"9.4", b"X", b"") + stamp
    out += _padded(stamp)
    out += head % (b"MEMBER", b"0" * 17 + b"1600000000140") + b"  "
    out += head % (b"DSCRPTR", zeros) + b"  "
    out += b"%-8s%-8s%-8s%-8s%-8s%24s" % (b"SAS", b"TEST", b"SASDATA", b"9.4", b"X", b"") + stamp
    out += _padded(stamp)
    out += head % (b"NAMESTR", b"000000%04d00000000000000000000" % len(columns)) + b"  "
    described = b""
    place = 0
    for number, (name, values) in enumerate(columns.items(), start=1):
        kind = 2 if isinstance(values[0], str) else 1
        described += struct.pack(
            ">hhhh8s40s8shhh2s8shhl52s", kind, 0, width[name], number, name.encode().ljust(8),
            b" " * 40, b" " * 8, 0, 0, 0, b"  ", b" " * 8, 0, 0, place, b" " * 52,
        )  # fmt: skip
        place += width[name]
    out += _padded(described)
    out += head % (b"OBS", zeros) + b"  "
    body = b""
    for row in zip(*columns.values(), strict=True):
        for name, value in zip(columns, row, strict=True):
            body += value.encode().ljust(width[name]) if isinstance(value, str) else _ibm(value)
    return out + _padded(body)
