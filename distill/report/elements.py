"""HTML elements, and figures as text; floor 7.

A page is a tree of elements, so every text from a file is escaped by construction.
"""

from __future__ import annotations

import xml.etree.ElementTree as ET
from collections.abc import Iterable, Mapping, Sequence
from typing import Any, Final

from distill.report.facts import ends, plain
from distill.report.theme import one_line, printable, raised

__all__ = [
    "Child",
    "between",
    "duration",
    "element",
    "estimate",
    "number",
    "section",
    "stated",
    "table",
    "text_of",
    "word_list",
]

Child = str | ET.Element

_NONE: Final = "\u2013"  # stands for a figure that is not defined
# Elements that end a line of the page's source.
_LINES: Final = frozenset(
    ["dd", "div", "dl", "dt", "figcaption", "figure", "h1", "h2", "h3", "head", "header", "main", "meta", "p",
     "section", "style", "table", "tbody", "thead", "title", "tr"]
)  # fmt: skip


def element(tag: str, *children: Child, **attributes: str) -> ET.Element:
    """An HTML element; attribute names lose a last underscore, others become hyphens.

    >>> ET.tostring(element("td", "<b>", data_label="a & b"))
    b'<td data-label="a &amp; b">&lt;b&gt;</td>'
    """
    names = {name: name.removesuffix("_").replace("_", "-") for name in attributes}
    out = ET.Element(tag, {names[name]: printable(value) for name, value in attributes.items()})
    last: ET.Element | None = None
    for child in children:
        if not isinstance(child, str):
            out.append(child)
            last = child
        elif last is None:
            out.text = (out.text or "") + printable(child)
        else:
            last.tail = (last.tail or "") + printable(child)
    if tag in _LINES:
        out.tail = "\n"
    return out


def section(title: str, *children: ET.Element) -> ET.Element:
    """A section with its title."""
    return element("section", element("h2", title), *children)


def table(
    header: Sequence[str], rows: Mapping[str, Sequence[Child]], marks: Mapping[str, str] | None = None
) -> ET.Element:
    """A table whose cells know their column, so that a narrow screen can show its rows as lists.

    rows : name -> cells, one a column of `header`. marks : name -> a remark that stands below the name.
    """

    def named(name: str) -> ET.Element:
        mark = (marks or {}).get(name)
        more = [element("span", mark, class_="mark")] if mark else []
        return element("th", one_line(name) or _NONE, *more, scope="row")

    def cell(name: str, x: Child) -> ET.Element:
        td = element("td", x, data_label=name)
        if "".join(td.itertext()) == _NONE:
            td.set("class", "none")
        return td

    head = element("tr", element("td", "\u00a0"), *(element("th", h, scope="col") for h in header))
    body = (
        element("tr", named(name), *(cell(h, x) for h, x in zip(header, cells, strict=True)))
        for name, cells in rows.items()
    )
    return element("table", element("thead", head), element("tbody", *body))


def word_list(items: Iterable[tuple[str, Sequence[Child]]]) -> ET.Element:
    """Terms, each with what stands beside it."""
    terms = (x for term, texts in items for x in (element("dt", term), element("dd", *texts)))
    return element("dl", *terms, class_="words")


# --- figures as text -------------------------------------------------------------------------------


def text_of(x: float | None) -> str:
    """A figure to three significant digits; whole numbers, and what is 100 to a million, to the last unit.

    >>> [text_of(x) for x in (12345, 1234.5, 12.345, 99.98, 0.00012345, 5.4316e9, None)]
    ['12,345', '1,234', '12.3', '99.98', '1.23 × 10⁻⁴', '5.43 × 10⁹', '–']
    """
    if x is None:
        return _NONE
    if isinstance(x, int) or 100 <= abs(x) < 999999.5:
        return f"{x:,.0f}"
    if x == 0 or 1e-3 <= abs(x) < 100:
        # Nearly 100 % is not 100 %.
        return next(t for digits in range(3, 18) if abs(float(t := f"{x:.{digits}g}")) < 100)
    mantissa, _, power = f"{x:.2e}".partition("e")
    return f"{float(mantissa):g} \u00d7 10{raised(int(power))}"


def number(x: Any) -> ET.Element:
    """A figure as text, with all its digits for machines."""
    return element("span", _NONE) if plain(x) is None else element("data", text_of(x), value=repr(x))


def duration(us: float) -> ET.Element:
    """A time in the unit that suits it, with all its digits in microseconds for machines.

    >>> [duration(us).text for us in (53.47, 6856.8, 14185893.0)]
    ['53.5 µs', '6.86 ms', '14.2 s']
    """
    unit, size = next((u, s) for u, s in (("s", 1e6), ("ms", 1e3), ("µs", 0.0)) if us >= s)
    return element("data", f"{text_of(us / (size or 1))} {unit}", value=repr(us), class_="duration")


def between(e: Mapping[str, Any]) -> str:
    """The ends of an interval; nothing where there is none."""
    _, low, high = ends(e)
    return "" if low is None or high is None else f"{text_of(low)} to {text_of(high)}"


def stated(e: Mapping[str, Any]) -> str:
    """A figure with its interval, on one line."""
    interval = between(e)
    return text_of(ends(e)[0]) + (f" ({interval})" if interval else "")


def estimate(e: Any) -> ET.Element:
    """A figure with its interval below it, where it has one; takes a bare figure too."""
    if not isinstance(e, Mapping):
        return number(e)
    value, low, high = ends(e)
    if value is None or low is None or high is None:
        return number(value)
    return element(
        "span", number(value), element("span", number(low), " to ", number(high), class_="interval")
    )
