"""Pictures of where a scorer is good: slices, calibration, price, shifts, break-even; floor 7."""

from __future__ import annotations

import xml.etree.ElementTree as ET
from collections.abc import Iterator, Mapping, Sequence

from matplotlib.figure import Figure

from distill.report import charts
from distill.report.charts import Row
from distill.report.curves import Curve, curves
from distill.report.elements import Child, duration, element, number, stated, text_of
from distill.report.facts import Figures, ends, known, plain
from distill.report.theme import svg
from distill.report.words import CAPTIONS

__all__ = ["break_even_picture", "parts_pictures", "shifts_picture"]

_SCALE = "units of the tree's scale"
_LEAST = 1e-4  # percent: a dot for less would stretch the axis over nothing
_FEW = 200  # candidates: of fewer, a share of those within their bound is chance


def parts_pictures(name: str, accuracy: Figures) -> Iterator[tuple[str, ET.Element, list[Child]]]:
    """Title, picture and caption of each part that the figures hold."""
    if slices := accuracy.get("slices"):
        panels, left_out = _slices(slices)
        if panels:
            figure = charts.rows(panels, beside=True, least=_LEAST, x_label="forgone share, %")
            picture = svg(figure, "slices", f"Forgone share of {name} by slice of trees")
            yield f"Where {name} loses", picture, [CAPTIONS["slices"], *left_out]
    calibration = accuracy.get("calibration")
    if calibration and calibration["bins"] and calibration["stated"] is not None:
        picture = svg(_coverage(calibration), "bound", f"How often the upper bound of {name} holds")
        yield f"How often the upper bound of {name} holds", picture, _coverage_caption(calibration)
        picture = svg(_sizes(calibration), "sizes", f"Mean exact value by size of {name}'s score")
        yield f"Values by size of score, {name}", picture, [CAPTIONS["sizes"]]
    if curve := accuracy.get("stop_curve"):
        picture = svg(_stop(name, curve), "stop", f"Value lost by stopping wrongly, by price, {name}")
        yield f"Stopping by {name}", picture, [CAPTIONS["stop"]]


def _slices(slices: Sequence[Figures]) -> tuple[dict[str, list[Row]], list[Child]]:
    """Panels that tell something, and words on those that do not."""
    panels: dict[str, list[Row]] = {}
    for s in slices:
        value, low, high = ends(s["forgone_percent"])
        row = Row(s["slice"], value, low, high, text=text_of(value), role="scorer")
        panels.setdefault(s["by"], []).append(row)
    alone = [by for by, rows in panels.items() if len(rows) == 1]
    lossless = [
        by
        for by, rows in panels.items()
        if by not in alone and not any((r.value or 0) >= _LEAST for r in rows)
    ]
    words: list[Child] = []
    if alone:
        words.append(f" Not drawn, because all trees are in one slice: {', '.join(alone)}.")
    if lossless:
        words.append(f" Not drawn, because no slice lost {_LEAST:.4f} %: {', '.join(lossless)}.")
    shown = {f"by {by}": rows for by, rows in panels.items() if by not in alone + lossless}
    return shown, words


def _coverage(calibration: Figures) -> Figure:
    bins = calibration["bins"]
    curve = Curve(
        "",
        [known(b["mean_score"]) for b in bins],
        [known(b["covered_percent"]) for b in bins],
        "scorer",
        dots=True,
        few=[known(b["candidates"]) < _FEW for b in bins],
    )
    share = 100 * known(calibration["stated"])
    lowest = min([share, *curve.ys])
    return curves(
        [curve],
        x_label=f"score, {_SCALE}",
        y_label="candidates within their bound, %",
        y_limits=(min(85.0, lowest - 2), 101),
        across=(f"stated: {share:g} %", share),
        height=270,
    )


def _coverage_caption(calibration: Figures) -> list[Child]:
    out: list[Child] = [CAPTIONS["bound"], " All candidates: ", *_percent(calibration["covered_percent"])]
    out += ["; those worth anything: ", *_percent(calibration["covered_live_percent"])]
    if worst := calibration["worst_slice"]:
        out += [
            f"; the worst slice ({worst['by']} {worst['slice']}, ", number(worst["candidates"]),
            " candidates): ", number(worst["covered_percent"]), " %",
        ]  # fmt: skip
    return [*out, "."]


def _percent(e: Figures) -> list[Child]:
    value, low, high = ends(e)
    interval: list[Child] = []
    if low is not None and high is not None:
        interval = [" (", number(low), " to ", number(high), ")"]
    return [number(value), " %", *interval]


