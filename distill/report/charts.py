"""The kinds of pictures: a front, bars, pairs. They draw what they are given and compute nothing; floor 7."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from typing import Any, Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.ticker import NullLocator

from distill.report.theme import DRAWN, SMALL, one_line, raised, styled
from distill.tree import Floats

__all__ = ["Bar", "Peer", "Point", "bars", "front", "pairs", "WIDTH"]

WIDTH: Final = 390.0  # units; a phone shows one at 0.9 pixel, a desk at 1.35
_LONGEST_ROW, _LONGEST_LABEL = 34, 24  # characters of a name

# --- what is drawn ---------------------------------------------------------------------------------


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
class Bar:
    """A row of a bar chart: name, value with the ends of a thin line, and the text that states them."""

    name: str = field(kw_only=False)
    value: float | None = field(kw_only=False)
    low: float | None = field(kw_only=False)
    high: float | None = field(kw_only=False)
    text: str
    role: str


@styled
def front(
    points: Sequence[Point],
    peers: Sequence[Peer],
    *,
    x_label: str,
    y_label: str,
    width: float = WIDTH,
    height: float = 340,
) -> Figure:
    """Loss against decision time, both on log axes; points marked `joined` are joined in order of time.

    A log axis has no 0: a loss of 0 stands on the lower edge, which is labelled 0, and so do the ends of
    intervals that reach it. Points without a loss are left out.
    """
    figure, (ax,) = _figure(width, height)
    shown = sorted((p for p in points if p.y is not None), key=lambda p: p.x)
    seen = [v for p in shown for v in (p.y, p.low, p.high)] + [p.y for p in peers]
    floor = _floor(seen)
    ax.set(xscale="log", yscale="log", xlabel=x_label, ylabel=y_label)
    ax.grid(which="major")
    line = [p for p in shown if p.joined]
    ax.plot(
        [p.x for p in line], [_above(p.y, floor) for p in line], color=DRAWN["scorer"], lw=1.4, gid="front"
    )
    labels: list[_Label] = []
    for p in shown:
        y = _above(p.y, floor)
        if p.low is not None and p.high is not None:
            ends = [_above(p.low, floor), _above(p.high, floor)]
            ax.plot([p.x, p.x], ends, color=DRAWN["scorer"], lw=1.2, alpha=0.6, gid="interval")
        if p.chosen:
            ax.plot([p.x], [y], "o", ms=13, mfc="none", mec=DRAWN["scorer"], mew=1.2, clip_on=False)
        fill = DRAWN["scorer" if p.joined else "paper"]
        ax.plot([p.x], [y], "o", ms=7, mfc=fill, mec=DRAWN["scorer"], mew=1.4, clip_on=False, gid="scorer")
        labels.append(_Label(p.name, p.x, y, "ink", bold=p.chosen))
    for peer in peers:
        y = _above(peer.y, floor)
        if peer.x is not None:
            ax.plot([peer.x], [y], "D", ms=6, color=DRAWN["peer"], gid="peer")
            labels.append(_Label(peer.name, peer.x, y, "peer"))
        else:
            ax.axhline(y, color=DRAWN["peer"], lw=1.2, ls=(0, (4, 3)), gid="peer")
            labels.append(_Label(peer.name, None, y, "peer"))
    xs = [p.x for p in shown] + [p.x for p in peers if p.x is not None]
    if xs:
        ax.set_xlim(min(xs) / 1.5, max(xs) * 1.5)
    highest = max([floor, *(v for v in seen if v is not None)])
    ax.set_ylim(floor, max(highest * 2, floor * 10))
    _log_ticks(ax.xaxis, ax.get_xlim())
    _log_ticks(ax.yaxis, ax.get_ylim(), zero_at=floor if any(v == 0 for v in seen) else None)
    _place(ax, labels)
    return figure


@styled
def bars(panels: Mapping[str, Sequence[Bar]], *, log: bool = False) -> Figure:
    """Bars, a panel for each title, one axis; each row's name and text stand above its bar.

    Linear axes run from 0 to 100; a log axis starts a bar at the power of ten below all values, at most 1.
    """
    sizes = [len(rows) for rows in panels.values()]
    figure, axes = _figure(WIDTH, 44.0 * sum(sizes) + 56 * len(panels), sizes)
    values = [v for rows in panels.values() for b in rows for v in (b.value, b.low, b.high) if v is not None]
    if log:
        limits = (min(1.0, 10.0 ** math.floor(math.log10(_floor(values)))), 1.3 * max([10.0, *values]))
    else:
        limits = (0.0, 100.0)
    for ax, (title, rows) in zip(axes, panels.items(), strict=True):
        ax.set_title(title)
        if log:
            ax.set_xscale("log")
        ax.set(xlim=limits, ylim=(len(rows), -0.1))
        ax.grid(axis="x")
        ax.spines["left"].set_visible(False)
        ax.yaxis.set_major_locator(NullLocator())
        for i, row in enumerate(rows):
            _bar(ax, i, row, limits[0])
        if log:
            _log_ticks(ax.xaxis, limits)
        else:
            ax.set_xticks([0, 25, 50, 75, 100])
    return figure


def _bar(ax: Axes, i: int, row: Bar, start: float) -> None:
    middle, to_axis = i + 0.68, ax.get_yaxis_transform()
    ax.text(0, i + 0.38, one_line(row.name, _LONGEST_ROW), transform=to_axis, fontsize=SMALL)
    ax.text(1, i + 0.38, row.text, transform=to_axis, ha="right", fontsize=SMALL, color=DRAWN["quiet"])
    if row.value is not None:
        ax.barh([middle], [row.value - start], left=start, height=0.34, color=DRAWN[row.role], gid="bar")
    if row.low is not None and row.high is not None:
        ax.plot([row.low, row.high], [middle, middle], color=DRAWN["ink"], lw=1.2, gid="interval")
        ax.plot([row.low, row.high], [middle, middle], "|", color=DRAWN["ink"], ms=6, mew=1.2)


@styled
def pairs(exact: Sequence[float], predicted: Sequence[float], least: float) -> Figure:
    """Predicted against exact values, log-log; what is below `least` stands on the edge."""
    figure, (ax,) = _figure(WIDTH, 375)
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
        _log_ticks(axis, (least, top))
    return figure


# --- axes and labels -------------------------------------------------------------------------------


def _figure(width: float, height: float, rows: Sequence[int] = (1,)) -> tuple[Figure, list[Axes]]:
    """A figure in units of 1/72 inch, so that the SVG's user units are ours; axes below one another."""
    figure = Figure(figsize=(width / 72, height / 72))
    figure.patch.set_visible(False)
    heights = [r + 0.1 for r in rows]
    axes = figure.subplots(len(rows), 1, squeeze=False, gridspec_kw={"height_ratios": heights})[:, 0]
    for ax in axes:
        ax.patch.set_visible(False)
    return figure, list(axes)


