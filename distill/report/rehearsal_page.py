"""The page of a rehearsal: who decides better at which cost, and every cell; floor 7, no computing."""

from __future__ import annotations

import os
import xml.etree.ElementTree as ET
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import Final

from distill.errors import InputError
from distill.files import write_atomic
from distill.rehearse.against import EXACT, against_sentences
from distill.rehearse.aimed import BEST, FEWEST
from distill.rehearse.left_out import Reason
from distill.report import rehearsal_pictures as pictures
from distill.report.elements import Child, element, estimate, number, section, table, text_of, word_list
from distill.report.facts import Figures, gaps_refused
from distill.report.frame import page_text
from distill.report.stopping_picture import stopping
from distill.report.theme import standalone
from distill.report.words import CAUTION

__all__ = ["rehearsal_page", "rehearsal_pictures", "write_pictures", "write_rehearsal_page"]

_FORMAT: Final = "voc-distill-rehearsal/1"
_NONE: Final = "\u2013"  # stands for a figure that is not there
_AGAINST: Final = {
    "sampling": "better of UCT and Thompson sampling",
    "static": "static closed form",
    "exact": "exact dynamic rate",
}
_TO: Final = ("to the better sampling", "to the closed form", "to the exact rate")
_WORDS: Final = {
    "regret": (
        "How much worse the chosen action is than the best one, in the problem's own unit. Against the exact "
        "optimum, or, for a simulator without a model, against what many rollouts at each leaf of the "
        "searched tree, with luck of their own, tell of its actions."
    ),
    "expected regret": (
        "Regret averaged over all that the rollouts seen leave open. Known where the beliefs are those that "
        "the truth was drawn from; it has the same mean as regret and far less noise, and is compared then."
    ),
    "budget": (
        "A number of rollouts, or a time at a stated cost of a rollout. The clock adds that cost for each "
        "rollout to the time that choosing really took, belief updates included."
    ),
    "ratio": (
        "A policy's mean regret over that of the best policy of the group, on the same decisions; the best "
        "one is picked on these very decisions, which favours it. Below 1 the policy decides better. "
        "Intervals: 95 %, decisions resampled in pairs; none can be told where the rival has no regret "
        f"in over 2.5 % of the resamples. From fewer than {FEWEST} decisions nothing is claimed: such "
        "intervals are too narrow."
    ),
    "best scorer": (
        "For either half of the decisions the scorer, file and use, that did best on the other half: the "
        "choice is not made on the decisions that it is judged by."
    ),
    "late, every, share": (
        "How a scorer is used: the closed form chooses until so many rollouts a leaf are left; before that "
        "every so-manyeth rollout is the scorer's too; no scoring where one takes more than a share of a "
        "rollout's time."
    ),
    "no search": (
        "Acting before the first rollout, on the look-ahead and its prior alone; advised where no policy is "
        "measurably better."
    ),
    "fell back": "Share of a policy's choices that the closed form made in its place.",
}  # fmt: skip


def rehearsal_page(summary: Figures) -> str:
    """The page of a rehearsal's `summary.json`. The same figures give the same text.

    Raises InputError where they are none of a rehearsal, or lack a part.
    """
    if summary.get("format") != _FORMAT:
        raise InputError("report: format", f"must be {_FORMAT!r}", summary.get("format"))
    shown = [_framed(name, picture) for name, picture in rehearsal_pictures(summary).items()]
    with gaps_refused():
        body = element(
            "main",
            _opening(summary),
            section("In pictures", element("div", *shown, class_="pictures")),
            *_tables(summary),
            section("What the words mean", word_list((term, [text]) for term, text in _WORDS.items())),
        )
    return page_text("Rehearsal: who decides better, at which cost", body)


def write_rehearsal_page(summary: Figures, path: str | os.PathLike[str]) -> None:
    """Write `rehearsal_page(summary)` to a file."""
    write_atomic(path, rehearsal_page(summary).encode())