def _sizes(calibration: Figures) -> Figure:
    bins = [b for b in calibration["bins"] if known(b["mean_score"]) > 0]
    xs = [known(b["mean_score"]) for b in bins]
    ratios = [known(b["mean_exact"]) / x for b, x in zip(bins, xs, strict=True)]
    low, high = min([0.95, *ratios]), max([1.05, *ratios])
    few = [known(b["candidates"]) < _FEW for b in bins]
    return curves(
        [Curve("", xs, ratios, "scorer", dots=True, few=few)],
        x_label=f"mean score, {_SCALE}",
        y_label="mean exact value over mean score",
        log_y=high > 4 or low < 0.25,
        y_limits=(0.97 * low, 1.03 * high),
        across=("equal", 1.0),
        height=270,
    )


def _stop(name: str, curve: Sequence[Figures]) -> Figure:
    prices = [known(p["price"]) for p in curve]

    def column(key: str) -> list[float]:
        return [known(p[key]) for p in curve]

    low, high = ([plain(p[key]) or 0.0 for p in curve] for key in ("low", "high"))
    return curves(
        [
            Curve(name, prices, column("value"), "scorer", low, high, dots=True),
            Curve("never roll out", prices, column("stop_at_once"), "peer"),
            Curve("never stop", prices, column("go_on"), "peer", dash=1),
        ],
        x_label=f"price of a rollout, {_SCALE}",
        y_label="lost a tree, same unit",
        log_y=True,
    )


def shifts_picture(shifts: Mapping[str, Figures]) -> tuple[str, ET.Element, list[Child]]:
    """Title, picture and caption of what trees unlike those of training cost."""
    rows = [
        Row(
            name, *ends(m["forgone_percent"]), text=stated(m["forgone_percent"]).partition(" (")[0],
            role="scorer", rival=plain(m["first_order_forgone_percent"]),
        )
        for name, m in shifts.items()
    ]  # fmt: skip
    figure = charts.rows({"forgone share, %": rows}, beside=True, least=_LEAST)
    picture = svg(figure, "shifts", f"Forgone share where trees are unlike training: {', '.join(shifts)}")
    return "Trees unlike those of training", picture, [CAPTIONS["shifts"]]


# Peers that are drawn even where they are nowhere best.
_DRAWN_PEERS = ("first-order closed form", "static closed form", "UCT")


def break_even_picture(
    found: Figures, roles: Mapping[str, str], chosen: str | None = None
) -> tuple[str, ET.Element, list[Child]]:
    """Title, picture and caption of what each way to pick gains, by cost of a rollout.

    Drawn are the ways that are best somewhere, the chosen scorer or the one that gains most where rollouts
    are dear, exact values and the commonest peers: the curves of a front's scorers lie upon one another.
    """
    costs = [known(c) / 1000 for c in found["costs_us"]]
    gains = {name: [known(g) for g in curve] for name, curve in found["gain_percent"].items()}
    drawn = {*(one["name"] for one in found["best"]), *_DRAWN_PEERS}
    drawn |= {name for name in gains if roles.get(name) == "exact"}
    scorers = [name for name in gains if roles.get(name) == "scorer"]
    if chosen in gains:
        drawn.add(chosen)
    elif scorers:
        drawn.add(max(scorers, key=lambda name: gains[name][-1]))
    used: dict[str, int] = {}
    shown = []
    for name in (name for name in gains if name in drawn):
        role = roles.get(name, "peer")
        used[role] = used.get(role, -1) + 1
        shown.append(Curve(name, costs, gains[name], role, dash=used[role]))
    picture = svg(
        curves(
            shown,
            x_label="cost of one rollout, ms; one scoring for each rollout",
            y_label="gain per time, % of free exact picks",
            y_limits=(0, 102),
            height=400,
        ),
        "break-even",
        f"Gain per time of {', '.join(c.name for c in shown)}, by cost of a rollout",
    )
    best = []
    for one in found["best"]:
        low, high = plain(one["from_us"]), plain(one["to_us"])
        start: list[Child] = [] if low is None else [" from ", duration(low)]
        end: list[Child] = [] if high is None else [" up to ", duration(high)]
        best.append(element("li", one["name"], ":", *(start + end or [" at every cost"])))
    return "What pays at what cost of a rollout", picture, [CAPTIONS["break-even"], element("ul", *best)]
