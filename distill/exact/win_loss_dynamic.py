"""Dynamic value (h infinite) of trials at win/loss leaves under decision nodes; floor 2.

With endless rollouts to come every win rate will be known, so an action is worth V = E max of its leaves'
Y_j = low_j + width_j p_j: one integral over a product of beta distribution functions, on panels that all
leaves of the action share (`beta_panels`). Each leaf's trials then cost one walk (`win_loss_walk`), and a
leaf that is alone in its action one walk without any integral (`trial_walk`).
"""

from __future__ import annotations

import math

import numpy as np
from scipy.special import betainc

from distill.errors import RefusedError
from distill.exact.beta_panels import (
    best_of_rest,
    cut_panels,
    distribution_functions,
    expected_gain,
    floor_of,
)
from distill.exact.win_loss_static import price_crossings
from distill.exact.win_loss_walk import Race, endless_gain, reachable_gap, walk
from distill.numerics import compiled
from distill.query import Priced, Query
from distill.tree import BeliefTree, Floats, Ints, leaf_table

__all__ = ["METHOD", "price_dynamic"]

METHOD = "win/loss, dynamic: beta panels and crossing sum"

# Longest walk a leaf; beyond, VOC(k) lies between VOC(_MAX_WALK) and VOC(infinity), and the error says so.
_MAX_WALK = 2**17
_MAX_NUMBERS = 2**27  # leaves x nodes of one action: 1 GB a table
_SLACK = 1.0 + 1e-6  # on the worth of endless trials, which only bounds
_EPS = 2.0**-52


def price_dynamic(tree: BeliefTree, query: Query) -> Priced:
    """VOC_inf or RATE_inf of every win/loss leaf; decision nodes only, any batch.

    The error covers the panels' fit, roundings, and for more than 2^17 trials the gap to what endless
    trials would buy. Raises RefusedError for chance nodes, and where one action's tables would not fit.
    """
    flat = leaf_table(tree)
    assert flat.alpha is not None
    assert flat.beta is not None
    assert flat.low is not None
    assert flat.high is not None
    a, b = flat.alpha, flat.beta
    width = flat.gain * (flat.high - flat.low)
    low = flat.offset + flat.gain * flat.low
    mean = low + width * (a / (a + b))
    # Values are kept relative to the best mean; the rounding of what was before stays.
    centre = float(mean.max())
    size = 4 * np.abs(flat.offset) + 4 * np.abs(flat.gain * flat.low) + width
    rounding = 0.5 * _EPS * float(np.max(size))
    low = low - centre
    members = [np.flatnonzero(flat.action == x) for x in range(len(tree.action_nodes))]
    tables = [_Action(a[i], b[i], low[i], width[i]) for i in members]
    value = np.array([t.value for t in tables])
    n = len(a)
    voc, error, batch = np.zeros(n), np.zeros(n), np.zeros(n, dtype=np.int64)
    for x, (mine, table) in enumerate(zip(members, tables, strict=True)):
        rivals = [y for y in range(len(tables)) if y != x]
        best = max(rivals, key=value.__getitem__, default=-1)
        rival = float(value[best]) if rivals else -math.inf
        slack = rounding + (max(tables[y].error for y in rivals) if rivals else 0.0)
        voc[mine], batch[mine], error[mine] = table.price(rival, slack, query)
    return Priced(voc, batch, value + centre, error, METHOD)


class _Action:
    """The leaves of one root action: V, and the table of what the others add to each."""

    def __init__(self, a: Floats, b: Floats, low: Floats, width: Floats) -> None:
        self.leaves = a, b, low, width
        mean = low + width * (a / (a + b))
        best = int(np.argmax(mean))
        self.value, self.error = float(mean[best]), _EPS * float(abs(mean[best]))
        if len(a) == 1:
            return
        floor = floor_of(a, b, low, width)
        self.start = np.asarray(betainc(a, b, np.clip((floor - low) / width, 0.0, 1.0)))
        panels = cut_panels(a, b, low, width, floor)
        if len(panels[0]) == 0 or len(a) * len(panels[0]) * 16 > _MAX_NUMBERS:
            raise RefusedError(f"win/loss, dynamic: {len(a)} leaves of one action need too many panels")
        below, above, defect = distribution_functions(a, b, low, width, self.start, *panels)
        inside, edge, misfit = best_of_rest(below, above, panels[1], panels[2])
        gain = expected_gain(a, b, low, width, self.start, below, above, *panels, best)
        self.tables = (*panels, inside, edge)
        # Dividing by the total takes out most of what it was off by; half of that is allowed for.
        self.table_error = misfit + (0.5 * float(defect.sum()) + _EPS) * np.abs(edge[:, 0])
        self.value += gain
        self.error += float(self.table_error[best]) if gain > 0 else 0.0

    def price(self, rival: float, slack: float, query: Query) -> tuple[Floats, Ints, Floats]:
        """Worth, batch and error of trials on every leaf; rival: value of the best other action."""
        a, b, low, width = self.leaves
        if query.rate and query.remaining == 0:
            return np.zeros(len(a)), np.zeros(len(a), dtype=np.int64), np.zeros(len(a))
        if len(a) == 1 or rival == -math.inf:
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
