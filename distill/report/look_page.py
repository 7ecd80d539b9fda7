"""The page of `look`: what is in a dataset; floor 7."""

from __future__ import annotations

import os
import xml.etree.ElementTree as ET
from collections.abc import Iterator
from typing import Any

from distill.files import write_atomic
from distill.report import spreads
from distill.report.elements import element, number, section, table, word_list
from distill.report.facts import Figures, gaps_refused
from distill.report.frame import document, framed, opening, tile
from distill.report.theme import svg
from distill.report.words import LOOK_WORDS

__all__ = ["look_page", "write_look_page"]


def look_page(figures: Figures) -> str:
    """The page of what `distill.look.look` found; the same figures give the same text."""
    with gaps_refused():
        slices = [section(f"By {name}", _slices(rows)) for name, rows in figures["slices"].items()]
        return document(
            f"{figures['name']}: what is in it",
            _opening(figures),
            section("In pictures", element("div", *_pictures(figures), class_="pictures")),
            section("Labels and error bounds", _quantiles(figures)),
            *slices,
            section("What the words mean", word_list((term, [text]) for term, text in LOOK_WORDS.items())),
            section("What it is made of", word_list(_origin(figures))),
        )


def write_look_page(figures: Figures, path: str | os.PathLike[str]) -> None:
    """Write `look_page(figures)` to a file."""
    write_atomic(path, look_page(figures).encode())


def _opening(figures: Figures) -> ET.Element:
    state = "" if figures["complete"] else " It is unfinished: run generate again."
    said = f"A labelled dataset from {figures['source'].get('name')}.{state}"
    tiles = [
        tile("trees", number(figures["trees"])),
        tile("of them recorded", number(figures["recorded"]), small="the rest drawn from a family"),
        tile("candidates", number(figures["candidates"])),
        tile("trees aside", number(figures["aside"])),
        tile("labels that are 0", number(figures["labels_zero"])),
        tile("repeated trees", number(figures["duplicate_trees"])),
    ]
    return opening(figures["name"], element("p", said), tiles=tiles)


def _pictures(figures: Figures) -> Iterator[ET.Element]:
    for key, title, role, caption in (
        ("label_histogram", "Labels", "scorer", "Candidates by label over their tree's scale."),
        ("error_histogram", "Error bounds of labels", "exact", "Candidates by error bound over the scale."),
    ):
        h = figures[key]
        picture = spreads.histogram(h["edges"], h["counts"], x_label="share of the tree's scale", role=role)
        yield framed(
            title, svg(picture, key, title), caption, " Left out: ", number(h["zero"]), " that are 0."
        )


def _quantiles(figures: Figures) -> ET.Element:
    shown = {
        "label, share of scale": figures["label_of_scale"],
        "error bound, share of scale": figures["error_of_scale"],
        "error bound, share of label": figures["error_of_label"],
    }
    known = {name: q for name, q in shown.items() if q}
    at = next((list(q) for q in known.values()), [])
    names = {"0": "least", "0.5": "median", "1": "largest"}
    rows = {
        names.get(p, f"{100 * float(p):g} % lie below"): [number(q[p]) for q in known.values()] for p in at
    }
    return table(list(known), rows)


def _slices(rows: Any) -> ET.Element:
    header = ("trees", "candidates", "best label over scale, median", "error over best label, largest")
    keys = ("trees", "candidates", "best_label_of_scale", "error_of_best")
    return table(header, {r["slice"]: [number(r[k]) for k in keys] for r in rows})


def _origin(figures: Figures) -> Iterator[tuple[str, list[Any]]]:
    source = figures["source"]
    yield "source", [f"{source.get('kind')} {source.get('name')}, SHA-256 {source.get('sha256')}"]
    yield "asked", [", ".join(f"{k}: {v}" for k, v in figures["asked"].items())]
    yield "files", [number(figures["shards"]), " shards, ", number(figures["bytes"]), " bytes"]
    for name, n in figures["methods"].items():
        yield f"method: {name}", [number(n), " trees"]
    for name, n in figures["sources"].items():
        yield f"from: {name}", [number(n), " trees"]
    for reason, n in figures["aside_reasons"].items():
        yield f"aside: {reason}", [number(n), " trees"]
    if figures["weights"]:
        w = figures["weights"]
        yield "weights", [number(w["smallest"]), " to ", number(w["largest"]), "; worth ",
                          number(w["effective_trees"]), " trees of equal weight"]  # fmt: skip
