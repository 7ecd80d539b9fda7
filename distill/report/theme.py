"""Light and dark: one set of colours for pages and pictures, and figures as SVG that wear it; floor 7.

matplotlib draws with one marker colour for each role; `svg` puts a CSS variable in its place, keeps text as
text and drops all that varies from run to run. So the same figures give the same bytes.
"""

from __future__ import annotations

import io
import re
import warnings
import xml.etree.ElementTree as ET
from collections.abc import Callable
from typing import Any, Final, ParamSpec, TypeVar

import matplotlib.style
from matplotlib.figure import Figure

__all__ = ["DRAWN", "SMALL", "THEME_CSS", "one_line", "printable", "raised", "standalone", "styled", "svg"]

# Role -> colour while drawing, on light paper, on dark paper. All but the lines have contrast above 4.5, and
# those of policies are apart for the colour-blind too. What meets in one picture differs in its mark besides.
_THEME: Final = {
    "paper": ("#010101", "#ffffff", "#14181d"),
    "ink": ("#020202", "#1c2126", "#e4e8ec"),
    "quiet": ("#030303", "#59626b", "#9aa5b0"),
    "line": ("#040404", "#dde2e7", "#2d343c"),
    "scorer": ("#050505", "#0b63a5", "#62b2f5"),
    "peer": ("#060606", "#a4510c", "#ee9f55"),
    "exact": ("#070707", "#2c7a43", "#6cc788"),
    "uct": ("#080808", "#880ce9", "#9d6bff"),
}
DRAWN: Final = {role: colours[0] for role, colours in _THEME.items()}
_FONT: Final = "system-ui, -apple-system, 'Segoe UI', Roboto, 'Helvetica Neue', Arial, sans-serif"
_TEXT, SMALL = 12.0, 11.0  # units

_STYLE: Final[dict[str, Any]] = {
    "svg.hashsalt": "voc-distill",
    "svg.fonttype": "none",
    "text.parse_math": False,  # names come from files: a dollar sign is a dollar sign
    "font.family": "DejaVu Sans",  # comes with matplotlib and is wide: what fits here fits in other fonts
    "font.size": _TEXT,
    "text.color": DRAWN["ink"],
    "axes.labelcolor": DRAWN["quiet"],
    "axes.labelsize": SMALL,
    "axes.edgecolor": DRAWN["line"],
    "axes.axisbelow": True,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.titlesize": _TEXT,
    "axes.titleweight": "bold",
    "axes.titlelocation": "left",
    "xtick.color": DRAWN["line"],
    "xtick.labelcolor": DRAWN["quiet"],
    "xtick.labelsize": SMALL,
    "xtick.major.pad": 6.0,  # clear of the lowest text beside the other axis
    "ytick.color": DRAWN["line"],
    "ytick.labelcolor": DRAWN["quiet"],
    "ytick.labelsize": SMALL,
    "grid.color": DRAWN["line"],
    "figure.constrained_layout.use": True,
    "figure.constrained_layout.h_pad": 6 / 72,
}


def _variables(column: int) -> str:
    return "".join(f"--{role}:{colours[column]};" for role, colours in _THEME.items())


THEME_CSS: Final = (
    f":root{{color-scheme:light dark;{_variables(1)}}}\n"
    f"@media (prefers-color-scheme:dark){{:root{{{_variables(2)}}}}}"
)

_P = ParamSpec("_P")
_T = TypeVar("_T")


def styled(draw: Callable[_P, _T]) -> Callable[_P, _T]:
    """Draw in our style whatever the user's own matplotlib settings are, silent on glyphs a font lacks."""

    def in_style(*args: _P.args, **kwargs: _P.kwargs) -> _T:
        with matplotlib.style.context(["default", _STYLE]), warnings.catch_warnings():
            warnings.filterwarnings("ignore", "Glyph .* missing from", UserWarning)
            return draw(*args, **kwargs)

    in_style.__doc__, in_style.__name__ = draw.__doc__, draw.__name__
    return in_style


# --- SVG -------------------------------------------------------------------------------------------

_MARGIN = 12.0  # units around a picture that stands alone
_SVG = "{http://www.w3.org/2000/svg}"
_HREF = "{http://www.w3.org/1999/xlink}href"


