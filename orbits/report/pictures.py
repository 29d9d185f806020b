"""Pictures as they stand inside a page: SVG as text, PNG as data."""

import base64
import io
import re
from collections.abc import Sequence
from typing import TYPE_CHECKING
from xml.etree import ElementTree

from ..plots.style import styled

if TYPE_CHECKING:
    from matplotlib.figure import Figure

_SVG, _XLINK = "http://www.w3.org/2000/svg", "http://www.w3.org/1999/xlink"


@styled
def inline_svg(drawing: "Figure", name: str, *, titles: Sequence[tuple[str, str]] = ()) -> str:
    """The drawing as an ``<svg>`` element; `name` tells its ids from those of other drawings.

    `titles` holds a key and a text for each of the measured positions of a drawing of the sky, in
    their order: the text appears when the pointer rests on the position, and the key is its
    ``data-night``.
    """
    stream = io.StringIO()
    drawing.savefig(stream, format="svg", metadata={"Date": None})
    ElementTree.register_namespace("", _SVG)
    ElementTree.register_namespace("xlink", _XLINK)
    root = ElementTree.fromstring(stream.getvalue())
    _make_ids_unique(root, name)
    root.set("role", "img")
    root.set("class", "drawing")
    if titles:
        _name_positions(root, name, titles)
    return ElementTree.tostring(root, encoding="unicode")


@styled
def inline_png(drawing: "Figure", *, dpi: int = 130) -> str:
    """The drawing as the address of an ``<img>`` that holds it."""
    stream = io.BytesIO()
    drawing.savefig(stream, format="png", dpi=dpi)
    return "data:image/png;base64," + base64.b64encode(stream.getvalue()).decode("ascii")


def _make_ids_unique(root: ElementTree.Element, name: str) -> None:
    """Put `name` before all ids and before all that refer to them."""
    for element in root.iter():
        for key, value in element.attrib.items():
            if key == "id":
                element.set(key, f"{name}-{value}")
            elif key == f"{{{_XLINK}}}href" and value.startswith("#"):
                element.set(key, f"#{name}-{value[1:]}")
            elif "url(#" in value:
                element.set(key, re.sub(r"url\(#", f"url(#{name}-", value))


def _name_positions(
    root: ElementTree.Element, name: str, titles: Sequence[tuple[str, str]]
) -> None:
    """Give every dot of the measured positions its title and its key."""
    for group in root.iter(f"{{{_SVG}}}g"):
        if group.get("id", "").startswith(f"{name}-positions"):
            dots = list(group.iter(f"{{{_SVG}}}use"))
            for dot, (key, text) in zip(dots, titles, strict=True):
                ElementTree.SubElement(dot, f"{{{_SVG}}}title").text = text
                dot.set("class", "position")
                dot.set("data-night", key)
                dot.set("tabindex", "0")
