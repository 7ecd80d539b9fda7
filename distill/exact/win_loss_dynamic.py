"""Dynamic value (h infinite) of trials at win/loss leaves; floor 2.

With endless rollouts to come every win rate will be known, so a group of leaves to choose from is worth
V = E max of Y_j = low_j + width_j p_j: one integral over a product of beta distribution functions, on
panels that all leaves of the group share (`beta_panels`). Each leaf's trials then cost one walk
(`win_loss_walk`), and a leaf that is alone in its group one walk without any integral (`trial_walk`).
Below chance nodes that follow a choice, what the others add to a leaf comes from `win_loss_later`, a table
for each leaf.
"""

from __future__ import annotations

import itertools
import math

import numpy as np
from scipy.special import betainc

from distill.errors import RefusedError
from distill.exact.beta_panels import (
    N,
    X,
    best_of_rest,
    cut_panels,
    distribution_functions,
    expected_gain,
    floor_of,
)
from distill.exact.win_loss_groups import Choice, Group, price_groups
from distill.exact.win_loss_later import NARROW, Curve, Later, curves
from distill.exact.win_loss_static import price_crossings
from distill.exact.win_loss_walk import Race, endless_gain, expected_gap, reachable_gap, walk
from distill.numerics import compiled
from distill.query import Priced, Query
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["METHOD", "price_dynamic"]

METHOD = "win/loss, dynamic: beta panels and crossing sum"

# Longest walk a leaf; beyond, VOC(k) lies between VOC(_MAX_WALK) and VOC(infinity), and the error says so.
_MAX_WALK = 2**17
_MAX_NUMBERS = 2**26  # leaves x nodes of one group: half a gigabyte a table
_SLACK = 1.0 + 1e-6  # on the worth of endless trials, which only bounds
_EPS = 2.0**-52


def price_dynamic(tree: BeliefTree, query: Query) -> Priced:
    """VOC_inf or RATE_inf of every win/loss leaf, any batch, any tree.

    The error covers the panels' fit, the lattice below chance nodes that follow a choice, roundings, and for
    more than 2^17 trials the gap to what endless trials would buy. Raises RefusedError where one group's
    tables would not fit.
    """
    return price_groups(tree, query, _choice, METHOD)


def _choice(group: Group | Later) -> Choice:
    return _Tables(group) if isinstance(group, Group) else _LaterTables(group)


class _Tables:
    """A group's V, and the table of what the others add to each leaf."""

    def __init__(self, group: Group) -> None:
        a, b, low, width = self.leaves = group.a, group.b, group.low, group.width
        mean = low + width * (a / (a + b))
        best = int(np.argmax(mean))
        self.value, self.error = float(mean[best]), _EPS * float(abs(mean[best]))
        self.lone = len(a) == 1 and group.sure == -math.inf
        if self.lone:
            return
        floor = max(group.sure, floor_of(a, b, low, width))
        if floor >= np.max(low + width):  # the sure value is beyond every leaf
            self.value, self.error, self.hopeless = group.sure, _EPS * abs(group.sure), True
            return
        self.start = np.asarray(betainc(a, b, np.clip((floor - low) / width, 0.0, 1.0)))
        panels = cut_panels(a, b, low, width, floor)
        if len(panels[0]) == 0 or len(a) * len(panels[0]) * 16 > _MAX_NUMBERS:
            raise RefusedError(f"win/loss, dynamic: {len(a)} leaves to choose from need too many panels")
        below, above, defect = distribution_functions(a, b, low, width, self.start, *panels)
        gain = expected_gain(a, b, low, width, self.start, below, above, *panels, best)
        inside, edge, misfit = best_of_rest(below, above, panels[1], panels[2])
        self.tables = (*panels, inside, edge)
        # Dividing by the total takes out most of what it was off by; half of that is allowed for.
        self.table_error = misfit + (0.5 * float(defect.sum()) + _EPS) * np.abs(edge[:, 0])
        self.value += gain
        self.error += float(self.table_error[best]) if gain > 0 else 0.0

    hopeless = False

    def price(self, rival: float, slack: float, query: Query) -> tuple[Floats, Ints, Floats]:
        """Worth, batch and error of trials on every leaf; see `win_loss_groups.Choice`."""
        a, b, low, width = self.leaves
        if query.rate and query.remaining == 0:
            return np.zeros(len(a)), np.zeros(len(a), dtype=np.int64), np.zeros(len(a))
        if self.hopeless:
            rival = -math.inf
        if self.lone or rival == -math.inf:
            worth, batch, error = price_crossings(a, b, (rival - low) / width, slack / width + _EPS, query)
            return width * worth, batch, width * error
        last = query.remaining if query.batch is None else query.batch
        assert last is not None
        walked = min(last, _MAX_WALK)
        return _price_leaves(
            a,
            b,
            low,
            width,
            self.value,
            rival,
            slack,
            self.table_error,
            self.start,
            *self.tables,
            query.rate,
            last,
            walked,
        )


