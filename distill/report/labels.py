"""Names beside what they name: near it where there is room, else further off with a thin line; floor 7."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any, Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.lines import Line2D

from distill.report.theme import DRAWN, SMALL, one_line
from distill.tree import Floats

__all__ = ["LONGEST", "Label", "place"]

LONGEST: Final = 34  # characters of a name in a picture; tables have the whole


@dataclass(frozen=True)
class Label:
    """A name that stands beside one of these points, or on a line across at `across`."""

    name: str
    points: Sequence[tuple[float, float]]
    role: str
    across: float | None = None
    bold: bool = False


# Offset of the text's middle from the point, in units, as (sign across, sign up): beside it first.
_AROUND: Final = (
    (1, 0), (-1, 0), (1, 1), (1, -1), (-1, 1), (-1, -1), (0, 1), (0, -1),
)  # fmt: skip
_RINGS: Final = tuple(range(18, 420, 12))  # units from the point to the text's middle
_TURNS: Final = tuple(2 * math.pi * i / 16 for i in range(16))
_AWAY: Final = 0.4  # square units that a label may rather hide of lines than stand a unit further off
_GAP: Final = 2.5  # units between texts
_LEADER_FROM: Final = 9.0  # units between a text's edge and its point from which a line joins them


def place(ax: Axes, labels: Sequence[Label]) -> None:
    """Each name where it hides least; no name touches another or leaves the axes.

    A name that finds no place is left out: with dozens in one picture, the tables have them all.
    """
    figure = ax.get_figure(root=True)
    assert figure is not None
    figure.draw_without_rendering()
    figure.set_layout_engine("none")  # labels must not move the axes any more
    renderer = FigureCanvasAgg(figure).get_renderer()  # type: ignore[no-untyped-call]
    unit, whole = figure.dpi / 72, 72 * figure.get_size_inches()
    inside = np.array(ax.get_window_extent(renderer).extents) / unit
    lines = np.vstack([np.empty((0, 4)), *(_covered(line, unit) for line in ax.lines)])
    texts = np.empty((0, 4))
    for label in sorted(labels, key=lambda one: one.across is None):
        text = ax.text(
            0.5, 0.5, one_line(label.name, LONGEST), fontsize=SMALL, color=DRAWN[label.role],
            fontweight="bold" if label.bold else "normal", ha="center", va="center", transform=ax.transAxes,
        )  # fmt: skip
        extent = text.get_window_extent(renderer)
        size = np.array([extent.width, extent.height]) / unit
        middles, points = (
            _across(ax, label, size, unit, inside)
            if label.across is not None
            else _near(ax, label, size, unit)
        )
        boxes = np.hstack([middles - size / 2, middles + size / 2])
        best = _best(boxes, points, inside, texts, lines)
        if best is None:
            text.remove()
            continue
        # Shares of the figure: the SVG has other pixels than the renderer that measured.
        text.set_transform(figure.transFigure)
        text.set_position(tuple(middles[best] / whole))
        texts = np.vstack([texts, boxes[best]])
        end = _edge(boxes[best], points[best])
        if math.dist(points[best], end) > _LEADER_FROM:
            lines = np.vstack([lines, _along(points[best], end, 2.5)])
            xs, ys = np.transpose([points[best] / whole, end / whole])
            leader = Line2D(xs, ys, color=DRAWN["quiet"], lw=0.7, transform=figure.transFigure, gid="leader")
            figure.add_artist(leader)


def _best(boxes: Floats, points: Floats, inside: Floats, texts: Floats, lines: Floats) -> int | None:
    """Which of a name's boxes hides least of the lines, near its point; None where none is free."""
    fits = (boxes[:, :2] >= inside[:2]).all(axis=1) & (boxes[:, 2:] <= inside[2:]).all(axis=1)
    fits &= _shared(boxes + np.array([-_GAP, -_GAP, _GAP, _GAP]), texts) == 0
    order = np.flatnonzero(fits)
    away = np.hypot(*_apart(boxes[order], points[order]).T)
    led = away > _LEADER_FROM
    harm = _shared(boxes[order], lines) + _AWAY * away * (1 + led)
    ranked = np.argsort(harm, kind="stable")

    def clear(i: int) -> bool:
        """Whether no line is needed, or none through another name."""
        at = order[i]
        return not led[i] or not _shared(_along(points[at], _edge(boxes[at], points[at])), texts).any()

    return next((int(order[i]) for i in ranked if clear(i)), int(order[ranked[0]]) if len(ranked) else None)


