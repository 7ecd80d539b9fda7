"""Pictures of a rehearsal: ratios cell by cell, regret against the cost of a rollout, time spent choosing.

Each takes the `summary.json` of a rehearsal; None where it holds nothing to draw. Floor 7, no computing.
"""

from __future__ import annotations

import xml.etree.ElementTree as ET
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from statistics import median
from typing import Any, Final

from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import NullLocator

from distill.rehearse.aimed import BEST, LIMITS
from distill.report.theme import DRAWN, SMALL, one_line, styled, svg

__all__ = ["MARKS", "WIDTH", "break_even", "choosing", "costs", "ratios"]

Figures = Mapping[str, Any]
Rows = Sequence[Figures]

WIDTH: Final = 390 / 72
MARKS: Final = ("o", "s", "^", "D", "v")
_RIVALS: Final = {"sampling": "better sampling", "static": "closed form", "exact": "exact rate"}
_FAR: Final = (0.3, 3.0)  # ratios beyond stand at the edge
_LEVELS: Final = (0.25, 0.5, 0.7, 0.85, 1, 1.2, 1.5, 2, 3, 5, 10)


@dataclass(frozen=True)
class _Sort:
    """What a line or row stands for: how its policies' names begin, and how they are drawn.

    A family has a colour of its own, its second member dashes, and each a mark that no other has.
    """

    word: str
    label: str
    role: str
    mark: str
    dashed: bool = False

    def of(self, rows: Iterable[Figures]) -> list[Figures]:
        """The rows of its policies."""
        return [row for row in rows if row["policy"].startswith(self.word)]

    def line(self, size: float) -> dict[str, Any]:
        """How its line is drawn, with marks of a size."""
        colour = DRAWN[self.role]
        dash = (0, (4, 2)) if self.dashed else "-"
        return {"color": colour, "marker": self.mark, "ms": size, "mew": 0, "ls": dash, "lw": 1.4}


_SORTS: Final = (
    _Sort("uct", "UCT", "uct", "^"),
    _Sort("thompson", "Thompson", "peer", "s"),
    _Sort("top", "top-two Thompson", "peer", "P", dashed=True),
    _Sort("static_rate", "closed form (static rate)", "ink", "D"),
    _Sort("static_voc", "closed form (static VOC)", "ink", "X", dashed=True),
    _Sort("exact", "exact rate", "exact", "v"),
    _Sort(BEST, "best scorer", "scorer", "o"),
)


def _shown(summary: Figures, part: str) -> list[Figures]:
    """Rows of policies that pictures show. Single scorers are not, whatever their names begin with."""
    scorers = {name for file in summary["scorers"] for name in file["policies"]}
    words = tuple(sort.word for sort in _SORTS)
    return [r for r in summary[part] if r["policy"].startswith(words) and r["policy"] not in scorers]


# --- ratios ----------------------------------------------------------------------------------------


def ratios(summary: Figures, group: str = "sampling") -> ET.Element | None:
    """Regret of the best scorer over that of the best of a group, timed cells, with intervals.

    Costs of a rollout that only a few problems have are left to the other pictures.
    """
    rows = [
        row for row in summary["rows"]
        if row["policy"] == BEST and row["timed"] and row["ratios"].get(group, {}).get("ratio") is not None
    ]  # fmt: skip
    many = Counter(row["rollout_seconds"] for row in rows)
    rows = [row for row in rows if 2 * many[row["rollout_seconds"]] > max(many.values())]
    if not rows:
        return None
    meaning = f"Best scorer's regret over the best {group} rival's, by problem and cost of a rollout"
    return svg(_ratios(rows, group), f"ratios-{group}", meaning)


@styled
def _ratios(rows: Rows, group: str) -> Figure:
    problems = list(dict.fromkeys(row["problem"] for row in rows))
    problems.sort(key=lambda p: -median(r["ratios"][group]["ratio"] for r in rows if r["problem"] == p))
    costs_ = sorted({row["rollout_seconds"] for row in rows})
    figure = Figure(figsize=(WIDTH, (80 + 17 * len(problems) + 8 * len(costs_)) / 72))
    figure.patch.set_visible(False)
    ax = figure.subplots()
    ax.patch.set_visible(False)
    shades = _shades(len(costs_))
    for cost, (role, alpha), mark in zip(costs_, shades, MARKS * len(costs_), strict=False):
        here = [row for row in rows if row["rollout_seconds"] == cost]
        nth: dict[str, int] = {}
        label = f"{_cost(cost)} a rollout"
        for row in here:
            k = nth[row["problem"]] = nth.get(row["problem"], -1) + 1
            y = problems.index(row["problem"]) + _spread(costs_.index(cost), k, len(costs_))
            found = row["ratios"][group]
            if found["low"] is not None:
                ax.plot([_cut(found["low"]), _cut(found["high"])], [y, y], color=DRAWN[role], lw=1, alpha=0.4)
            ax.plot(
                [_cut(found["ratio"])], [y], mark, ms=4, color=DRAWN[role], alpha=alpha, gid="ratio",
                mew=0, label=label,
            )  # fmt: skip
            label = "_"
    ax.axvline(1, color=DRAWN["quiet"], lw=1)
    ax.axvline(LIMITS[group][0], color=DRAWN["quiet"], lw=1, ls=(0, (4, 3)))
    ax.set_yticks(range(len(problems)), [one_line(p, 28) for p in problems])
    ax.set(xscale="log", xlim=_FAR, ylim=(-0.7, len(problems) - 0.3))
    ticks = (0.3, 0.5, 0.7, 1, 1.5, 2, 3)
    ax.set_xticks(ticks, [f"{t:g}" for t in ticks])
    ax.xaxis.set_minor_locator(NullLocator())
    ax.set_xlabel(f"regret: best scorer / {_RIVALS[group]}")
    ax.tick_params(axis="y", length=0)
    ax.grid(axis="x")
    figure.legend(loc="outside lower left", frameon=False, fontsize=SMALL, ncols=2, handletextpad=0.2)
    return figure