def _opening(summary: Figures) -> ET.Element:
    campaign = summary["campaign"]
    budgets = {row["budget"] for row in summary["rows"]}  # those of the wide problems too
    told: list[Child] = [
        number(len(campaign["problems"])), " problems, ", number(len(budgets)), " budgets, ",
        number(campaign["seeds"]), " decisions a cell, the same for every policy. Baselines tuned on ",
        number(campaign["tuning_seeds"]), " other decisions for each problem and number of rollouts.",
    ]  # fmt: skip
    return element(
        "header",
        element("h1", "Rehearsal: who decides better, at which cost"),
        element("p", *told),
        *(element("p", sentence) for sentence in against_sentences(summary)),
        element("p", CAUTION, class_="caution"),
    )


# --- pictures --------------------------------------------------------------------------------------

_CAPTIONS: Final = {
    "ratios": (
        "The best scorer over the better of UCT and both Thompson samplings",
        "Cells at equal time, with 95 % intervals; left of 1 the scorer decides better. Dashed: 0.85.",
    ),
    "ratios-closed-form": (
        "The best scorer over the static closed form",
        "The same against the cheapest serious rival. Dashed: 0.95.",
    ),
    "costs": (
        "Regret against the cost of a rollout",
        "The more a rollout costs, the less it matters how long a policy thinks about it.",
    ),
    "choosing": (
        "How much of the time goes into choosing",
        "Median of all cells with that cost of a rollout; lines from the least to the most. Dashed: a fifth.",
    ),
    "break-even": (
        "Break-even: what a rollout costs, and who decides best",
        "Regret over that of the best sampling in the same time; problems that have all of a line's points.",
    ),
    "stopping": (
        "What stopping early saves",
        "Share of the rollouts; hollow: more regret, measurably, or too few decisions to tell. Dashed: 30 %.",
    ),
}  # fmt: skip


def rehearsal_pictures(summary: Figures) -> dict[str, ET.Element]:
    """The pictures that the figures allow, by name; as `svg` returns them."""
    with gaps_refused():
        drawn = {
            "ratios": pictures.ratios(summary),
            "ratios-closed-form": pictures.ratios(summary, "static"),
            "costs": pictures.costs(summary),
            "choosing": pictures.choosing(summary),
            "break-even": pictures.break_even(summary),
            "stopping": stopping(summary),
        }
    return {name: picture for name, picture in drawn.items() if picture is not None}


def write_pictures(summary: Figures, folder: str | os.PathLike[str]) -> list[Path]:
    """Each picture as an SVG file of its own, light or dark as its reader; returns the files."""
    written = []
    for name, picture in rehearsal_pictures(summary).items():
        written.append(Path(folder) / f"{name}.svg")
        write_atomic(written[-1], standalone(picture).encode())
    return written


def _framed(name: str, picture: ET.Element) -> ET.Element:
    title, caption = _CAPTIONS[name]
    return element("figure", element("h3", title), picture, element("figcaption", caption))


# --- tables ----------------------------------------------------------------------------------------


def _tables(summary: Figures) -> Iterator[ET.Element]:
    if summary["by_kind"]:
        yield section("Scorer or closed form", _by_kind(summary["by_kind"]))
    yield section("What was aimed at, and reached", _aims(summary["aims"]))
    best = [row for row in summary["rows"] if row["policy"] == BEST]
    if best:
        yield section("Every problem and budget: the best scorer", _best(best, summary))
    if summary["stopping"]:
        yield section("Stopping early", _stopping(summary["stopping"]))
    yield section("Every cell", *_figures(summary["rows"]))
    if summary["left_out"]:
        yield section("Left out", _left_out(summary["left_out"]))


def _by_kind(kinds: Sequence[Figures]) -> ET.Element:
    rows: dict[str, Sequence[Child]] = {
        f"{k['kind']}, {1e6 * k['rollout_seconds']:,.0f} µs a rollout": [
            number(k["static"]["cells"]), number(k.get("decisions")), _ratio(k["static"]),
            _ratio(k["sampling"]), k["use"], k["why"],
        ]
        for k in kinds
    }  # fmt: skip
    head = [
        "cells",
        "decisions each",
        "best scorer to the closed form",
        "to the better sampling",
        "use",
        "why",
    ]
    return _table(head, rows)