def _near(ax: Axes, label: Label, size: Floats, unit: float) -> tuple[Floats, Floats]:
    """Middles of a text beside its points and in rings around the middle one, and the point of each."""
    spots: Any = ax.transData.transform(np.asarray(label.points, float)) / unit
    near = np.array(
        [(x * (size[0] / 2 + 7 - 2 * abs(y)), y * (size[1] / 2 + (3 if x else 6))) for x, y in _AROUND]
    )
    # Wider than high, as names are.
    ring = [(r * math.cos(t) * (1 + size[0] / 120), r * math.sin(t)) for r in _RINGS for t in _TURNS]
    centre = spots[len(spots) // 2]
    middles = np.vstack([(spots[:, None, :] + near).reshape(-1, 2), centre + np.array(ring)])
    points = np.vstack([np.repeat(spots, len(near), axis=0), np.tile(centre, (len(ring), 1))])
    return middles, points


def _across(ax: Axes, label: Label, size: Floats, unit: float, inside: Floats) -> tuple[Floats, Floats]:
    """Middles of a text on a line across: right end, left end, between; above and below."""
    assert label.across is not None
    y = ax.transData.transform((ax.get_xlim()[0], label.across))[1] / unit
    left, right = inside[0] + 4 + size[0] / 2, inside[2] - 2 - size[0] / 2
    middles = np.array(
        [(x, y + side * (size[1] / 2 + 1)) for x in np.linspace(right, left, 9) for side in (1, -1)]
    )
    return middles, middles


def _apart(boxes: Floats, points: Floats) -> Floats:
    """From each box to its point, across and up; 0 where the box covers it."""
    return np.maximum(np.maximum(boxes[:, :2] - points, points - boxes[:, 2:]), 0)


def _edge(box: Floats, point: Floats) -> Floats:
    """The place of a box that is nearest to a point."""
    return np.clip(point, box[:2], box[2:])


def _along(start: Floats, end: Floats, radius: float = 0.7) -> Floats:
    """Small boxes along a straight line, its start left out: that is the point itself."""
    n = max(2, int(math.dist(start, end) / 3))
    middles = start + np.linspace(0.15, 0.95, n)[:, None] * (end - start)
    return np.hstack([middles - radius, middles + radius])


def _covered(line: Line2D, unit: float) -> Floats:
    """Small boxes along a line, rows of left, bottom, right, top in units.

    One box around a slanted line would cover what the line does not.
    """
    corners: Any = line.get_transform().transform(line.get_xydata()) / unit
    radius = 1 + line.get_markersize() / 2 if line.get_marker() != "None" else 2.2
    parts = [corners]
    if line.get_linestyle() != "None":
        for start, end in pairwise(corners):
            parts.append(
                start + np.linspace(0, 1, 2 + int(math.dist(start, end) / 5))[:, None] * (end - start)
            )
    middles = np.vstack(parts)
    return np.hstack([middles - radius, middles + radius])


def _shared(boxes: Floats, others: Floats) -> Floats:
    """Area that each box shares with all the others, added up."""
    if not len(others):
        return np.zeros(len(boxes))
    width = np.minimum(boxes[:, None, 2], others[:, 2]) - np.maximum(boxes[:, None, 0], others[:, 0])
    height = np.minimum(boxes[:, None, 3], others[:, 3]) - np.maximum(boxes[:, None, 1], others[:, 1])
    return np.asarray(np.sum(np.maximum(width, 0) * np.maximum(height, 0), axis=1))