class _LaterTables:
    """The same for a group with chance nodes below its choice: a table for each leaf."""

    def __init__(self, group: Later) -> None:
        self.group = group
        self.value, self.error, self.curves = curves(group, math.inf)

    def price(self, rival: float, slack: float, query: Query) -> tuple[Floats, Ints, Floats]:
        """Worth, batch and error of trials on every leaf; see `win_loss_groups.Choice`."""
        group, n = self.group, len(self.group.a)
        last = query.remaining if query.batch is None else query.batch
        assert last is not None
        voc, error = np.zeros(n), np.zeros(n)
        batch = np.full(n, min(last, 1) if query.rate else last, dtype=np.int64)
        if last == 0 or rival == -math.inf:
            return voc, batch, error
        for i, curve in enumerate(self.curves):
            if group.width[i] <= NARROW * abs(group.low[i]):
                error[i] = group.width[i]
                continue
            one = slice(i, i + 1)
            a, b, low, width = group.a[one], group.b[one], group.low[one], group.width[one]
            anchor, left, right, inside, edge = _curve_panels(a, b, low, width, curve)
            # Against a rival of 0 the leaf is worth `value`; what the others add besides is the rest.
            value = expected_gap(a[0], b[0], Race(low[0], width[0], 0.0, anchor, left, right, inside, edge))
            off = self.error + curve.error
            found = _price_leaves(
                a, b, low, width, value, value + (rival - self.value), slack, np.array([off]), np.zeros(1),
                anchor, left, right, inside[None], edge[None], query.rate, last, min(last, _MAX_WALK),
            )  # fmt: skip
            voc[i], batch[i], error[i] = (float(x[0]) for x in found)
            if error[i] > 0 and abs(rival - self.value) <= off + slack:  # which is best now is in doubt
                error[i] += (off + slack) / (batch[i] if query.rate else 1)
        return voc, batch, error


_PANEL = 4  # knots of a curve that a panel spans


def _curve_panels(
    a: Floats, b: Floats, low: Floats, width: Floats, curve: Curve
) -> tuple[Floats, Floats, Floats, Floats, Floats]:
    """Panels that fit one leaf's density and its curve: anchor, left, right, T at nodes, T at edges."""
    rows: list[tuple[float, float, float]] = []
    first, last = float(curve.y[0]), float(curve.y[-1])
    widest = _PANEL * float(curve.y[1] - curve.y[0])
    for anchor, d0, d1 in np.column_stack(cut_panels(a, b, low, width, float(low[0]))).tolist():
        cuts = [d0, *(x - anchor for x in (first, last) if d0 < x - anchor < d1), d1]
        for left, right in itertools.pairwise(cuts):
            inside = anchor + right > first and anchor + left < last
            pieces = max(1, math.ceil((right - left) / widest)) if inside else 1
            ends = np.linspace(left, right, pieces + 1)
            rows += [(anchor, x, y) for x, y in itertools.pairwise(ends.tolist()) if y > x]
    anchor, left, right = (np.ascontiguousarray(x) for x in np.array(rows).T)
    half, middle = 0.5 * (right - left), 0.5 * (left + right)
    nodes = (anchor + middle)[:, None] + half[:, None] * X
    edge = curve.at(np.append(anchor + left, anchor[-1] + right[-1]))
    return anchor, left, right, curve.at(nodes.ravel()).reshape(-1, N), edge


@compiled
def _price_leaves(
    a: Floats,
    b: Floats,
    low: Floats,
    width: Floats,
    value: float,
    rival: float,
    slack: float,
    table_error: Floats,
    start: Floats,
    anchor: Floats,
    left: Floats,
    right: Floats,
    inside: Floats,
    edge: Floats,
    rate: bool,
    last: int,
    walked: int,
) -> tuple[Floats, Ints, Floats]:
    """VOC of `last` trials, or the best rate up to them, on every leaf of one action; at most `walked` trials
    are followed, what lies beyond is bounded by endless trials."""
    n_leaves = len(a)
    voc, error = np.zeros(n_leaves), np.zeros(n_leaves)
    batch = np.full(n_leaves, 1 if rate else last, dtype=np.int64)
    for i in range(n_leaves):
        race = Race(low[i], width[i], rival, anchor, left, right, inside[i], edge[i])
        off = slack + table_error[i]
        # G has slope 1 at most, so h moves by no more than the leaf's mean does.
        n = a[i] + b[i]
        reach = width[i] * (last / (n + last)) * ((a[i] if value >= rival else b[i]) / n)
        if abs(value - rival) > reach * _SLACK + off:
            continue
        worst, best, crossing = reachable_gap(race)
        if worst >= 0.0 or best <= 0.0:  # no outcome changes the choice
            if min(abs(worst), abs(best)) <= off:
                error[i] = off
            continue
        limit = math.inf
        if rate or last > walked:
            limit = endless_gain(a[i], b[i], crossing, value >= rival, start[i], race) * _SLACK + off
        first = 1 if rate else walked
        gain, k, seen, err = walk(a[i], b[i], first, walked, limit, off, race)
        if rate:
            voc[i], batch[i], error[i] = gain / k, k, err / k
            if seen < last:
                error[i] += max(limit / (seen + 1.0) - voc[i], 0.0)
        else:
            gap = max(limit - gain, 0.0) if last > walked else 0.0
            voc[i], error[i] = gain + 0.5 * gap, err + 0.5 * gap
    return voc, batch, error
