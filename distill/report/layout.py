"""The page as a whole: opening, pictures, tables, words, origin; floor 7.

The page asks the network for nothing, runs no script, and reads at phone and desk width, light and dark. It
is built as a tree of elements, so every text from a file is escaped by construction, and it is XML as well.
"""

from __future__ import annotations

import os
import xml.etree.ElementTree as ET
from typing import Any

from distill.files import write_atomic
from distill.report.elements import Child, between, element, number, section, word_list
from distill.report.facts import SHARES, Facts, Figures, gaps_refused
from distill.report.frame import page_text
from distill.report.pictures import front_picture, pictures
from distill.report.tables import origin, tables
from distill.report.theme import one_line, standalone
from distill.report.words import CAUTION, SHARE_NAMES, WORDS
from distill.scorer_inputs import worded, worded_batch

__all__ = ["front_svg", "page", "write_page"]


def page(figures: Figures) -> str:
    """The page of `front.json` as `train` leaves it, of a shipped scorer's sheet, or of a tour's summary.

    The same figures give the same text. Raises InputError where they are none of these, or lack a part.
    """
    with gaps_refused():
        facts = Facts.read(figures)
        body = element(
            "main",
            _opening(facts),
            section("In pictures", element("div", *pictures(facts), class_="pictures")),
            *tables(facts),
            section("What the words mean", word_list((term, [text]) for term, text in WORDS.items())),
            section("Where it comes from", word_list(origin(facts))),
        )
    return page_text(f"{one_line(facts.title)}: what its picks lose and what they cost", body)


def write_page(figures: Figures, path: str | os.PathLike[str]) -> None:
    """Write `page(figures)` to a file."""
    write_atomic(path, page(figures).encode())


def front_svg(figures: Figures) -> str:
    """The front as a picture of its own, light or dark as its reader; takes what `page` takes."""
    with gaps_refused():
        return standalone(front_picture(Facts.read(figures), width=640, height=400))


def _opening(facts: Facts) -> ET.Element:
    """What this is about, how it was judged, the caution, and the figures that matter most."""
    held_out = facts.parts["held_out"]
    judged: list[Child] = [
        "Judged on ", number(held_out["trees"]), " trees that had no part in training, ",
        number(held_out["candidates"]), f" candidates in all, from {facts.data['source']}. ",
        _scored(facts.value),
    ]  # fmt: skip
    sheet = facts.sheet
    learner = [element("p", f"Learner: {sheet['recipe']} ({sheet['chosen']}).")] if sheet is not None else []
    tiles = [element("dl", *_tiles(sheet), class_="tiles")] if sheet is not None else []
    caution = element("p", CAUTION, class_="caution")
    return element(
        "header", element("h1", one_line(facts.title)), *learner, element("p", *judged), caution, *tiles
    )


def _scored(value: Figures) -> str:
    """What the scorers score, in plain words."""
    kind = worded(value["horizon"])
    if value["batch"] is None:
        what = kind.format("rate")
        return f"What is scored is the {what}: the best value a rollout, within the rollouts left."
    what = kind.format("value")
    return f"What is scored is the {what} of {worded_batch(value['batch'])} at a leaf."


def _tiles(sheet: Figures) -> list[ET.Element]:
    accuracy, decision = sheet["accuracy"], sheet["decision"]
    shares = [
        _tile(SHARE_NAMES[key], accuracy[key]["value"], " %", between(accuracy[key]) or "no interval")
        for key in SHARES
    ]
    decides = _tile(
        f"a decision over {decision['leaves']} leaves", decision["scorer"]["p50_us"], " µs", "median"
    )
    faster = [
        _tile(f"faster than exact {name}", times, " times", "medians of the same run")
        for name, times in decision["times_faster"].items()
    ]
    return [*shares, decides, *faster]


def _tile(name: str, value: Any, unit: str, small: str) -> ET.Element:
    large = element("strong", number(value), unit)
    return element(
        "div", element("dt", name), element("dd", large, element("span", small, class_="interval"))
    )
