"""Curves over a logarithmic axis, each with its name beside it; floor 7."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

from matplotlib.figure import Figure

from distill.report.charts import WIDTH, _figure, _floor, _Label, _log_ticks, _place
from distill.report.theme import DRAWN, styled

__all__ = ["Curve", "curves"]

_DASHES: Final = ((0, ()), (0, (5, 3)), (0, (1.5, 2)), (0, (6, 2, 1.5, 2)), (0, (9, 3)), (0, (3, 1.5)))


@dataclass(frozen=True)
class Curve:
    """A curve: name, x, y, and the ends of intervals where it has them; `dash` tells curves of a role apart.

    `label_at` : the position of the point that its name stands beside.
    """

    name: str
    xs: Sequence[float]
    ys: Sequence[float]
    role: str
    low: Sequence[float] | None = None
    high: Sequence[float] | None = None
    dash: int = 0
    dots: bool = False
    label_at: int = -1


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
    figure, (ax,) = _figure(WIDTH, height)
    seen = [y for c in shown for y in (*c.ys, *(c.low or ()), *(c.high or ()))]
    floor = _floor(seen)
    ax.set(xscale="log", xlabel=x_label, ylabel=y_label, yscale="log" if log_y else "linear")
    ax.grid(which="major")
    labels = []
    for c in shown:
        ys = [max(y, floor) for y in c.ys] if log_y else list(c.ys)
        dash = _DASHES[c.dash % len(_DASHES)]
        ax.plot(
            c.xs, ys, color=DRAWN[c.role], lw=1.6, ls=dash, marker="o" if c.dots else None, ms=4, gid="curve"
        )
        if c.low is not None and c.high is not None:
            for x, low, high in zip(c.xs, c.low, c.high, strict=True):
                ends = [max(v, floor) for v in (low, high)] if log_y else [low, high]
                ax.plot([x, x], ends, color=DRAWN[c.role], lw=1.2, alpha=0.6, gid="interval")
        labels.append(_Label(c.name, c.xs[c.label_at], ys[c.label_at], c.role))
    if across is not None:
        ax.axhline(across[1], color=DRAWN["quiet"], lw=1, ls=(0, (4, 3)), gid="across")
        labels.append(_Label(across[0], None, across[1], "quiet"))
    xs = [x for c in shown for x in c.xs]
    ax.set_xlim(min(xs) / 1.3, max(xs) * 1.3)
    _log_ticks(ax.xaxis, ax.get_xlim())
    if log_y:
        ax.set_ylim(floor, max(2 * max(seen), 10 * floor))
        _log_ticks(ax.yaxis, ax.get_ylim(), zero_at=floor if any(y == 0 for y in seen) else None)
    elif y_limits is not None:
        ax.set_ylim(*y_limits)
    _place(ax, labels)
    return figure
