"""Text in figures: harmless, measured, cut to the room it has, in fonts that have its letters."""

from __future__ import annotations

import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from functools import cache
from typing import TYPE_CHECKING, Any

from svyrates.errors import FigureError
from svyrates.words import for_terminal, shorten

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.text import Text

__all__ = ["SMALL", "TEXT", "TITLE", "fitted", "harmless", "plain_settings", "width_of", "write"]

# Sizes in points. Seven is the least that is read without effort on paper.
TITLE, TEXT, SMALL = 9.0, 8.0, 7.0

# It comes with matplotlib, so that a figure measures the same on every machine.
_FONT = "DejaVu Sans"
_LONGEST = 240


@contextmanager
def plain_settings(**settings: Any) -> Iterator[None]:
    """Matplotlib's own defaults, whatever style the user has set, and no word on missing glyphs.

    Raises
    ------
    FigureError
        When matplotlib is not installed.
    """
    try:
        import matplotlib as mpl
    except ImportError as error:
        raise FigureError(
            "Figures need matplotlib, which is not installed. Install it with "
            "pip install 'svyrates[figures]'."
        ) from error
    with mpl.rc_context(), warnings.catch_warnings():
        # A letter that no installed font has is a box in an image; an SVG's reader has more fonts.
        warnings.filterwarnings("ignore", message=r"Glyph \d+ ", category=UserWarning)
        # So that older releases do not speak of scripts that they set letter by letter.
        shaping = "Matplotlib currently does not support"
        warnings.filterwarnings("ignore", message=shaping, category=UserWarning)
        mpl.rcdefaults()
        chosen: Any = settings
        mpl.rcParams.update(chosen)
        yield


def harmless(text: object) -> str:
    """Text of unknown origin for a figure: one line, no control characters, not endless."""
    # The two last places of a plane are no characters, and no XML parser takes them. The sign for
    # a line break is in few fonts.
    plain = "".join("�" if ord(each) & 0xFFFE == 0xFFFE else each for each in for_terminal(text))
    return shorten(" ".join(plain.replace("␤", " ").split()), _LONGEST)


@cache
def width_of(text: str, size: float, bold: bool = False) -> float:
    """Width of one line in points."""
    from matplotlib.font_manager import FontProperties
    from matplotlib.textpath import text_to_path

    font = FontProperties(family=_families(text), size=size, weight="bold" if bold else "normal")
    return float(text_to_path.get_text_width_height_descent(text, font, ismath=False)[0])


def fitted(
    text: object, most: float, size: float = TEXT, *, bold: bool = False, lines: int = 2
) -> list[str]:
    """Break a text into lines of at most `most` points; what is left over ends in an ellipsis."""
    words = harmless(text).split(" ")
    broken = _broken(words, most, size, bold)
    if 1 < len(broken) <= lines:
        # Lines of like length: the narrowest measure that needs no more of them.
        tighter, width = broken, most
        while len(tighter) == len(broken) and width > 0.5 * most:
            broken, width = tighter, width - 4.0
            tighter = _broken(words, width, size, bold)
    if len(broken) > lines:
        broken = [*broken[: lines - 1], " ".join(broken[lines - 1 :])]
    return [_cut(each, most, size, bold) for each in broken]


def _broken(words: list[str], most: float, size: float, bold: bool) -> list[str]:
    """Break between words only; a word that is too long has a line of its own."""
    broken: list[str] = []
    line = ""
    for word in words:
        tried = f"{line} {word}" if line else word
        if line and width_of(tried, size, bold) > most:
            broken.append(line)
            tried = word
        line = tried
    return [*broken, line]


def _cut(line: str, most: float, size: float, bold: bool) -> str:
    if width_of(line, size, bold) <= most:
        return line
    short, long = 0, len(line)
    while long - short > 1:
        middle = (short + long) // 2
        if width_of(line[:middle].rstrip() + "…", size, bold) <= most:
            short = middle
        else:
            long = middle
    return line[:short].rstrip() + "…"


def write(
    ax: Axes, x: float, y: float, text: str, transform: Any, *, size: float = TEXT,
    bold: bool = False, color: str, ha: str = "left", up: float = 0.0, gid: str | None = None,
) -> Text:  # fmt: skip
    """Put a line of text on the axes, never read as mathematics or TeX, never clipped.

    Its small letters are centred at `y`, and `up` points above, so that lines of text beside each
    other stand on the same line.
    """
    from matplotlib.transforms import ScaledTranslation

    lift = ScaledTranslation(0.0, (up - 0.35 * size) / 72, ax.figure.dpi_scale_trans)
    return ax.text(
        x, y, text, transform=transform + lift, fontsize=size, color=color, zorder=4,
        horizontalalignment=ha, verticalalignment="baseline",
        fontweight="bold" if bold else "normal", fontfamily=_families(text), parse_math=False,
        usetex=False, clip_on=False, gid=gid,
    )  # fmt: skip


def _families(text: str) -> list[str]:
    """Our font, and others that are installed for letters that it does not have."""
    return [_FONT] if text.isascii() else [_FONT, *_fallbacks("".join(sorted(set(text))))]


@cache
def _fallbacks(letters: str) -> tuple[str, ...]:
    from matplotlib.font_manager import FontProperties, findfont, fontManager

    missing = _lacking(findfont(FontProperties(family=[_FONT])), letters)
    found: list[str] = []
    regular = (each for each in fontManager.ttflist if each.style == "normal")
    for font in sorted(regular, key=lambda each: ("Sans" not in each.name, each.name, each.fname)):
        # The font of last resort has a box for everything, which is no letter.
        if not missing or font.name in found or font.name.startswith("Last Resort"):
            continue
        left = _lacking(font.fname, missing)
        if left != missing:
            found.append(font.name)
            missing = left
    return tuple(found)


def _lacking(path: str, letters: str) -> str:
    """Letters that a font file does not have; all of them if it cannot be read."""
    from matplotlib.font_manager import get_font

    try:
        font = get_font(path)
    except (OSError, RuntimeError):
        return letters
    return "".join(each for each in letters if not font.get_char_index(ord(each)))
