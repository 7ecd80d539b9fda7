"""The page of a rehearsal: who decides better at which cost, and every cell; floor 7, no computing."""

from __future__ import annotations

import os
import xml.etree.ElementTree as ET
from collections.abc import Iterable, Iterator, Mapping, Sequence
from typing import Any, Final

from matplotlib.figure import Figure
from matplotlib.ticker import NullLocator

from distill.errors import InputError
from distill.files import write_atomic
from distill.report.elements import Child, element, estimate, number, section, table, text_of, word_list
from distill.report.facts import Figures, gaps_refused
from distill.report.frame import page_text
from distill.report.theme import DRAWN, SMALL, one_line, standalone, styled, svg
from distill.report.words import CAUTION

__all__ = ["break_even_svg", "rehearsal_page", "write_rehearsal_page"]

_FORMAT: Final = "voc-distill-rehearsal/1"
_NONE: Final = "\u2013"  # stands for a figure that is not there
_AGAINST: Final = {
    "sampling": "better of UCT and Thompson sampling",
    "static": "static closed form",
    "exact": "exact dynamic rate",
}
_ROLES: Final = {"uct": "peer", "thompson": "peer", "top": "peer", "static": "ink", "exact": "exact"}
_MARKS: Final = ("o", "s", "^", "D", "v")
_DASHES: Final = ("-", (0, (5, 2)), (0, (2, 2)))
_WORDS: Final = {
    "regret": "How much worse the chosen action is than the best one, in the problem's own unit.",
    "expected regret": (
        "Regret averaged over all that the rollouts seen leave open. Known where the beliefs are those that "
        "the truth was drawn from; it has the same mean as regret and far less noise, and is compared then."
    ),
    "budget": (
        "A number of rollouts, or a time at a stated cost of a rollout. The clock adds that cost for each "
        "rollout to the time that choosing really took, belief updates included."
    ),
    "ratio": (
        "The scorer's mean regret over that of the best policy of the group, on the same decisions; the best "
        "one is picked on these very decisions, which favours it. Below 1 the scorer decides better. "
        "Intervals: 95 %, decisions resampled in pairs."
    ),
    "settled, share, spread, commit": (
        "How a scorer is used: below a share of the tree's scale the closed form chooses; scoring takes at "
        "most a share of the rollouts' time; the best few leaves get a rollout each from one scoring; a "
        "share of the best batch is spent before scoring again."
    ),
    "fell back": "Share of a policy's choices that the closed form made in its place.",
}  # fmt: skip


def rehearsal_page(summary: Figures) -> str:
    """The page of a rehearsal's `summary.json`. The same figures give the same text.

    Raises InputError where they are none of a rehearsal, or lack a part.
    """
    if summary.get("format") != _FORMAT:
        raise InputError("report: format", f"must be {_FORMAT!r}", summary.get("format"))
    with gaps_refused():
        body = element(
            "main",
            _opening(summary),
            section("In pictures", element("div", *_pictures(summary), class_="pictures")),
            *_tables(summary),
            section("What the words mean", word_list((term, [text]) for term, text in _WORDS.items())),
        )
    return page_text("Rehearsal: who decides better, at which cost", body)


def write_rehearsal_page(summary: Figures, path: str | os.PathLike[str]) -> None:
    """Write `rehearsal_page(summary)` to a file."""
    write_atomic(path, rehearsal_page(summary).encode())


def break_even_svg(summary: Figures) -> str:
    """The break-even chart as a picture of its own, light or dark as its reader."""
    with gaps_refused():
        return standalone(_break_even(summary))


def _opening(summary: Figures) -> ET.Element:
    campaign = summary["campaign"]
    told: list[Child] = [
        number(len(campaign["problems"])), " problems, ", number(len(campaign["budgets"])), " budgets, ",
        number(campaign["seeds"]), " decisions a cell, the same for every policy. Baselines tuned on ",
        number(campaign["tuning_seeds"]), " other decisions for each problem and number of rollouts.",
    ]  # fmt: skip
    return element(
        "header",
        element("h1", "Rehearsal: who decides better, at which cost"),
        element("p", *told),
        element("p", CAUTION, class_="caution"),
    )


# --- pictures --------------------------------------------------------------------------------------


