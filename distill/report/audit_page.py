"""The page of `audit`: verdict, losses beside what was promised, drift; floor 7."""

from __future__ import annotations

import os
import xml.etree.ElementTree as ET
from typing import Any, Final

from distill.files import write_atomic
from distill.report import charts, spreads
from distill.report.elements import (
    between,
    element,
    estimate,
    number,
    section,
    stated,
    table,
    text_of,
    word_list,
)
from distill.report.facts import Figures, ends, gaps_refused, known
from distill.report.frame import document, framed, opening, tile
from distill.report.spreads import Span
from distill.report.theme import svg
from distill.report.words import AUDIT_WORDS, COLUMNS

__all__ = ["audit_page", "write_audit_page"]

_NAMES: Final = {
    "forgone_percent": "forgone share, %",
    "relative_forgone_percent": "relative forgone, %",
    "stop_loss_percent": "stop loss, %",
}


def audit_page(figures: Figures) -> str:
    """The page of what `distill.audit.audit` found; the same figures give the same text."""
    with gaps_refused():
        drift = figures["drift"]
        parts = [
            _opening(figures),
            section("In pictures", element("div", *_pictures(figures), class_="pictures")),
            section("Now and promised", _accuracy(figures), _note(figures)),
            section("Drift by column", _drift(drift), _drift_note(drift)),
            section("What the words mean", word_list((term, [text]) for term, text in AUDIT_WORDS.items())),
            section("Where it comes from", word_list(_origin(figures))),
        ]
        return document(f"{figures['scorer']['name']}: audit", *parts)


def write_audit_page(figures: Figures, path: str | os.PathLike[str]) -> None:
    """Write `audit_page(figures)` to a file."""
    write_atomic(path, audit_page(figures).encode())


def _opening(figures: Figures) -> ET.Element:
    trees = figures["trees"]
    tiles = [
        tile(f"{_NAMES[key].removesuffix(', %')} now", number(j["now"]["value"]), " %", between(j["now"]))
        for key, j in figures["judged"].items()
    ]
    tiles += [
        tile("candidates out of range", number(figures["out_of_range_percent"]), " %"),
        tile("trees worth adding", number(trees["worth adding"]), small=f"of {trees['judged']:,} judged"),
    ]
    verdict = "Worse than promised" if figures["worse"] else "As promised"
    rest = figures["verdict"].partition(": ")[2]
    lines = [element("p", f"{verdict}.", class_="verdict"), element("p", f"{rest[:1].upper()}{rest[1:]}.")]
    return opening(f"{figures['scorer']['name']} on recorded trees", *lines, tiles=tiles)


def _pictures(figures: Figures) -> list[ET.Element]:
    panels, limits = {}, {}
    for key, j in figures["judged"].items():
        rows = []
        for name, role in (("now", "scorer"), ("promised", "peer")):
            rows.append(Span(name, *ends(j[name]), text=stated(j[name]), role=role))
        panels[_NAMES[key]] = rows
        high = ends(j["promised"])[2]
        if high is not None:
            limits[_NAMES[key]] = high + figures["margin"]
    out = [
        framed(
            "Loss now and as promised",
            svg(spreads.spans(panels, limits), "judged", "Losses now beside those of the sheet"),
            "Dots are figures, bars their intervals. Dashed: the promised interval's upper end plus ",
            number(figures["margin"]),
            " points, the margin. The verdict is worse where today's whole interval lies to its right.",
        )
    ]
    columns = figures["drift"]["columns"]
    told = {
        name: (c["now"], c["training"], f"distance {text_of(round(c['distance'], 3))}{' *' * c['drifted']}")
        for name, c in columns.items()
        if "training" in c
    }
    if told:
        out.append(
            framed(
                "Recorded trees and those of training",
                svg(spreads.quantile_bars(told), "drift", "Quantiles of recorded trees and of training"),
                "Upper bar: recorded; lower bar, the other colour: training. Dot: median; thick: middle "
                "half; thin: nine of ten. A star marks a distance that chance alone hardly gives.",
            )
        )
    pairs = figures["pairs"]
    picture = charts.pairs(
        [known(v) for v in pairs["exact"]], [known(v) for v in pairs["predicted"]], known(pairs["least"])
    )
    out.append(
        framed(
            "Values, exact and by the scorer",
            svg(picture, "pairs", "Exact values against the scorer's"),
            "Each dot is one candidate of a recorded tree, as a share of the tree's scale; on the line, both "
            "are equal.",
        )
    )
    return out


def _accuracy(figures: Figures) -> ET.Element:
    keys = [key for key in COLUMNS if key in figures["now"] or key in figures["promised"]]
    rows = {
        name: [estimate(m.get(key)) for key in keys]
        for name, m in (("now", figures["now"]), ("promised", figures["promised"]))
    }
    marks = {"now": "worse" if figures["worse"] else ""}
    return table([COLUMNS[key] for key in keys], rows, marks)


def _note(figures: Figures) -> ET.Element:
    level = figures["now"]["interval_level"]
    text = f"Below a figure, its {100 * level:g} % bootstrap interval, by decision."
    more: list[Any] = []
    bound = figures["bound"]
    if bound is not None and bound["held_percent"] is not None:
        more = [
            " The exact value lay at or below the file's upper bound for ",
            number(bound["held_percent"]),
            " % of candidates in range.",
        ]
    if figures["label_error_percent"] is not None:
        more += [
            " Exact values are known to ",
            number(figures["label_error_percent"]),
            " % of the best ones.",
        ]
    return element("p", text, *more, class_="note")


def _drift(drift: Figures) -> ET.Element:
    rows, marks = {}, {}
    for name, c in drift["columns"].items():
        middle = drift["at"].index(0.5)
        training = c["training"][middle] if c.get("training") else None
        rows[name] = [number(c["now"][middle]), number(training), number(c.get("distance")), c["meaning"]]
        marks[name] = "drifted" if c.get("drifted") else ""
    return table(("median now", "median in training", "distance", "what it is"), rows, marks)


def _drift_note(drift: Figures) -> ET.Element:
    if drift["reference"] is None:
        text = "The family of training is not at hand, so there is nothing to compare with."
        return element("p", text, class_="note")
    return element(
        "p",
        f"Training is stood for by trees drawn from its family, {drift['reference']}. A distance above ",
        number(drift["chance"]),
        " would come by chance once in a hundred.",
        class_="note",
    )


def _known(trees: Figures) -> list[Any]:
    known = trees.get("in the dataset already")
    if known is not None:
        return [" trees, beside ", number(known), " that the dataset of training holds already"]
    return [" trees; whether training had some of them is not told, as its dataset was not given"]


def _origin(figures: Figures) -> list[tuple[str, list[Any]]]:
    scorer, trees = figures["scorer"], figures["trees"]
    out: list[tuple[str, list[Any]]] = [
        ("scorer", [f"{scorer['name']}, {scorer['recipe']}, SHA-256 {scorer['sha256']}"]),
        ("it reads", [scorer["input"]]),
        ("traces", [", ".join(figures["traces"])]),
        ("recorded trees", [number(trees["recorded"])]),
        ("sampled", [number(trees["sampled"]), f", seed {figures['seed']}"]),
        ("worth adding", [number(trees["worth adding"]), *_known(trees)]),
        ("judged", [number(trees["judged"]), " trees of ", number(trees["decisions"]), " decisions"]),
    ]
    return out + [(f"aside: {reason}", [number(n), " trees"]) for reason, n in trees["aside"].items()]