@styled
def svg(figure: Figure, name: str, meaning: str) -> ET.Element:
    """A figure as an SVG element without namespace, for a page that sets THEME_CSS.

    name : unique in the page, begins its ids. meaning : what the picture shows, for those who don't see it.
    """
    raw = io.BytesIO()
    figure.savefig(raw, format="svg", metadata=dict.fromkeys(("Date", "Creator", "Format", "Type")))
    root = ET.fromstring(raw.getvalue())
    used = {node.get(_HREF, "")[1:] for node in root.iter()} | set(_CLIP.findall(raw.getvalue().decode()))
    for node in root.iter():
        node.tag = node.tag.removeprefix(_SVG)
        node.text = node.text if node.text and node.text.strip() else None
        node.tail = None
        _tidy(node, name, used)
    for defs in root.findall("defs"):
        for style in defs.findall("style"):
            defs.remove(style)  # a rule for `*` would reach beyond the picture
    box = root.get("viewBox", "")
    root.attrib.clear()
    root.attrib.update(
        {"viewBox": box, "role": "img", "aria-label": one_line(meaning), "style": "stroke-linejoin:round"}
    )
    return root


def standalone(picture: ET.Element) -> str:
    """What `svg` returns as the text of a file of its own: with its colours, size and paper.

    It has its own paper, so that it can be read where the page's theme is not the reader's.
    """
    width, height = (float(x) + 2 * _MARGIN for x in picture.get("viewBox", "").split()[2:])
    size = {"width": f"{width:g}", "height": f"{height:g}"}
    corner = f"{-_MARGIN:g}"
    box = f"{corner} {corner} {width:g} {height:g}"
    file = ET.Element("svg", {"xmlns": _SVG[1:-1], **size, **picture.attrib, "viewBox": box})
    ET.SubElement(file, "style").text = THEME_CSS
    ET.SubElement(file, "rect", {"x": corner, "y": corner, **size, "rx": "8", "style": "fill:var(--paper)"})
    file.extend(picture)
    return ET.tostring(file, encoding="unicode") + "\n"


_CLIP = re.compile(r"url\(#([^)]*)\)")
_DECIMALS = re.compile(r"(\.\d\d)\d+")
_ROLE_OF = {drawn: f"var(--{role})" for role, drawn in DRAWN.items()}
_COLOUR = re.compile("|".join(_ROLE_OF))


def _tidy(node: ET.Element, name: str, used: set[str]) -> None:
    """Theme the colours, cut to 0.01 unit, make ids unique in the page, say once what siblings share."""
    for key in ("d", "x", "y", "transform", "width", "height"):
        if key in node.attrib:
            node.set(key, " ".join(_DECIMALS.sub(r"\1", node.attrib[key]).split()))
    if "style" in node.attrib:
        style = _COLOUR.sub(lambda m: _ROLE_OF[m[0]], node.attrib["style"])
        node.set("style", re.sub(r"font-family:[^;]*", f"font-family:{_FONT}", style))
    if _HREF in node.attrib:
        node.set("href", f"#{name}-{node.attrib.pop(_HREF)[1:]}")
    if "clip-path" in node.attrib:
        node.set("clip-path", _CLIP.sub(rf"url(#{name}-\1)", node.attrib["clip-path"]))
    if node.get("id") in used:
        node.set("id", f"{name}-{node.get('id')}")
    else:
        node.attrib.pop("id", None)
    uses = list(node)
    if len(uses) > 1 and all(u.tag == f"{_SVG}use" for u in uses):
        shared = {u.attrib.pop("style") for u in uses}
        assert len(shared) == 1
        node.set("style", _COLOUR.sub(lambda m: _ROLE_OF[m[0]], shared.pop()))


# --- text ---------------------------------------------------------------------------------


def one_line(text: str, longest: int | None = None) -> str:
    """A text from a file as one line of characters that XML can hold, cut to `longest`.

    >>> one_line("a\\x00b\\n  c"), one_line("boosting", 5)
    ('a\ufffdb c', 'boos…')
    """
    line = " ".join(printable(text).split())
    return line if longest is None or len(line) <= longest else line[: longest - 1] + "…"


def printable(text: str) -> str:
    """A text without the characters that XML cannot hold or that would turn the text around them."""
    return _UNPRINTABLE.sub("\ufffd", text)


_UNPRINTABLE = re.compile(
    "[\x00-\x08\x0b\x0c\x0e-\x1f\x7f-\x9f\u202a-\u202e\u2066-\u2069\ud800-\udfff\ufffe\uffff]"
)


def raised(power: int) -> str:
    """A whole number as an exponent.

    >>> "10" + raised(-12)
    '10⁻¹²'
    """
    return str(power).translate(_RAISED)


_RAISED = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
