"""Figures in our units, and logarithmic axes with ticks that can be read; floor 7."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from typing import Any, Final

from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import NullLocator

from distill.report.theme import raised

__all__ = ["WIDTH", "above", "canvas", "floor_of", "log_ticks"]

WIDTH: Final = 390.0  # units; a phone shows one at 0.9 pixel, a desk at 1.35
_FEWEST, _MOST = 3, 8  # ticks of an axis
# Ticks within a decade, from few to many: the first set that gives enough is taken.
_WITHIN: Final = (
    (1.0,),
    (1.0, 3.0),
    (1.0, 2.0, 5.0),
    (1.0, 1.5, 2.0, 3.0, 5.0, 7.0),
    tuple(i / 2 for i in range(2, 20)),
    tuple(i / 5 for i in range(5, 50)),
)
_DEEPEST: Final = 30.0  # an interval may stretch a log axis so far below its figure, and no further


def canvas(height: float, rows: Sequence[float] = (1,), *, width: float = WIDTH) -> tuple[Figure, list[Axes]]:
    """A figure in units of 1/72 inch, so that the SVG's user units are ours; axes below one another."""
    figure = Figure(figsize=(width / 72, height / 72))
    figure.patch.set_visible(False)
    axes = figure.subplots(len(rows), 1, squeeze=False, gridspec_kw={"height_ratios": list(rows)})[:, 0]
    for ax in axes:
        ax.patch.set_visible(False)
    return figure, list(axes)


def floor_of(values: Iterable[float | None], lows: Iterable[float | None] = ()) -> float:
    """The lower edge of a log axis: half the least value above 0, or of the ends of intervals near them."""
    least = min((v for v in values if v is not None and v > 0), default=1.0)
    ends = [max(v, least / _DEEPEST) for v in lows if v is not None and v > 0]
    return min([least, *ends]) / 2


def above(value: float | None, floor: float) -> float:
    """Where a value stands on a log axis: what is below its lower edge stands on it."""
    assert value is not None
    return max(value, floor)


def log_ticks(axis: Any, limits: tuple[float, float], zero_at: float | None = None) -> None:
    """From three to eight ticks: powers of ten over many decades, round numbers between over few.

    zero_at : the lower edge, where it stands for 0.
    """
    low, high = limits
    powers = range(math.floor(math.log10(low)) - 1, math.ceil(math.log10(high)) + 1)
    inside = low * (1 if zero_at is None else 1.5), high
    ticks: list[float] = []
    for within in _WITHIN:
        ticks = [t for k in powers for m in within if inside[0] <= (t := m * 10.0**k) <= inside[1]]
        if len(ticks) >= _FEWEST:
            break
    if len(ticks) > _MOST:
        step = math.ceil(len(ticks) / _MOST)
        last = math.floor(math.log10(high) + 1e-9)
        ticks = (
            [t for t in ticks if round(math.log10(t) - last) % step == 0]
            if within == (1.0,)
            else ticks[::step]
        )
    plain = all(t > 0.99e-4 for t in ticks)
    texts = [_tick_text(t, plain) for t in ticks]
    if zero_at is not None:
        ticks, texts = [zero_at, *ticks], ["0", *texts]
    axis.set_ticks(ticks, texts)
    axis.set_minor_locator(NullLocator())


def _tick_text(x: float, plain: bool) -> str:
    """A tick's text: a plain number, or a power of ten where small ticks of the axis need it."""
    if x >= 1:
        return f"{x:,.10g}"
    if plain:
        return f"{x:.5f}".rstrip("0")
    power = math.floor(math.log10(x) + 1e-9)
    times = f"{x / 10.0**power:.3g}"
    return f"{times}\u00b7" * (times != "1") + f"10{raised(power)}"