def _pictures(summary: Figures) -> Iterator[ET.Element]:
    if _costs(summary["break_even"]):
        yield _framed(
            "Break-even: what a rollout costs, and who decides best",
            _break_even(summary),
            "Regret as a multiple of the better of UCT and both Thompson samplings in the same time; lower "
            "is better. Geometric mean over the problems that have all of a line's points.",
        )
    for i, policy in enumerate(dict.fromkeys(row["policy"] for row in summary["comparisons"])):
        rows = [r for r in summary["comparisons"] if r["policy"] == policy and r["timed"]]
        if any(r["ratio"] is not None for r in rows):
            yield _framed(
                one_line(policy),
                svg(_ratios(rows), f"ratios-{i}", f"Ratios of {policy} in every timed cell, as in the table"),
                "Each dot is a problem and a budget, sorted; left of 1 the scorer decides better. The dashed "
                "line is 0.85.",
            )


def _costs(rows: Iterable[Mapping[str, Any]]) -> dict[int, set[float]]:
    """Numbers of rollouts that were rehearsed at several costs."""
    costs: dict[int, set[float]] = {}
    for row in rows:
        costs.setdefault(row["rollouts"], set()).add(row["rollout_seconds"])
    return {rollouts: found for rollouts, found in costs.items() if len(found) > 1}


def _break_even(summary: Figures) -> ET.Element:
    costs = _costs(summary["break_even"])
    if not costs:
        raise InputError("report: break_even", "must hold some policies at several costs of a rollout")
    most = max(costs, key=lambda rollouts: (len(costs[rollouts]), rollouts))
    rows = [row for row in summary["break_even"] if row["rollouts"] == most]
    name = f"Regret in the time of {most} rollouts against their cost, as a multiple of the best sampling"
    return svg(_lines(rows, most), "break-even", name)


@styled
def _lines(rows: Sequence[Mapping[str, Any]], rollouts: int) -> Figure:
    names = list(dict.fromkeys(row["policy"] for row in rows))
    figure = Figure(figsize=(390 / 72, (300 + 17 * len(names)) / 72))
    figure.patch.set_visible(False)
    ax = figure.subplots()
    ax.patch.set_visible(False)
    ax.set(xscale="log", yscale="log", xlabel=f"cost of a rollout, µs (time: {rollouts} rollouts)")
    ax.set_ylabel("regret, multiple of the best sampling")
    ax.grid(which="major")
    drawn: dict[str, int] = {}
    for name in names:
        points = sorted((1e6 * r["rollout_seconds"], r["ratio"]) for r in rows if r["policy"] == name)
        role = _role(name)
        nth = drawn[role] = drawn.get(role, -1) + 1  # policies of one colour differ by their marks
        style: dict[str, Any] = {
            "marker": _MARKS[nth % len(_MARKS)],
            "ls": _DASHES[nth % len(_DASHES)],
            "ms": 5,
            "lw": 1.4,
        }
        label = one_line(name, 44)
        ax.plot(*zip(*points, strict=True), color=DRAWN[role], label=label, gid="policy", **style)
    ax.axhline(1, color=DRAWN["quiet"], lw=1)
    ticks = sorted({1e6 * r["rollout_seconds"] for r in rows})
    ax.set_xticks(ticks, [f"{t:,.0f}" for t in ticks])
    low, high = ax.get_ylim()
    levels = [t for t in (0.25, 0.5, 0.7, 0.85, 1, 1.2, 1.5, 2, 3, 5, 10) if low <= t <= high]
    ax.set_yticks(levels, [f"{t:g}" for t in levels])
    for axis in (ax.xaxis, ax.yaxis):
        axis.set_minor_locator(NullLocator())
    figure.legend(loc="outside lower left", frameon=False, fontsize=SMALL)
    return figure


@styled
def _ratios(rows: Sequence[Mapping[str, Any]]) -> Figure:
    groups = {g: sorted(_of_group(rows, g), key=lambda r: float(r["ratio"])) for g in ("sampling", "static")}
    shown = {g: found for g, found in groups.items() if found}
    figure = Figure(figsize=(390 / 72, (60 + 80 * len(shown) + 5 * sum(map(len, shown.values()))) / 72))
    figure.patch.set_visible(False)
    axes = figure.subplots(len(shown), 1, squeeze=False, sharex=True)[:, 0]
    for ax, (group, found) in zip(axes, shown.items(), strict=True):
        ax.patch.set_visible(False)
        ax.set_title(f"over the {_AGAINST[group]}")
        for i, row in enumerate(found):
            if row["low"] is not None:
                ax.plot([row["low"], row["high"]], [i, i], color=DRAWN["scorer"], lw=1, alpha=0.5)
            ax.plot([row["ratio"]], [i], "o", ms=4, color=DRAWN["scorer"], gid="ratio")
        ax.axvline(1, color=DRAWN["quiet"], lw=1)
        ax.axvline(0.85, color=DRAWN["quiet"], lw=1, ls=(0, (4, 3)))
        ax.set(xscale="log", xlim=(0.3, 3))
        ax.set_xticks([0.3, 0.5, 0.7, 1, 1.5, 2, 3], ["0.3", "0.5", "0.7", "1", "1.5", "2", "3"])
        ax.xaxis.set_minor_locator(NullLocator())
        ax.yaxis.set_major_locator(NullLocator())
        ax.spines["left"].set_visible(False)
        ax.grid(axis="x")
    return figure


