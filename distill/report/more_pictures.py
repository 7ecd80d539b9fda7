"""Pictures of where a scorer is good: slices, calibration, price of a rollout, break-even; floor 7."""

from __future__ import annotations

import xml.etree.ElementTree as ET
from collections.abc import Iterator, Mapping, Sequence

from matplotlib.figure import Figure

from distill.report import charts
from distill.report.charts import Bar
from distill.report.curves import Curve, curves
from distill.report.elements import Child, element, number, text_of
from distill.report.facts import Figures, ends, known, plain
from distill.report.theme import svg
from distill.report.words import CAPTIONS

__all__ = ["break_even_picture", "parts_pictures"]

_SCALE = "units of the tree's scale"
_LEAST_BAR = 1e-4  # percent: a bar for less would stretch the axis over nothing


def parts_pictures(name: str, accuracy: Figures) -> Iterator[tuple[str, ET.Element, list[Child]]]:
    """Title, picture and caption of each part that the figures hold."""
    if slices := accuracy.get("slices"):
        picture = svg(_slices(slices), "slices", f"Forgone share of {name} by slice of trees")
        yield f"Where {name} loses", picture, [CAPTIONS["slices"]]
    calibration = accuracy.get("calibration")
    if calibration and calibration["bins"] and calibration["stated"] is not None:
        picture = svg(_coverage(calibration), "bound", f"How often the upper bound of {name} holds")
        yield f"How often the upper bound of {name} holds", picture, _coverage_caption(calibration)
        picture = svg(_sizes(calibration), "sizes", f"Mean exact value by size of {name}'s score")
        yield f"Values by size of score, {name}", picture, [CAPTIONS["sizes"]]
    if curve := accuracy.get("stop_curve"):
        picture = svg(_stop(name, curve), "stop", f"Value lost by stopping wrongly, by price, {name}")
        yield f"Stopping by {name}", picture, [CAPTIONS["stop"]]


def _slices(slices: Sequence[Figures]) -> Figure:
    panels: dict[str, list[Bar]] = {}
    for s in slices:
        value, low, high = ends(s["forgone_percent"])
        shown = value if value is not None and value >= _LEAST_BAR else None
        if shown is None or low is None or high is None:
            low = high = None
        else:
            low = max(low, _LEAST_BAR)
        text = f"{text_of(value)} ({text_of(s['trees'])} trees)"
        bar = Bar(s["slice"], shown, low, high, text=text, role="scorer")
        panels.setdefault(f"forgone share, %, by {s['by']}", []).append(bar)
    return charts.bars(panels, log=True)


def _coverage(calibration: Figures) -> Figure:
    bins = calibration["bins"]
    curve = Curve(
        "held",
        [known(b["mean_score"]) for b in bins],
        [known(b["covered_percent"]) for b in bins],
        "scorer",
        dots=True,
    )
    stated = 100 * known(calibration["stated"])
    lowest = min([stated, *curve.ys])
    return curves(
        [curve],
        x_label=f"score, {_SCALE}",
        y_label="candidates within their bound, %",
        y_limits=(min(85.0, lowest - 2), 101),
        across=(f"stated: {stated:g} %", stated),
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
    return curves(
        [
            Curve("equal", xs, xs, "quiet", dash=1, label_at=0),
            Curve("mean exact value", xs, [known(b["mean_exact"]) for b in bins], "scorer", dots=True),
        ],
        x_label=f"mean score, {_SCALE}",
        y_label="mean exact value, same unit",
        log_y=True,
    )


def _stop(name: str, curve: Sequence[Figures]) -> Figure:
    prices = [known(p["price"]) for p in curve]

    def column(key: str) -> list[float]:
        return [known(p[key]) for p in curve]

    low, high = ([plain(p[key]) or 0.0 for p in curve] for key in ("low", "high"))
    return curves(
        [
            Curve(name, prices, column("value"), "scorer", low, high, dots=True, label_at=len(prices) // 2),
            Curve("never roll out", prices, column("stop_at_once"), "peer", label_at=0),
            Curve("never stop", prices, column("go_on"), "peer", dash=1),
        ],
        x_label=f"price of a rollout, {_SCALE}",
        y_label="lost a tree, same unit",
        log_y=True,
    )


# Peers that are drawn even where they are nowhere best, and where on the axis names stand, by role.
_DRAWN_PEERS = ("first-order closed form", "static closed form", "UCT")
_LABELS = {"scorer": (0.5, 0.4), "exact": (0.62,), "peer": (0.2, 0.92, 0.36, 0.92, 0.1)}


def break_even_picture(found: Figures, roles: Mapping[str, str]) -> tuple[str, ET.Element, list[Child]]:
    """Title, picture and caption of what each way to pick gains, by cost of a rollout."""
    costs = [known(c) / 1000 for c in found["costs_us"]]
    taken = {one["name"] for one in found["best"]}
    used: dict[str, int] = {}
    shown = []
    for name, gains in found["gain_percent"].items():
        role = roles.get(name, "peer")
        if role == "peer" and name not in taken and name not in _DRAWN_PEERS:
            continue
        used[role] = used.get(role, -1) + 1
        at = int(len(costs) * _LABELS[role][used[role] % len(_LABELS[role])])
        shown.append(Curve(name, costs, [known(g) for g in gains], role, dash=used[role], label_at=at))
    picture = svg(
        curves(
            shown,
            x_label="cost of one rollout, ms",
            y_label="gain per time, % of free exact picks",
            y_limits=(0, 102),
            height=400,
        ),
        "break-even",
        f"Gain per time of {', '.join(found['gain_percent'])}, by cost of a rollout",
    )
    caption: list[Child] = [CAPTIONS["break-even"]]
    for one in found["best"]:
        low, high = plain(one["from_us"]), plain(one["to_us"])
        caption += [element("span", f" {one['name']}: ", class_="way")]
        start: list[Child] = [] if low is None else ["from ", number(low), " µs "]
        end: list[Child] = [] if high is None else ["up to ", number(high), " µs "]
        caption += [*(start + end or ["at every cost"]), ";" if one is not found["best"][-1] else "."]
    return "What pays at what cost of a rollout", picture, caption
