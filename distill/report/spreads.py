"""Pictures of distributions: quantile bars side by side, histograms, a normal plot, intervals; floor 7.

They draw what they are given and compute nothing but where it stands.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator, NullLocator
from scipy.special import ndtri

from distill.report.axes import canvas
from distill.report.theme import DRAWN, SMALL, one_line, raised, styled

__all__ = ["Span", "histogram", "normal_plot", "quantile_bars", "spans"]

_LONGEST: Final = 34


@dataclass(frozen=True)
class Span:
    """A value with its interval, None where there is none, and the text that states them."""

    name: str
    value: float | None
    low: float | None
    high: float | None
    text: str
    role: str


@styled
def quantile_bars(panels: Mapping[str, tuple[Sequence[float], Sequence[float], str]]) -> Figure:
    """A panel for each name: two rows of five quantiles (5, 25, 50, 75, 95 %), and a text.

    The upper row of a panel has the scorer's colour, the lower the peer's; an empty row stays empty.
    """
    figure, axes = canvas(62.0 * len(panels) + 10, [1] * len(panels))
    for ax, (name, (first, second, text)) in zip(axes, panels.items(), strict=True):
        ax.text(0, 1.04, one_line(name, _LONGEST), transform=ax.transAxes, fontsize=SMALL, va="bottom")
        ax.text(
            1,
            1.04,
            text,
            transform=ax.transAxes,
            fontsize=SMALL,
            va="bottom",
            ha="right",
            color=DRAWN["quiet"],
        )
        for y, row, role in ((0.0, first, "scorer"), (1.0, second, "peer")):
            if len(row) != 5:
                continue
            a, b, middle, c, d = row
            ax.plot([a, d], [y, y], color=DRAWN[role], lw=1.2, gid="outer")
            ax.plot([b, c], [y, y], color=DRAWN[role], lw=6, alpha=0.45, solid_capstyle="butt", gid="inner")
            ax.plot([middle], [y], "o", ms=5, color=DRAWN[role], gid="median")
        ax.set(ylim=(1.7, -0.7))
        _plain_axis(ax)
        only = {*first, *second}
        if len(only) == 1:
            ax.set_xticks(list(only))
    return figure


@styled
def histogram(edges: Sequence[float], counts: Sequence[float], *, x_label: str, role: str) -> Figure:
    """Counts between edges that are decades; the axis names powers of ten."""
    figure, (ax,) = canvas(240)
    if counts:
        ax.bar(
            edges[:-1], counts, np.diff(edges), align="edge", color=DRAWN[role], alpha=0.8, lw=0, gid="bar"
        )
        step = max(1, math.ceil((edges[-1] - edges[0]) / 7))
        ticks = [k for k in range(math.ceil(edges[0]), math.floor(edges[-1]) + 1) if k % step == 0]
        ax.set_xticks(ticks, [f"10{raised(k)}" for k in ticks])
        ax.set_xlim(edges[0], edges[-1])
    ax.grid(axis="y")
    ax.set(xlabel=x_label, ylabel="candidates")
    ax.yaxis.set_major_locator(MaxNLocator(4, integer=True))
    ax.yaxis.set_major_formatter(lambda x, _: f"{x:,.0f}")
    return figure


@styled
def normal_plot(sample: Sequence[float]) -> Figure:
    """Sorted values against the quantiles of a standard normal; on the line they would be one."""
    figure, (ax,) = canvas(340)
    n = len(sample)
    expected = ndtri((np.arange(n) + 0.5) / n) if n else np.zeros(0)
    ends = [min([-3.0, *sample]), max([3.0, *sample])]
    inner = [float(min(expected.min(initial=-3), -3)), float(max(expected.max(initial=3), 3))]
    ax.plot(inner, inner, color=DRAWN["quiet"], lw=1, gid="equal")
    ax.plot(expected, sorted(sample), "o", ms=2.6, mew=0, color=DRAWN["scorer"], alpha=0.5, gid="moves")
    ax.set(ylim=(1.05 * ends[0], 1.05 * ends[1]), xlabel="expected of a Gaussian, sd", ylabel="moves, sd")
    ax.grid(which="major")
    return figure


@styled
def spans(panels: Mapping[str, Sequence[Span]], limits: Mapping[str, float]) -> Figure:
    """Values with intervals, a panel for each title; a dashed line where `limits` has one for the panel."""
    figure, axes = canvas(
        sum(34.0 * len(rows) + 64 for rows in panels.values()), [len(rows) + 1 for rows in panels.values()]
    )
    for ax, (title, rows) in zip(axes, panels.items(), strict=True):
        ax.set_title(title)
        seen = [v for s in rows for v in (s.value, s.low, s.high) if v is not None]
        top = max([*seen, limits.get(title, 0.0), 1e-9]) * 1.08
        for y, s in enumerate(rows):
            ax.text(
                0, y - 0.18, one_line(s.name, _LONGEST), transform=ax.get_yaxis_transform(), fontsize=SMALL
            )
            ax.text(
                1, y - 0.18, s.text, transform=ax.get_yaxis_transform(), ha="right", fontsize=SMALL,
                color=DRAWN["quiet"], bbox={"facecolor": DRAWN["paper"], "edgecolor": "none", "pad": 1.5},
            )  # fmt: skip
            if s.low is not None and s.high is not None:
                ax.plot([s.low, s.high], [y + 0.12] * 2, color=DRAWN[s.role], lw=3, alpha=0.5, gid="interval")
            if s.value is not None:
                ax.plot([s.value], [y + 0.12], "o", ms=6, color=DRAWN[s.role], clip_on=False, gid="value")
        if title in limits:
            ax.axvline(limits[title], color=DRAWN["exact"], lw=1.2, ls=(0, (4, 3)), gid="limit")
        ax.set(xlim=(0, top), ylim=(len(rows) - 0.4, -0.7))
        _plain_axis(ax)
    return figure


def _plain_axis(ax: Axes) -> None:
    ax.yaxis.set_major_locator(NullLocator())
    ax.xaxis.set_major_locator(MaxNLocator(4))
    ax.xaxis.set_major_formatter(lambda x, _: f"{x:,.4g}")
    ax.spines["left"].set_visible(False)
    ax.grid(axis="x")