def _of_group(rows: Iterable[Mapping[str, Any]], group: str) -> list[Mapping[str, Any]]:
    return [row for row in rows if row["group"] == group and row["ratio"] is not None]


def _role(policy: str) -> str:
    return next((role for word, role in _ROLES.items() if policy.startswith(word)), "scorer")


def _framed(title: str, picture: ET.Element, caption: str) -> ET.Element:
    return element("figure", element("h3", title), picture, element("figcaption", caption))


# --- tables ----------------------------------------------------------------------------------------


def _tables(summary: Figures) -> Iterator[ET.Element]:
    yield section("What was aimed at, and reached", _aims(summary["aims"]))
    yield section("What to use", _advice(summary["advice"]))
    yield section("Every cell: ratios", _comparisons(summary["comparisons"]))
    if summary["stopping"]:
        yield section("Stopping early", _stopping(summary["stopping"]))
    yield section("Every cell: figures", *_figures(summary["rows"]))
    if summary["left_out"]:
        yield section("Left out", _left_out(summary["left_out"]))


def _aims(aims: Mapping[str, Mapping[str, Figures]]) -> ET.Element:
    rows: dict[str, Sequence[Child]] = {
        f"{policy} against the {_AGAINST[group]}": [
            number(c["cells"]),
            f"{c['reached']} at or below {c['at_most']:g}",
            f"{c['beyond']} above {c['never_above']:g}",
        ]
        for policy, groups in aims.items()
        for group, c in groups.items()
    }
    return table(["timed cells, rollouts of 100 µs or more", "reached", "missed by much"], rows)


def _advice(advice: Sequence[Figures]) -> ET.Element:
    rows: dict[str, Sequence[Child]] = {
        f"{a['problem']} {a['budget']}": [a["use"], a["best_other"], _ratio(a)] for a in advice
    }
    return table(["use", "best of the others", "its regret over the closed form's"], rows)


def _comparisons(comparisons: Sequence[Figures]) -> ET.Element:
    rows: dict[str, list[Child]] = {}
    for row in comparisons:
        cells = rows.setdefault(f"{row['problem']} {row['budget']} {row['policy']}", [_NONE] * len(_AGAINST))
        cells[list(_AGAINST).index(row["group"])] = element("span", _ratio(row), f" {row['rival']}")
    return table([f"to the {name}" for name in _AGAINST.values()], rows)


def _stopping(stopping: Sequence[Figures]) -> ET.Element:
    rows: dict[str, Sequence[Child]] = {
        f"{s['problem']} {s['budget']} {s['policy']}": [f"{text_of(100 * s['saved'])} %", _ratio(s)]
        for s in stopping
    }
    return table(["rollouts saved", "regret over that without stopping"], rows)


def _figures(cells: Sequence[Figures]) -> Iterator[ET.Element]:
    """A table a problem and budget."""
    places: dict[str, dict[str, Sequence[Child]]] = {}
    for c in cells:
        regret = {"value": c["measured"], **c["interval"]}
        rest = [c["regret"], c["regret_by_mean"], c["rollouts"], c["choosing_us"]]
        shares = [_percent(c[key]) for key in ("choosing_share", "fallback_share")]
        place = places.setdefault(f"{c['problem']}, {c['budget']}", {})
        place[c["policy"]] = [estimate(regret), *map(number, rest), *shares]
    for title, rows in places.items():
        yield element("h3", title)
        yield table(
            ["regret compared", "regret", "by mean", "rollouts", "choosing, µs a rollout",
             "time spent choosing", "fell back"],
            rows,
        )  # fmt: skip


def _left_out(left_out: Sequence[Figures]) -> ET.Element:
    rows: dict[str, Sequence[Child]] = {
        f"{x['policy']}: {x['problem']} {x['budget']}": [x["why"]] for x in left_out
    }
    return table(["why"], rows)


def _ratio(row: Figures) -> ET.Element:
    return estimate({"value": row["ratio"], "low": row["low"], "high": row["high"]})


def _percent(share: float | None) -> str:
    return _NONE if share is None else f"{100 * share:.0f} %"
