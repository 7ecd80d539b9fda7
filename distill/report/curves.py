"""Curves over a logarithmic axis, each with its name beside it; floor 7."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from matplotlib.figure import Figure

from distill.report.axes import above, canvas, floor_of, log_ticks
from distill.report.labels import Label, place
from distill.report.theme import DRAWN, styled

__all__ = ["Curve", "curves"]

_DASHES: Final = ((0, ()), (0, (5, 3)), (0, (1.5, 2)), (0, (6, 2, 1.5, 2)), (0, (9, 3)), (0, (3, 1.5)))


@dataclass(frozen=True)
class Curve:
    """A curve: name, x, y, and the ends of intervals where it has them; `dash` tells curves of a role apart.

    `few` : for each point, whether too few cases stand behind it to weigh it like the others.
    A curve without a name has no label.
    """

    name: str
    xs: Sequence[float]
    ys: Sequence[float]
    role: str
    low: Sequence[float] | None = None
    high: Sequence[float] | None = None
    dash: int = 0
    dots: bool = False
    few: Sequence[bool] | None = None


_PLACES = 13  # points of a curve that its name may stand beside


@styled
def curves(
    shown: Sequence[Curve],
    *,
    x_label: str,
    y_label: str,
    log_y: bool = False,
    y_limits: tuple[float, float] | None = None,
    across: tuple[str, float] | None = None,
    height: float = 320,
) -> Figure:
    """Curves over a log x axis. across : name and height of a line across, such as a stated share.

    A log y axis has no 0: what is 0 stands on the lower edge, which is labelled 0.
    """
    figure, (ax,) = canvas(height)
    values = [y for c in shown for y in c.ys]
    lows = [y for c in shown for y in c.low or ()]
    floor = floor_of(values, lows)
    ax.set(xscale="log", xlabel=x_label, ylabel=y_label, yscale="log" if log_y else "linear")
    ax.grid(which="major")
    labels = []
    for c in shown:
        ys = [above(y, floor) for y in c.ys] if log_y else list(c.ys)
        colour, dash = DRAWN[c.role], _DASHES[c.dash % len(_DASHES)]
        ax.plot(c.xs, ys, color=colour, lw=1.6, ls=dash, gid="curve")
        if c.dots:
            for hollow in (False, True):
                at = [i for i in range(len(ys)) if bool(c.few is not None and c.few[i]) == hollow]
                fill = DRAWN["paper"] if hollow else colour
                ax.plot(
                    [c.xs[i] for i in at], [ys[i] for i in at], "o", ms=4.5, mfc=fill, mec=colour, gid="dots"
                )
        if c.low is not None and c.high is not None:
            for x, low, high in zip(c.xs, c.low, c.high, strict=True):
                ends = [above(v, floor) for v in (low, high)] if log_y else [low, high]
                ax.plot([x, x], ends, color=colour, lw=1.2, alpha=0.6, gid="interval")
        if c.name:
            near = sorted({round(i) for i in np.linspace(0, len(ys) - 1, min(_PLACES, len(ys)))})
            labels.append(Label(c.name, [(c.xs[i], ys[i]) for i in near], c.role))
    if across is not None:
        ax.axhline(across[1], color=DRAWN["quiet"], lw=1, ls=(0, (4, 3)), gid="across")
        labels.append(Label(across[0], [], "quiet", across=across[1]))
    xs = [x for c in shown for x in c.xs]
    ax.set_xlim(min(xs) / 1.3, max(xs) * 1.3)
    log_ticks(ax.xaxis, ax.get_xlim())
    if log_y:
        highest = max([*values, *(y for c in shown for y in c.high or ()), floor])
        ax.set_ylim(floor, max(2 * highest, 10 * floor))
        log_ticks(ax.yaxis, ax.get_ylim(), zero_at=floor if any(y == 0 for y in values) else None)
    elif y_limits is not None:
        ax.set_ylim(*y_limits)
    place(ax, labels)
    return figure