def _spread(cost: int, nth: int, costs_: int) -> float:
    """Cells of one problem below one another, dearer rollouts lower, longer searches lower yet."""
    return 0.32 - 0.64 * (2 * cost + nth % 2) / max(2 * costs_ - 1, 1)


def _shades(n: int) -> list[tuple[str, float]]:
    """Colour and strength of each cost: cheap rollouts in the quiet colour, dear ones in the scorer's."""
    roles = ["peer", "scorer"] if n == 2 else ["quiet", "peer", "exact", "scorer", "ink"]
    return [(roles[i % len(roles)], 1.0) for i in range(n)]


def _cut(x: float) -> float:
    return min(max(x, _FAR[0]), _FAR[1])


# --- regret against cost ---------------------------------------------------------------------------


def costs(summary: Figures, most: int = 4) -> ET.Element | None:
    """Regret against the cost of a rollout, a panel a problem, for problems that have three costs or more."""
    by_problem: dict[str, dict[int, set[float]]] = {}
    rows = [row for row in _shown(summary, "rows") if row["timed"] and row["measured"]]
    for row in rows:
        lengths = by_problem.setdefault(row["problem"], {})
        lengths.setdefault(_rollouts(row), set()).add(row["rollout_seconds"])
    panels = []
    for problem, lengths in by_problem.items():
        length = max(lengths, key=lambda n: (len(lengths[n]), n))
        if len(lengths[length]) >= 3:
            panels.append([r for r in rows if r["problem"] == problem and _rollouts(r) == length])
    if not panels:
        return None
    meaning = "Regret against the cost of a rollout, in the time of as many rollouts, by problem and policy"
    return svg(_costs(panels[:most]), "costs", meaning)


def _rollouts(row: Figures) -> int:
    """Rollouts that fit the time of a row's budget, choosing apart; from its text, TIMEms@COSTus."""
    time, _, _ = row["budget"].rpartition(" ")[2].partition("ms@")
    return round(float(time) * 1e-3 / float(row["rollout_seconds"]))


@styled
def _costs(panels: Sequence[Rows]) -> Figure:
    down = (len(panels) + 1) // 2
    figure = Figure(figsize=(WIDTH, (110 + 160 * down) / 72))
    figure.patch.set_visible(False)
    axes = figure.subplots(down, 2, squeeze=False)
    lines: dict[str, Any] = {}
    for ax, rows in zip(axes.flat, panels, strict=False):
        ax.patch.set_visible(False)
        ax.set_title(one_line(rows[0]["problem"], 22), fontsize=SMALL)
        ax.set(xscale="log", yscale="log")
        for sort in _SORTS:
            mine = sort.of(rows)
            if not mine or sort.word == "static_voc":
                continue
            points = sorted((1e6 * r["rollout_seconds"], r["measured"]) for r in mine)
            (lines[sort.label],) = ax.plot(*zip(*points, strict=True), gid="policy", **sort.line(4.5))
        ticks = sorted({1e6 * r["rollout_seconds"] for r in rows})
        ax.set_xticks(ticks, [f"{t:.0f}" if t < 1000 else f"{t / 1000:g}k" for t in ticks])
        ax.grid(which="major")
        for axis in (ax.xaxis, ax.yaxis):
            axis.set_minor_locator(NullLocator())
        _value_ticks(ax)
    for ax in axes.flat[len(panels) :]:
        ax.set_visible(False)
    figure.supxlabel(f"cost of a rollout, µs (time: {_rollouts(panels[0][0])} rollouts)", fontsize=SMALL)
    figure.supylabel("regret", fontsize=SMALL)
    figure.legend(
        lines.values(), lines.keys(), loc="outside upper left", frameon=False, fontsize=SMALL, ncols=2
    )
    return figure


def _value_ticks(ax: Axes) -> None:
    """Two to five round numbers on a logarithmic axis of values."""
    low, high = ax.get_ylim()
    for within in ((1.0,), (1.0, 3.0), (1.0, 2.0, 5.0), (1.0, 1.5, 2.0, 3.0, 4.0, 5.0, 7.0)):
        ticks = [m * 10.0**k for k in range(-12, 12) for m in within if low <= m * 10.0**k <= high]
        if len(ticks) >= 2:
            break
    ax.set_yticks(ticks, [f"{t:g}" for t in ticks])


