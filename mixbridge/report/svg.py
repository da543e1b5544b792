"""A drawing as a part of a page: no script, nothing from outside, names that occur once."""

from __future__ import annotations

import re
from collections.abc import Iterable
from html import escape
from xml.etree import ElementTree

from mixbridge.display import visible
from mixbridge.errors import DataError

__all__ = ["inline_svg"]

SCALE = 1.25
"""Drawings are made for paper; a screen is read from farther away."""

_LEFT_OUT = {"script", "foreignObject", "metadata", "style", "iframe", "audio", "video", "a", "title", "desc"}
_EVERYTHING = re.compile(r"\*\s*\{([^{}]*)\}")
_INSIDE = re.compile(r"url\(\s*['\"]?#([^)'\"]+)['\"]?\s*\)")


def inline_svg(svg: str, prefix: str, alternative: str) -> str:
    """Return a drawing as one ``svg`` element for a page.

    Scripts, handlers of events, foreign content and all that refers to another place are left out; identifiers get a
    prefix; a style for everything (``*{...}``) becomes the style of the root, which its parts inherit. The element has
    a width and takes its height from the box of the drawing.

    Parameters
    ----------
    svg : str
        A whole SVG file.
    prefix : str
        Put before each identifier; occurs once in the page.
    alternative : str
        What the drawing shows, in words.

    Returns
    -------
    str

    Raises
    ------
    DataError
        If the text is not SVG.
    """
    # A declaration of the document's type may define entities; drawings need none.
    body = re.sub(r"<!DOCTYPE[^>\[]*(\[[^\]]*\])?[^>]*>", "", svg)
    try:
        root = ElementTree.fromstring(re.sub(r"^\s*<\?xml[^>]*\?>", "", body))
    except ElementTree.ParseError as error:
        raise DataError(f"The picture {prefix!r} is not SVG: {error}.") from error
    if _local(root.tag) != "svg":
        raise DataError(f"The picture {prefix!r} is not SVG: its root is {_local(root.tag)!r}.")
    style = ";".join(
        rule.strip().rstrip(";")
        for part in root.iter()
        if _local(part.tag) == "style"
        for rule in _EVERYTHING.findall(part.text or "")
    )
    style = "" if "url(" in style else style
    box = root.get("viewBox") or f"0 0 {_length(root.get('width'))} {_length(root.get('height'))}"
    width = SCALE * float(_length(root.get("width") or box.split()[2]))
    label = escape(visible(alternative))
    attributes = f' style="{escape(style)}"' if style else ""
    inner = escape((root.text or "").strip(), quote=False) + "".join(_written(part, prefix) for part in root)
    size = f'viewBox="{escape(box)}" width="{width:.0f}pt"'
    return f'<svg {size} role="img" aria-label="{label}"{attributes}>{inner}</svg>'


def _written(part: ElementTree.Element, prefix: str) -> str:
    """Write an element and what follows it, without what has no place in a page."""
    tail = escape(part.tail or "", quote=False)
    name = _local(part.tag)
    if name in _LEFT_OUT or not re.fullmatch(r"[A-Za-z][\w-]*", name):
        return tail
    attributes = "".join(f' {key}="{escape(value)}"' for key, value in _kept(part.items(), prefix))
    inner = escape(part.text or "", quote=False) + "".join(_written(child, prefix) for child in part)
    return f"<{name}{attributes}>{inner}</{name}>{tail}" if inner else f"<{name}{attributes}/>{tail}"


def _kept(attributes: Iterable[tuple[str, str]], prefix: str) -> Iterable[tuple[str, str]]:
    """Yield the attributes that stay, with identifiers made the page's own."""
    for full, value in attributes:
        key = _local(full)
        if key.lower().startswith("on") or not re.fullmatch(r"[A-Za-z][\w-]*", key):
            continue
        if key == "id":
            yield key, f"{prefix}-{value}"
        elif key == "href":
            if value.startswith("#"):
                yield key, f"#{prefix}-{value[1:]}"
            elif value.startswith("data:image/png;base64,"):
                yield key, value
        elif "url(" in value.lower():
            inside = _INSIDE.sub(lambda match: f"url(#{prefix}-{match[1]})", value)
            if inside.lower().count("url(") == len(_INSIDE.findall(value)):
                yield key, inside
        else:
            yield key, value


def _local(name: object) -> str:
    return str(name).rpartition("}")[2]


def _length(text: str | None) -> str:
    found = re.match(r"\d+(\.\d+)?", (text or "").strip())
    return found[0] if found else "300"
