"""The kinds of pictures: a front, figures in rows, pairs. They draw what they are given; floor 7."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import NullLocator

from distill.report.axes import WIDTH, above, canvas, floor_of, log_ticks
from distill.report.labels import LONGEST, Label, place
from distill.report.theme import DRAWN, SMALL, one_line, styled

__all__ = ["WIDTH", "Peer", "Point", "Row", "front", "pairs", "rows"]

_LONGEST_BESIDE = 20  # characters of a name that stands beside its row


@dataclass(frozen=True)
class Point:
    """A scorer on the front: `x` decision time, `y` loss with its interval; None where there is none."""

    name: str
    x: float
    y: float | None
    low: float | None = None
    high: float | None = None
    joined: bool = False
    chosen: bool = False


@dataclass(frozen=True)
class Peer:
    """A way to pick whose loss is known: a point where its time `x` is, else a line across."""

    name: str
    y: float
    x: float | None = None


@dataclass(frozen=True, kw_only=True)
class Row:
    """A figure in a row of its own: name, value with its interval, and the text that states them.

    rival : the same figure of a peer, drawn in the peer's colour.
    """

    name: str = field(kw_only=False)
    value: float | None = field(kw_only=False)
    low: float | None = field(kw_only=False)
    high: float | None = field(kw_only=False)
    text: str
    role: str
    rival: float | None = None


@styled
def front(
    points: Sequence[Point],
    peers: Sequence[Peer],
    *,
    x_label: str,
    y_label: str,
    width: float = WIDTH,
    height: float = 380,
) -> Figure:
    """Loss against decision time, both on log axes; points marked `joined` are joined in order of time.

    A log axis has no 0: a loss of 0 stands on the lower edge, which is labelled 0, and intervals that go on
    below the edge end there. Points without a loss are left out.
    """
    figure, (ax,) = canvas(height, width=width)
    shown = sorted((p for p in points if p.y is not None), key=lambda p: p.x)
    seen = [*(p.y for p in shown), *(p.y for p in peers)]
    floor = floor_of(seen, (p.low for p in shown))
    ax.set(xscale="log", yscale="log", xlabel=x_label, ylabel=y_label)
    ax.grid(which="major")
    line = [p for p in shown if p.joined]
    ax.plot(
        [p.x for p in line], [above(p.y, floor) for p in line], color=DRAWN["scorer"], lw=1.4, gid="front"
    )
    labels: list[Label] = []
    for p in shown:
        y = above(p.y, floor)
        if p.low is not None and p.high is not None:
            ends = [above(p.low, floor), above(p.high, floor)]
            ax.plot([p.x, p.x], ends, color=DRAWN["scorer"], lw=1.2, alpha=0.6, gid="interval")
        if p.chosen:
            ax.plot([p.x], [y], "o", ms=13, mfc="none", mec=DRAWN["scorer"], mew=1.2, clip_on=False)
        fill = DRAWN["scorer" if p.joined else "paper"]
        ax.plot([p.x], [y], "o", ms=7, mfc=fill, mec=DRAWN["scorer"], mew=1.4, clip_on=False, gid="scorer")
        labels.append(Label(p.name, [(p.x, y)], "ink", bold=p.chosen))
    for peer in peers:
        y = above(peer.y, floor)
        if peer.x is not None:
            ax.plot([peer.x], [y], "D", ms=6, color=DRAWN["peer"], gid="peer")
            labels.append(Label(peer.name, [(peer.x, y)], "peer"))
        else:
            ax.axhline(y, color=DRAWN["peer"], lw=1.2, ls=(0, (4, 3)), gid="peer")
            labels.append(Label(peer.name, [], "peer", across=y))
    xs = [p.x for p in shown] + [p.x for p in peers if p.x is not None]
    if xs:
        ax.set_xlim(min(xs) / 1.5, max(xs) * 1.5)
    highest = max([floor, *(v for v in (*seen, *(p.high for p in shown)) if v is not None)])
    ax.set_ylim(floor, max(highest * 2, floor * 10))
    log_ticks(ax.xaxis, ax.get_xlim())
    log_ticks(ax.yaxis, ax.get_ylim(), zero_at=floor if any(v == 0 for v in seen) else None)
    place(ax, labels)
    return figure


@styled
def rows(
    panels: Mapping[str, Sequence[Row]],
    *,
    beside: bool = False,
    least: float = 0.0,
    most: float = 0.0,
    x_label: str = "",
) -> Figure:
    """Dots with intervals, a row for each figure, a panel for each title, all on one log axis.

    beside : short names stand left of their rows and figures right of them, instead of both above.
    least : what is below it stands on the lower edge; so does 0, and the edge is labelled 0 or says "below".
    most : the axis reaches at least so far.
    """
    sizes = [len(part) for part in panels.values()]
    tall, extra = (21.0, 34.0) if beside else (37.0, 50.0)
    ratios = [tall * n for n in sizes]
    figure, axes = canvas(tall * sum(sizes) + extra * len(panels) + 24, ratios)
    every = [row for part in panels.values() for row in part]
    values = [v for row in every for v in (row.value, row.rival)]
    floor = max(floor_of(values, (row.low for row in every)), least)
    top = max(
        [10 * floor, most, *(v for row in every for v in (row.value, row.high, row.rival) if v is not None)]
    )
    limits = (floor, 1.3 * top)
    for ax, (title, part) in zip(axes, panels.items(), strict=True):
        ax.set_title(title)
        ax.set_xscale("log")
        ax.set(xlim=limits, ylim=(len(part) - 0.5, -0.5))
        ax.grid(axis="x")
        ax.spines["left"].set_visible(False)
        ax.yaxis.set_major_locator(NullLocator())
        for i, row in enumerate(part):
            _row(ax, i, row, floor, beside)
        log_ticks(
            ax.xaxis, limits, zero_at=floor if any(v is not None and v <= floor for v in values) else None
        )
        if any(v is not None and 0 < v <= floor for v in values):
            ax.set_xticks(ax.get_xticks(), ["less", *(t.get_text() for t in ax.get_xticklabels()[1:])])
        if beside and ax is not axes[-1]:
            ax.tick_params(axis="x", labelbottom=False)
    axes[-1].set_xlabel(x_label)
    return figure


def _row(ax: Axes, i: int, row: Row, floor: float, beside: bool) -> None:
    to_axis, colour = ax.get_yaxis_transform(), DRAWN[row.role]
    if beside:
        y, at = float(i), dict[str, Any](va="center_baseline")
        ax.text(
            -0.03, y, one_line(row.name, _LONGEST_BESIDE), transform=to_axis, fontsize=SMALL, ha="right", **at
        )
        ax.text(1.03, y, row.text, transform=to_axis, fontsize=SMALL, color=DRAWN["quiet"], **at)
    else:
        y = i + 0.17
        ax.text(0, i - 0.12, one_line(row.name, LONGEST), transform=to_axis, fontsize=SMALL)
        ax.text(1, i - 0.12, row.text, transform=to_axis, ha="right", fontsize=SMALL, color=DRAWN["quiet"])
    if row.low is not None and row.high is not None:
        ends = [above(row.low, floor), above(row.high, floor)]
        ax.plot(ends, [y, y], color=colour, lw=3, alpha=0.45, solid_capstyle="butt", gid="interval")
    if row.rival is not None:
        ax.plot([above(row.rival, floor)], [y], "D", ms=5.5, color=DRAWN["peer"], clip_on=False, gid="rival")
    if row.value is not None:
        ax.plot([above(row.value, floor)], [y], "o", ms=6.5, color=colour, clip_on=False, gid="value")


@styled
def pairs(exact: Sequence[float], predicted: Sequence[float], least: float) -> Figure:
    """Predicted against exact values, log-log; what is below `least` stands on the edge."""
    figure, (ax,) = canvas(375)
    top = 2 * max([10 * least, *exact, *predicted])
    ax.set(xscale="log", yscale="log", xlim=(least / 1.6, top), ylim=(least / 1.6, top), aspect="equal")
    ax.set(xlabel="exact value, share of the tree's scale", ylabel="scorer's value, the same unit")
    ax.grid(which="major")
    ax.plot([least, top], [least, top], color=DRAWN["quiet"], lw=1, gid="equal")
    ax.plot(
        [max(v, least) for v in exact],
        [max(v, least) for v in predicted],
        "o", ms=3.2, mfc=DRAWN["scorer"], mec=DRAWN["scorer"], mew=0, alpha=0.4, gid="pairs",
    )  # fmt: skip
    for axis in (ax.xaxis, ax.yaxis):
        log_ticks(axis, (least, top))
    return figure