# --- time spent choosing ---------------------------------------------------------------------------


def choosing(summary: Figures) -> ET.Element | None:
    """Share of the time that choosing takes, by policy and cost of a rollout: median and range of cells."""
    rows = [r for r in _shown(summary, "rows") if r["timed"] and r["choosing_share"] is not None]
    if not rows:
        return None
    return svg(_choosing(rows), "choosing", "Share of time spent choosing, by policy and cost of a rollout")


@styled
def _choosing(rows: Rows) -> Figure:
    sorts = [sort for sort in _SORTS if sort.of(rows)]
    costs_ = sorted({r["rollout_seconds"] for r in rows})
    figure = Figure(figsize=(WIDTH, (74 + 13 * (len(costs_) + 0.6) * len(sorts)) / 72))
    figure.patch.set_visible(False)
    ax = figure.subplots()
    ax.patch.set_visible(False)
    for i, sort in enumerate(reversed(sorts)):
        colour = DRAWN[sort.role]
        for j, cost in enumerate(costs_):
            y = i + 0.36 - 0.72 * j / max(len(costs_) - 1, 1)
            here = [100 * r["choosing_share"] for r in sort.of(rows) if r["rollout_seconds"] == cost]
            if here:
                ax.plot([min(here), max(here)], [y, y], color=colour, lw=1, alpha=0.5)
                ax.plot([median(here)], [y], MARKS[j % len(MARKS)], ms=4, color=colour, gid="share")
                ax.annotate(
                    _cost(cost), (max(here), y), xytext=(4, 0), textcoords="offset points",
                    va="center", fontsize=8, color=DRAWN["quiet"],
                )  # fmt: skip
    ax.axvline(20, color=DRAWN["quiet"], lw=1, ls=(0, (4, 3)))
    ax.set_yticks(range(len(sorts)), [sort.label for sort in reversed(sorts)])
    ax.set(xlim=(-2, 112), ylim=(-0.7, len(sorts) - 0.3), xlabel="time spent choosing, %")
    ax.set_xticks([0, 20, 40, 60, 80, 100])
    ax.tick_params(axis="y", length=0)
    ax.grid(axis="x")
    return figure


# --- break-even ------------------------------------------------------------------------------------


def _by_length(rows: Iterable[Figures]) -> dict[int, set[float]]:
    """Numbers of rollouts that were rehearsed at several costs."""
    found: dict[int, set[float]] = {}
    for row in rows:
        found.setdefault(row["rollouts"], set()).add(row["rollout_seconds"])
    return {rollouts: costs_ for rollouts, costs_ in found.items() if len(costs_) > 1}


def break_even(summary: Figures) -> ET.Element | None:
    """Regret against the cost of a rollout, as a multiple of the best sampling, over problems."""
    lengths = _by_length(summary["break_even"])
    if not lengths:
        return None
    most = max(lengths, key=lambda rollouts: (len(lengths[rollouts]), rollouts))
    shown = [r for r in _shown(summary, "break_even") if r["rollouts"] == most]
    name = f"Regret in the time of {most} rollouts against their cost, as a multiple of the best sampling"
    return svg(_break_even(shown, most), "break-even", name) if shown else None


@styled
def _break_even(rows: Rows, rollouts: int) -> Figure:
    figure = Figure(figsize=(WIDTH, 400 / 72))
    figure.patch.set_visible(False)
    ax = figure.subplots()
    ax.patch.set_visible(False)
    ax.set(xscale="log", yscale="log", xlabel=f"cost of a rollout, µs (time: {rollouts} rollouts)")
    ax.set_ylabel("regret, multiple of the best sampling")
    ax.grid(which="major")
    for sort in _SORTS:
        if mine := sort.of(rows):
            points = sorted((1e6 * r["rollout_seconds"], r["ratio"]) for r in mine)
            ax.plot(*zip(*points, strict=True), label=sort.label, gid="policy", **sort.line(5.5))
    ax.axhline(1, color=DRAWN["quiet"], lw=1)
    ticks = sorted({1e6 * r["rollout_seconds"] for r in rows})
    ax.set_xticks(ticks, [f"{t:,.0f}" for t in ticks])
    _levels(ax.yaxis, ax.get_ylim())
    for axis in (ax.xaxis, ax.yaxis):
        axis.set_minor_locator(NullLocator())
    figure.legend(loc="outside lower left", frameon=False, fontsize=SMALL, ncols=2)
    return figure


def _levels(axis: Any, limits: tuple[float, float]) -> None:
    levels = [t for t in _LEVELS if limits[0] <= t <= limits[1]]
    axis.set_ticks(levels, [f"{t:g}" for t in levels])
    axis.set_minor_locator(NullLocator())


def _cost(seconds: float) -> str:
    return f"{1e6 * seconds:.0f} µs" if seconds < 1e-3 * (1 - 1e-9) else f"{1e3 * seconds:.0f} ms"
