"""How far each leaf's mean lies from the point where it changes the best root action; floor 2.

As a function of one leaf's mean x the static root value is max(C, A x + B), A the product of discounts and
probabilities on the way. One pass up finds the values, one pass down A and the signed gap d = A m + B - C of
every node: O(nodes) for all leaves. Going down, only differences between siblings enter, each taken in
double-double arithmetic:

    chance node:    d_child = d_parent
    decision node:  d_child = min(d_parent, A_parent (best - second))        for the best child,
                    d_child = min(d_parent, 0) - A_parent (best - q_child)   for the others.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from distill import schema
from distill.exact import double_double as dd
from distill.numerics import compiled
from distill.tree import Floats, Ints

__all__ = ["RootGaps", "gap_room", "root_gaps"]

_LEAF = schema.LEAF
_CHANCE = schema.CHANCE


class RootGaps(NamedTuple):
    """Columns over nodes, filled by `root_gaps`: A, d, depth, q = r + g V (double-double); working room."""

    slope: Floats
    gap: Floats
    depth: Ints
    total: Floats
    best: Floats
    second: Floats
    chosen: Ints


@compiled
def gap_room(nodes: int) -> RootGaps:
    """Room for trees of up to so many nodes."""
    return RootGaps(
        np.empty(nodes), np.empty(nodes), np.empty(nodes, dtype=np.int64), np.empty((nodes, 2)),
        np.empty((nodes, 2)), np.empty((nodes, 2)), np.empty(nodes, dtype=np.int64),
    )  # fmt: skip


@compiled
def root_gaps(
    parent: Ints,
    kind: NDArray[np.int8],
    reward: Floats,
    discount: Floats,
    prob: Floats,
    mean: Floats,
    out: RootGaps,
) -> float:
    """Fill `out` for one tree, parents before children, mean by leaf; the largest number that entered.

    The differences are off by that x depth x 2^-104 at most. Node 0 gets gap infinity: nothing competes.
    """
    n = len(parent)
    total, best, second, chosen = out.total, out.best, out.second, out.chosen
    leaf = len(mean)
    largest = 0.0
    best[:n] = 0.0
    second[:n] = -math.inf
    chosen[:n] = -1
    for c in range(n - 1, 0, -1):
        if kind[c] == _LEAF:
            leaf -= 1
            best[c, 0] = mean[leaf]
        hi, lo = dd.scale(best[c, 0], best[c, 1], discount[c])
        hi, lo = dd.add(hi, lo, reward[c], 0.0)
        total[c, 0] = hi
        total[c, 1] = lo
        largest = max(largest, abs(best[c, 0]), abs(reward[c]))
        p = parent[c]
        if kind[p] == _CHANCE:
            hi, lo = dd.scale(hi, lo, prob[c])
            hi, lo = dd.add(best[p, 0], best[p, 1], hi, lo)
            best[p, 0] = hi
            best[p, 1] = lo
        elif chosen[p] < 0 or hi > best[p, 0] or (hi == best[p, 0] and lo >= best[p, 1]):
            # >= : children come last to first, and of equals the first is chosen.
            second[p] = best[p] if chosen[p] >= 0 else second[p]
            best[p] = total[c]
            chosen[p] = c
        elif hi > second[p, 0] or (hi == second[p, 0] and lo > second[p, 1]):
            second[p] = total[c]
    slope, gap, depth = out.slope, out.gap, out.depth
    slope[0] = 1.0
    gap[0] = math.inf
    depth[0] = 0
    for c in range(1, n):
        p = parent[c]
        depth[c] = depth[p] + 1
        if kind[p] == _CHANCE:
            gap[c] = gap[p]
            slope[c] = slope[p] * prob[c] * discount[c]
        else:
            slope[c] = slope[p] * discount[c]
            if c == chosen[p]:
                gap[c] = gap[p]
                if second[p, 0] > -math.inf:
                    lead = dd.subtract(best[p, 0], best[p, 1], second[p, 0], second[p, 1])
                    gap[c] = min(gap[p], slope[p] * lead)
            else:
                lag = dd.subtract(best[p, 0], best[p, 1], total[c, 0], total[c, 1])
                gap[c] = min(gap[p], 0.0) - slope[p] * lag
    return largest
