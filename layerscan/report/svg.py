"""Figures inside a page: only drawing, nothing that runs or fetches, whatever the file held."""

from __future__ import annotations

import re
import xml.etree.ElementTree as ET

from layerscan.errors import InputError
from layerscan.figures.style import prefix_names

SVG, XLINK = "http://www.w3.org/2000/svg", "http://www.w3.org/1999/xlink"
DRAWING = frozenset(
    ("svg", "g", "defs", "path", "use", "text", "tspan", "rect", "image", "clipPath", "pattern", "title", "desc")
)
_DATA_IMAGE = re.compile(r"^data:image/(?:png|jpeg);base64,[A-Za-z0-9+/=\s]*$")
_FETCHES = re.compile(r"url\(\s*['\"]?(?!#)|@import|expression|javascript:|data:text", re.IGNORECASE)
_LIMIT_BYTES = 8_000_000


def inline_svg(text: str, *, prefix: str) -> str:
    """The SVG fit to stand inside a page.

    Parameters
    ----------
    text : str
        SVG with or without XML declaration.
    prefix : str
        Put before every id, so that no two figures of a page share one.

    Returns
    -------
    str
        The same drawing from an allow-list of elements; scripts, event handlers, styles that fetch, foreign content
        and every link but ``#id`` and embedded PNG or JPEG are gone.

    Raises
    ------
    InputError
        It is no SVG, declares entities or is larger than 8 MB.
    """
    if len(text) > _LIMIT_BYTES:
        raise InputError(f"A figure of {len(text) / 1e6:.0f} MB is too large for a page. Give at most 8 MB.")
    start = text.find("<svg")
    if start < 0 or "<!ENTITY" in text:
        raise InputError("A figure is no SVG, or declares entities. Draw it again with layerscan.")
    try:
        root = ET.fromstring(text[start:])
    except ET.ParseError as error:
        raise InputError(f"A figure is no SVG ({error}). Draw it again with layerscan.") from None
    if root.tag != f"{{{SVG}}}svg":
        raise InputError("A figure is no SVG. Draw it again with layerscan.")
    _clean(root)
    ET.register_namespace("", SVG)
    ET.register_namespace("xlink", XLINK)
    clean = ET.tostring(root, encoding="unicode")
    return _prefix_labels(prefix_names(clean, prefix), prefix)


def _clean(node: ET.Element) -> None:
    for child in list(node):
        space, _, name = child.tag.rpartition("}") if isinstance(child.tag, str) else ("", "", "")
        if space != f"{{{SVG}" or name not in DRAWING:
            node.remove(child)
        else:
            _clean(child)
    for key, value in list(node.attrib.items()):
        name = key.rpartition("}")[2].lower()
        link = name in ("href", "src") and not (value.startswith("#") or _DATA_IMAGE.match(value))
        if name.startswith("on") or link or (name not in ("href", "src") and _FETCHES.search(value)):
            del node.attrib[key]


def _prefix_labels(svg: str, prefix: str) -> str:
    return re.sub(
        r'aria-labelledby="([^"]*)"',
        lambda match: f'aria-labelledby="{" ".join(f"{prefix}-{name}" for name in match.group(1).split())}"',
        svg,
        count=1,
    )