def _aims(aims: Mapping[str, Mapping[str, Figures]]) -> ET.Element:
    rows: dict[str, Sequence[Child]] = {
        f"{policy} against the {_AGAINST[group]}": [
            number(c["cells"]),
            f"{c['reached']} at or below {c['at_most']:g}",
            f"{c['beyond']} above {c['never_above']:g}",
            f"{c['better']} below 1, {c['worse']} above",
        ]
        for policy, groups in aims.items()
        for group, c in groups.items()
    }
    head = ["timed cells, rollouts of 100 µs or more", "reached", "missed by much", "whole interval"]
    return _table(head, rows)


def _best(best: Sequence[Figures], summary: Figures) -> ET.Element:
    advice = {(a["problem"], a["budget"]): a["use"] for a in summary["advice"]}
    without = {row["problem"]: row["measured"] for row in summary["unsearched"]}
    rows: dict[str, Sequence[Child]] = {
        f"{r['problem']} {r['budget']}": [
            number(without.get(r["problem"])), number(r["measured"]), *_ratios(r),
            advice.get((r["problem"], r["budget"]), _NONE),
        ]
        for r in best
    }  # fmt: skip
    return _table(["regret without a search", "regret", *_TO, "use here"], rows)


def _stopping(rows: Sequence[Figures]) -> ET.Element:
    cells: dict[str, Sequence[Child]] = {
        f"{s['problem']} {s['budget']} {s['policy']}": [
            f"{text_of(100 * s['saved'])} %", _ratio(s), number(s["lost"]), number(s["price"]),
        ]
        for s in rows
    }  # fmt: skip
    return _table(
        ["rollouts saved", "regret over that of going on", "regret more", "price of a rollout"], cells
    )


def _figures(cells: Sequence[Figures]) -> Iterator[ET.Element]:
    """A table a problem and budget."""
    places: dict[str, dict[str, Sequence[Child]]] = {}
    against: dict[str, str] = {}
    for c in cells:
        regret = {"value": c["measured"], **c["interval"]}
        acted = _two(number(c["regret"]), number(c["regret_by_mean"]), " by mean")
        choosing = _two(_percent(c["choosing_share"]), number(c["choosing_us"]), " µs a rollout")
        rest: list[Child] = [acted, number(c["rollouts"]), choosing, _percent(c["fallback_share"])]
        place = places.setdefault(title := f"{c['problem']}, {c['budget']}", {})
        against[title] = c.get("regret_against", EXACT)
        place[c["policy"]] = [estimate(regret), *_ratios(c), *rest]
    head = ["regret, expected where known", *_TO, "regret", "rollouts", "time choosing", "fell back"]
    for title, rows in places.items():
        yield element("h3", f"{title} (regret against: {against[title]})")
        yield _table(head, rows)


def _table(head: Sequence[str], rows: Mapping[str, Sequence[Child]]) -> ET.Element:
    """A table that scrolls by itself where names and columns are wider than the screen."""
    return element("div", table(head, rows), style="overflow-x:auto")


def _two(first: Child, second: Child, unit: str) -> ET.Element:
    """A figure, and below it another that says the same in its own way."""
    return element("span", first, element("span", second, unit, class_="interval"))


def _left_out(left_out: Sequence[Figures]) -> ET.Element:
    """A row a policy and reason; times, which differ from budget to budget, are told as one reason."""
    found: dict[str, dict[str, list[str]]] = {}
    for x in left_out:
        reason = Reason.of(x)
        why = reason.why if reason.too_slow is None else "choosing takes too long"
        found.setdefault(f"{x['policy']}: {why}", {}).setdefault(x["problem"], []).append(x["budget"])
    rows: dict[str, Sequence[Child]] = {
        name: ["; ".join(f"{problem} ({', '.join(budgets)})" for problem, budgets in problems.items())]
        for name, problems in found.items()
    }
    return _table(["where"], rows)


def _ratios(row: Figures) -> list[Child]:
    """A cell's ratio to the best of each group, with its name."""
    found = [row["ratios"].get(group) for group in _AGAINST]
    return [_NONE if x is None else element("span", _ratio(x), f" {x['rival']}") for x in found]


def _ratio(row: Figures) -> ET.Element:
    if row["ratio"] is not None and row["high"] is None:
        return element("span", number(row["ratio"]), element("span", "no interval", class_="interval"))
    return estimate({"value": row["ratio"], "low": row["low"], "high": row["high"]})


def _percent(share: float | None) -> str:
    return _NONE if share is None else f"{100 * share:.0f} %"
