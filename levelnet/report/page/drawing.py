"""Figures as SVG that may stand in the text of a page, several of them together."""

from __future__ import annotations

import re
import xml.etree.ElementTree as ET
from collections.abc import Callable
from typing import TYPE_CHECKING

from .. import style
from .content import Picture

if TYPE_CHECKING:
    from matplotlib.figure import Figure

_SVG, _XLINK = "http://www.w3.org/2000/svg", "http://www.w3.org/1999/xlink"
_REFERENCE = re.compile(r"url\(#([^)]+)\)")
_NARROW_PT = 300.0  # a figure of one column, which a phone shows whole
_LONG_NUMBER = re.compile(r"-?\d+\.\d{3,}")


def inline_svg(
    figure: Figure, name: str, title: str, alternative: str, stacked: bool = False
) -> str:
    """Draw a figure as an ``svg`` element of HTML that has a name and a description.

    Parameters
    ----------
    figure : matplotlib Figure
        Any figure made here.
    name : str
        Unique on the page: it goes before every identifier of the drawing, for two figures that
        stand in one page must not share any.
    title, alternative : str
        What the figure shows, and what somebody learns from it who does not see it.
    stacked : bool
        Whether it stands for another one where the screen is narrow.

    Returns
    -------
    str
        Without metadata, declaration or reference to anything outside; equal figures give equal
        text (with the same matplotlib).
    """
    # The bytes are those of matplotlib, made in this process: nothing foreign is parsed.
    root = ET.fromstring(style.render(figure, "svg"))
    for metadata in root.findall(f"{{{_SVG}}}metadata"):
        root.remove(metadata)
    for element in root.iter():
        _localise(element, f"{name}-")
    labels = (("title", f"{name}-title", title), ("desc", f"{name}-desc", alternative))
    for place, (tag, label, text) in enumerate(labels):
        element = ET.Element(f"{{{_SVG}}}{tag}", {"id": label})
        element.text = text
        root.insert(place, element)
    width, height = (root.attrib.pop(one).removesuffix("pt") for one in ("width", "height"))
    kind = "narrow" if float(width) < _NARROW_PT else "wide"
    root.attrib |= {
        "class": "stacked" if stacked else kind,
        "role": "img",
        "aria-labelledby": f"{name}-title",
        "aria-describedby": f"{name}-desc",
        "style": f"aspect-ratio: {width} / {height}",
    }
    ET.register_namespace("", _SVG)
    ET.register_namespace("xlink", _XLINK)
    return ET.tostring(root, encoding="unicode", short_empty_elements=True)


def picture(make: Callable[[], Figure], name: str, title: str, alternative: str) -> Picture:
    """Draw a figure for a page, once more with its panels stacked if it is wide.

    Parameters
    ----------
    make : callable
        Makes the figure.
    name, title, alternative : str
        Those of :func:`inline_svg`.
    """
    figure = make()
    # Asked for before it is drawn: figures of one column fit onto any screen.
    wide = 72.0 * figure.get_figwidth() >= _NARROW_PT
    drawn = inline_svg(figure, name, title, alternative)
    if wide:
        with style.stacked():
            figure = make()
            style.label_stacked(figure)
        drawn += inline_svg(figure, f"{name}-stacked", title, alternative, stacked=True)
    return Picture(name, title, alternative, drawn)


def _localise(element: ET.Element, prefix: str) -> None:
    """Put `prefix` before each identifier of an element, and shorten its numbers.

    A hundredth of a point is finer than any screen or printer.
    """
    attributes = element.attrib
    for key, value in attributes.items():
        if key == "id":
            attributes[key] = prefix + value
        elif key == f"{{{_XLINK}}}href" and value.startswith("#"):
            attributes[key] = f"#{prefix}{value[1:]}"
        elif "url(#" in value:
            attributes[key] = _REFERENCE.sub(rf"url(#{prefix}\1)", value)
        elif key in {"d", "x", "y"}:
            attributes[key] = _LONG_NUMBER.sub(lambda found: f"{float(found[0]):.2f}", value)
