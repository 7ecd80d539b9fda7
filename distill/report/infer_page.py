"""The page of `infer`: what the traces say, what does not fit, and drawn trees beside them; floor 7."""

from __future__ import annotations

import os
import xml.etree.ElementTree as ET
from typing import Any, Final

from distill.files import write_atomic
from distill.report import spreads
from distill.report.elements import element, estimate, number, section, table, text_of, word_list
from distill.report.facts import Figures, gaps_refused
from distill.report.frame import document, framed, opening, tile
from distill.report.theme import svg
from distill.report.words import INFER_WORDS
from distill.tree_columns import COLUMNS

__all__ = ["infer_page", "write_infer_page"]

_BELIEFS: Final = {"gaussian": "Gaussian", "win_loss": "win/loss"}
_VERDICTS: Final = {"contradicts": "does not fit", "untold": "cannot be told", "fits": "fits"}


def infer_page(figures: Figures) -> str:
    """The page of what `distill.infer.infer` found; the same figures give the same text."""
    with gaps_refused():
        return document(
            f"{figures['name']}: a family from recorded trees",
            _opening(figures),
            section("What fits, and what does not", _findings(figures)),
            section("In pictures", element("div", *_pictures(figures), class_="pictures")),
            section("What the columns are", _columns(figures)),
            section("What the traces say", _parameters(figures), _note(figures)),
            section("What the words mean", word_list((term, [text]) for term, text in INFER_WORDS.items())),
            section("The family file", element("pre", figures["family"])),
        )


def write_infer_page(figures: Figures, path: str | os.PathLike[str]) -> None:
    """Write `infer_page(figures)` to a file."""
    write_atomic(path, infer_page(figures).encode())


def _opening(figures: Figures) -> ET.Element:
    bad = [f for f in figures["findings"] if f["verdict"] == "contradicts"]
    columns = figures["compared"]["columns"]
    far = max(columns, key=lambda name: columns[name]["distance"])
    tiles = [
        tile("recorded trees", number(figures["trees"])),
        tile("decisions", number(figures["decisions"])),
        tile("findings that do not fit", number(len(bad))),
        tile("largest distance of a column", number(columns[far]["distance"]), small=far),
    ]
    said = f"A {_BELIEFS[figures['belief']]} family inferred from {figures['source']}."
    return opening(figures["name"], element("p", said), tiles=tiles)


def _findings(figures: Figures) -> ET.Element:
    order = list(_VERDICTS)
    found = sorted(figures["findings"], key=lambda f: order.index(f["verdict"]))
    return word_list(
        (f["about"], [element("span", _VERDICTS[f["verdict"]], class_="mark"), f["words"]]) for f in found
    )


def _pictures(figures: Figures) -> list[ET.Element]:
    columns = figures["compared"]["columns"]
    panels = {
        name: (c["traces"], c["drawn"], f"distance {text_of(round(c['distance'], 3))}")
        for name, c in columns.items()
    }
    out = [
        framed(
            "Recorded trees and trees drawn from the family",
            svg(spreads.quantile_bars(panels), "compared", "Quantiles of recorded and of drawn trees"),
            "Upper bar: recorded; lower bar, the other colour: ",
            number(figures["compared"]["trees drawn"]),
            " drawn trees. Dot: median; thick: middle half; thin: nine of ten. Distance is the largest "
            "difference of the two distribution functions, 0 alike, 1 apart.",
        )
    ]
    for f in figures["findings"]:
        if f["sample"]:
            picture = svg(spreads.normal_plot(f["sample"]), "moves", "Moves of means against a Gaussian")
            caption = (
                "Each dot is one move of a leaf's mean between two records, in units of the sd that the "
                "beliefs foresee. Gaussian rollouts and sound beliefs put the dots on the line."
            )
            out.append(framed("Are rollouts Gaussian?", picture, caption))
    return out


def _columns(figures: Figures) -> ET.Element:
    return word_list((name, [COLUMNS.get(name, "")]) for name in figures["compared"]["columns"])


def _parameters(figures: Figures) -> ET.Element:
    rows: dict[str, list[Any]] = {name: [estimate(e), e["unit"]] for name, e in figures["parameters"].items()}
    return table((f"estimate, {100 * figures['level']:g} % interval", "unit"), rows)


def _note(figures: Figures) -> ET.Element:
    base = "span" if figures["belief"] == "win_loss" else "prior sd"
    text = (
        f"The typical {base} is in the unit of value that the records use; what is stated in typical {base}s "
        "is a multiple of it, as in the family file. Sd of ln: standard deviation of the logarithm. "
        "Posterior means are corrected for what rollouts moved, by an identity that holds whatever rule "
        "chose the leaves. Brackets in findings are 99 % intervals."
    )
    return element("p", text, class_="note")
