"""Figures as SVG: the same bytes every time, safe inside a page."""

from __future__ import annotations

import io
import re
import xml.etree.ElementTree as ET
from typing import TYPE_CHECKING, Any

from svyrates.errors import FigureError
from svyrates.publish.lettering import harmless, plain_settings

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["svg_of"]

_SVG = "http://www.w3.org/2000/svg"
_LINK = "http://www.w3.org/1999/xlink"
# Narrower than the font that was measured with, so that nothing overlaps where they are used.
_FONTS = "Arial, 'Liberation Sans', Helvetica"


def svg_of(figure: Axes | Figure, *, prefix: str = "figure", title: str | None = None) -> str:
    """Write a figure as one `<svg>` element for a web page, or for a file of its own.

    Parameters
    ----------
    figure : matplotlib Figure or Axes
        Of the axes, the whole figure.
    prefix : str
        Begins every id in the figure. Figures on one page need different ones. A letter, then
        letters, digits, hyphens and underscores.
    title : str, optional
        Read out by screen readers, shown as a tooltip. By default the figure's own title.

    Returns
    -------
    str
        No XML declaration, comments, style sheet, script or date; with ``role="img"`` and a
        ``<title>``. The same figure gives the same bytes with the same version of matplotlib.

    Raises
    ------
    FigureError
        Without matplotlib, or for something else than a figure.

    Notes
    -----
    Text stays text: it can be searched, selected and translated, the reader's fonts supply scripts
    that no font here has, and right-to-left text is set by the browser. Lines end at the places
    that were measured here, with a wider font than most.

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.estimate_rates(design, outcome="damp", by="dwelling_type")
    >>> sr.svg_of(sr.draw_rates(rates), prefix="damp")[:4]
    '<svg'

    The string can be put into a page, or written to a file whose name ends in ``.svg``.
    """
    if not re.fullmatch(r"[A-Za-z][A-Za-z0-9_-]*", prefix):
        raise FigureError(
            "`prefix` must be a letter, then letters, digits, hyphens or underscores; got "
            f"{prefix!r}."
        )
    settings = {"svg.fonttype": "none", "svg.hashsalt": "rates", "svg.image_inline": True}
    with plain_settings(**settings):
        whole = _figure_of(figure)
        drawn = io.BytesIO()
        whole.savefig(drawn, format="svg", metadata={"Date": None})
        said = title if title is not None else _title_of(whole)
    try:
        root = ET.fromstring(drawn.getvalue())  # noqa: S314 - matplotlib has just written it
    except ET.ParseError as error:
        raise FigureError(
            f"A text in the figure holds a character that SVG does not allow ({error})."
        ) from error
    return _finished(root, prefix, harmless(said))


def _figure_of(figure: Any) -> Figure:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    found = figure.figure if isinstance(figure, Axes) else figure
    while found is not None and not isinstance(found, Figure):
        found = getattr(found, "figure", None)
    if found is None:
        raise FigureError(
            "svg_of takes a matplotlib Figure, or Axes from one of the draw functions; got "
            f"{type(figure).__name__}."
        )
    return found


def _title_of(figure: Figure) -> str:
    titles = [str(ax.get_label()) or ax.get_title() for ax in figure.axes]
    return "; ".join(filter(None, titles)) or "Figure"


def _finished(root: ET.Element, prefix: str, title: str) -> str:
    """Ids that clash with no other figure's, a title, and no style that reaches the page."""
    for parent in list(root.iter()):
        for child in list(parent):
            if child.tag in (f"{{{_SVG}}}metadata", f"{{{_SVG}}}style"):
                parent.remove(child)
    _rename(root, prefix)
    heading = ET.Element(f"{{{_SVG}}}title", {"id": f"{prefix}-title"})
    heading.text = title
    heading.tail = "\n"
    root.insert(0, heading)
    # What the style sheet said of every element of the page, now said of this one.
    root.set("style", "stroke-linejoin: round; stroke-linecap: butt")
    root.set("role", "img")
    root.set("aria-labelledby", f"{prefix}-title")
    return _written(root)


def _rename(root: ET.Element, prefix: str) -> None:
    """Begin every id, and every reference to one, with the prefix; name fonts to read with."""
    known: dict[str, str] = {}
    for element in root.iter():
        if "id" in element.attrib:
            old = element.attrib["id"]
            known[old] = f"{prefix}-{re.sub(r'[^A-Za-z0-9_-]', '-', old)}"
            element.set("id", known[old])
    for element in root.iter():
        link = element.attrib.pop(f"{{{_LINK}}}href", None)
        if link is not None:
            element.set("href", f"#{known[link[1:]]}" if link[1:] in known else link)
        for name, value in element.attrib.items():
            if "url(#" in value:
                element.set(name, _renamed(value, known))
        if "style" in element.attrib:
            element.set("style", _with_fonts(element.attrib["style"]))


def _renamed(value: str, known: dict[str, str]) -> str:
    return re.sub(r"url\(#([^)]+)\)", lambda found: f"url(#{known[found[1]]})", value)


def _with_fonts(style: str) -> str:
    return re.sub(r"('DejaVu Sans'[^;]*)", rf"{_FONTS}, \1, sans-serif", style)


def _written(root: ET.Element) -> str:
    """Plain tags without a namespace prefix, as HTML wants them."""
    for element in root.iter():
        element.tag = element.tag.removeprefix(f"{{{_SVG}}}")
    root.set("xmlns", _SVG)
    return ET.tostring(root, encoding="unicode") + "\n"