def _floor(values: Iterable[float | None]) -> float:
    """The lower edge of a log axis: half the least value above 0."""
    return min((v for v in values if v is not None and v > 0), default=1.0) / 2


def _above(value: float | None, floor: float) -> float:
    assert value is not None
    return max(value, floor)


def _log_ticks(axis: Any, limits: tuple[float, float], zero_at: float | None = None) -> None:
    """Ticks at 1, 2, 5 over less than two decades, at powers of ten over more, at most about seven."""
    decades = math.log10(limits[1] / limits[0])
    step = max(1, math.ceil(decades / 7))
    ticks = [
        m * 10.0**k
        for k in range(math.floor(math.log10(limits[0])), math.ceil(math.log10(limits[1])) + 1)
        for m in ((1, 2, 5) if decades < 2 else (1,))
        if k % step == 0 and limits[0] <= m * 10.0**k <= limits[1]
    ]
    if zero_at is not None:
        ticks = [t for t in ticks if t > 1.5 * zero_at]
    plain = all(t > 0.99e-4 for t in ticks)
    texts = [_tick_text(t, plain) for t in ticks]
    if zero_at is not None:
        ticks, texts = [zero_at, *ticks], ["0", *texts]
    axis.set_ticks(ticks, texts)
    axis.set_minor_locator(NullLocator())


def _tick_text(x: float, plain: bool) -> str:
    """A tick's text: a plain number, or a power of ten where small ticks of the axis need it."""
    if x >= 1:
        return f"{x:,.0f}"
    if plain:
        return f"{x:.4f}".rstrip("0")
    power = math.floor(math.log10(x) + 1e-9)
    times = round(x / 10.0**power)
    return f"{times}\u00b7" * (times > 1) + f"10{raised(power)}"


