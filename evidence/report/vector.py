"""A picture's SVG made ready to stand inside a page, or alone with a title."""

from __future__ import annotations

import re
from xml.etree import ElementTree

from evidence.report.figures.canvas import BLUE, FAINT, INK

__all__ = ["inline_svg", "titled_svg"]

_SVG = "http://www.w3.org/2000/svg"
_LINK = "http://www.w3.org/1999/xlink"
_HEAD = re.compile(r"^.*?(?=<svg\b)", re.DOTALL)
_NUMBER = re.compile(r"-?\d+\.\d{3,}")
_POINTER = re.compile(r"url\(#")
# colours that the page sets by itself on dark paper
_NAMED = {INK: "currentColor", FAINT: f"var(--faint, {FAINT})", BLUE: f"var(--blue, {BLUE})"}
_PATHS = ("d", "points", "transform", "x", "y", "width", "height")


def inline_svg(svg: str, name: str, title: str, description: str) -> str:
    """Return matplotlib's SVG for the inside of a page.

    Its identifiers get a prefix, so that pictures do not share any; ink becomes the colour of
    the page's text; numbers are rounded to hundredths of a point; it is named and described for
    those who cannot see it.

    Parameters
    ----------
    svg : str
        As :func:`.canvas.to_svg` gives it.
    name : str
        Prefix of the identifiers: letters, digits and hyphens.
    title, description : str
        Words; they are escaped here.
    """
    root = _read(svg)
    for parent in list(root.iter()):
        for child in list(parent):
            if child.tag in (f"{{{_SVG}}}metadata", f"{{{_SVG}}}style"):
                parent.remove(child)
    for element in root.iter():
        _adapt(element, name)
    for key in ("width", "height", "version"):
        root.attrib.pop(key, None)
    _describe(root, name, title, description)
    return _written(root)


def titled_svg(svg: str, title: str, description: str) -> str:
    """Return matplotlib's SVG as a file of its own, with a title and a description."""
    root = _read(svg)
    _describe(root, "picture", title, description)
    return f'<?xml version="1.0" encoding="utf-8"?>\n{_written(root)}\n'


def _read(svg: str) -> ElementTree.Element:
    # the document type points to a place in the net, and nothing here may
    return ElementTree.fromstring(_HEAD.sub("", svg, count=1))


def _adapt(element: ElementTree.Element, name: str) -> None:
    for key, value in list(element.attrib.items()):
        if key == "id":
            value = f"{name}-{value}"
        elif key == f"{{{_LINK}}}href" and value.startswith("#"):
            value = f"#{name}-{value[1:]}"
        elif key in ("style", "clip-path", "fill", "stroke"):
            value = _POINTER.sub(f"url(#{name}-", value)
            for colour, named in _NAMED.items():
                value = value.replace(colour, named)
        elif key in _PATHS:
            value = _NUMBER.sub(lambda match: f"{float(match.group()):.2f}", value)
        element.set(key, value)


def _describe(root: ElementTree.Element, name: str, title: str, description: str) -> None:
    for place, (tag, words) in enumerate((("title", title), ("desc", description))):
        element = ElementTree.Element(f"{{{_SVG}}}{tag}", {"id": f"{name}-{tag}"})
        element.text = words
        root.insert(place, element)
    root.set("role", "img")
    root.set("aria-labelledby", f"{name}-title {name}-desc")


def _written(root: ElementTree.Element) -> str:
    ElementTree.register_namespace("", _SVG)
    ElementTree.register_namespace("xlink", _LINK)
    return ElementTree.tostring(root, encoding="unicode", short_empty_elements=True)
