"""The frame of a page: head, style, and a figure with its title and caption; floor 7."""

from __future__ import annotations

import xml.etree.ElementTree as ET
from typing import Final

from distill.report.elements import Child, element
from distill.report.theme import THEME_CSS, one_line
from distill.report.words import CAUTION, STYLE

__all__ = ["document", "framed", "opening", "page_text", "tile"]

_NO_REQUESTS: Final = "default-src 'none'; style-src 'unsafe-inline'"
_MORE_STYLE: Final = """
pre{overflow-x:auto;font-size:.8125rem;border:1px solid var(--line);border-radius:.5rem;padding:.75rem 1rem}
.verdict{font-size:1.125rem;font-weight:600}
""".strip()


def document(title: str, *parts: ET.Element) -> str:
    """A page of these parts, in the style of the pages that are read beside others."""
    return page_text(one_line(title), element("main", *parts), style=f"{STYLE}\n{_MORE_STYLE}")


def page_text(title: str, body: ET.Element, *, style: str = STYLE) -> str:
    """A whole page: asks the network for nothing, runs no script, and is XML as well."""
    head = element(
        "head",
        element("meta", charset="utf-8"),
        element("meta", name="viewport", content="width=device-width, initial-scale=1"),
        element("meta", http_equiv="Content-Security-Policy", content=_NO_REQUESTS),
        element("title", title),
        element("style", f"{THEME_CSS}\n{style}"),
    )
    html = element("html", head, element("body", body), lang="en")
    return f"<!DOCTYPE html>\n{ET.tostring(html, encoding='unicode')}\n"


def opening(title: str, *lines: ET.Element, tiles: list[ET.Element]) -> ET.Element:
    """Title, lines, the caution, and the figures that matter most."""
    caution = element("p", CAUTION, class_="caution")
    return element(
        "header", element("h1", one_line(title)), *lines, caution, element("dl", *tiles, class_="tiles")
    )


def tile(name: str, value: Child, unit: str = "", small: str = "") -> ET.Element:
    """One figure that matters."""
    large = element("strong", value, unit)
    more = [element("span", small, class_="interval")] if small else []
    return element("div", element("dt", name), element("dd", large, *more))


def framed(title: str, picture: ET.Element, *caption: Child) -> ET.Element:
    """A picture with its title and caption."""
    return element("figure", element("h3", title), picture, element("figcaption", *caption))