@dataclass(frozen=True)
class _Label:
    """A text beside a point, or on a line across (`x` None)."""

    name: str
    x: float | None
    y: float
    role: str
    bold: bool = False


_BESIDE: Final = (
    (9, 0, "left", "center"), (-9, 0, "right", "center"), (6, 6, "left", "bottom"), (6, -6, "left", "top"),
    (-6, 6, "right", "bottom"), (-6, -6, "right", "top"),
    (0, 9, "center", "bottom"), (0, -9, "center", "top"),
    (12, 12, "left", "bottom"), (12, -12, "left", "top"),
    (-12, 12, "right", "bottom"), (-12, -12, "right", "top"),
)  # fmt: skip
_ON_LINE: Final = (
    (1.0, -2, 2, "right", "bottom"), (1.0, -2, -3, "right", "top"),
    (0.0, 4, 2, "left", "bottom"), (0.0, 4, -3, "left", "top"),
    (0.5, 0, 2, "center", "bottom"), (0.5, 0, -3, "center", "top"),
)  # fmt: skip


_PER_STEP: Final = 6.0  # square pixels that a label may rather hide than go one place further off


def _place(ax: Axes, labels: Sequence[_Label]) -> None:
    """Each label near its point, where it hides least."""
    figure = ax.get_figure(root=True)
    assert figure is not None
    figure.draw_without_rendering()
    figure.set_layout_engine("none")  # labels must not move the axes any more
    renderer = FigureCanvasAgg(figure).get_renderer()  # type: ignore[no-untyped-call]
    inside = np.array(ax.get_window_extent(renderer).extents)
    taken = np.vstack([np.empty((0, 4)), *(_covered(line) for line in ax.lines)])
    for label in sorted(labels, key=lambda one: one.x is not None):
        best: tuple[float, Any, Floats] | None = None
        for nth, text in enumerate(_attempts(ax, label)):
            box = np.array(text.get_window_extent(renderer).extents)
            outside = _overlap(box, box[None]) - _overlap(box, inside[None])
            harm = _overlap(box, taken) + 2 * outside + _PER_STEP * nth
            if best is None or harm < best[0] - 1e-6:
                if best is not None:
                    best[1].remove()
                best = (harm, text, box)
            else:
                text.remove()
        assert best is not None
        taken = np.vstack([taken, best[2]])


def _covered(line: Line2D) -> Floats:
    """Small boxes along a line, rows of left, bottom, right, top in pixels.

    One box around a slanted line would cover what the line does not.
    """
    corners = line.get_transform().transform(line.get_xydata())
    radius = 1 + line.get_markersize() / 2 if line.get_marker() != "None" else 1.5
    parts = [corners]
    for start, end in pairwise(corners):
        parts.append(start + np.linspace(0, 1, 2 + int(math.dist(start, end) / 4))[:, None] * (end - start))
    middles = np.vstack(parts)
    return np.hstack([middles - radius, middles + radius])


def _overlap(box: Floats, others: Floats) -> float:
    """Area that a box shares with the others, added up."""
    width = np.minimum(box[2], others[:, 2]) - np.maximum(box[0], others[:, 0])
    height = np.minimum(box[3], others[:, 3]) - np.maximum(box[1], others[:, 1])
    return float(np.sum(np.maximum(width, 0) * np.maximum(height, 0)))


def _attempts(ax: Axes, label: _Label) -> Iterable[Any]:
    style: dict[str, Any] = {
        "fontsize": SMALL,
        "color": DRAWN[label.role],
        "fontweight": "bold" if label.bold else "normal",
        "textcoords": "offset points",
    }
    name = one_line(label.name, _LONGEST_LABEL)
    if label.x is None:
        for x, dx, dy, ha, va in _ON_LINE:
            at: dict[str, Any] = {
                "xycoords": ax.get_yaxis_transform(),
                "xytext": (dx, dy),
                "ha": ha,
                "va": va,
            }
            yield ax.annotate(name, (x, label.y), **at, **style)
    else:
        for dx, dy, ha, va in _BESIDE:
            yield ax.annotate(name, (label.x, label.y), xytext=(dx, dy), ha=ha, va=va, **style)
