"""Mean value of every root action along a line of outcomes, from sampled leaf values; compiled; floor 2.

Given base points and slopes b, each action's value Q_a(y_j + b z) is a convex piecewise-linear function
of the outcome z. Its mean over the samples of a scramble is kept on a grid of z from -REACH to REACH:
values at the edges, and in each bin the slope changes' total and second moment about the middle, so that
integrals over bins are right to third order in the bin's width, kinks included. `sampled_nodes` makes
the same from values at a few outcomes, many times faster where that is close enough.

    by_envelope     decision nodes only: upper envelope of the leaves' lines, fast
    by_breakpoints  any tree: the nodes' own piecewise-linear functions
"""

from __future__ import annotations

import numpy as np

from distill import schema
from distill.exact.piecewise import node_functions, work_arrays
from distill.numerics import compiled
from distill.tree import Floats, Ints

__all__ = ["BINS", "REACH", "by_breakpoints", "by_envelope"]

REACH = 6.0  # outcomes beyond 6 standard deviations are left to the error bound: gain(-6) = 1.6e-10
BINS = 384
_DECISION, _LEAF = schema.DECISION, schema.LEAF


@compiled
def by_envelope(
    sample: Floats,
    offset: Floats,
    slopes: Floats,
    shift: Floats,
    lift: Floats,
    noise: Floats,
    by_action: Ints,
    first: Ints,
    scrambles: int,
) -> tuple[Floats, Floats, Floats]:
    """Mean values, (scrambles, actions, bins + 1), up to a constant; slope changes and second moments.

    Leaf l of action a in sample j is worth offset_l + sample_lj + lift_l noise_j + slopes_l (z - shift_aj).
    sample : (n_leaves, scrambles x points), one scramble's points next to each other.
    by_action : leaves sorted by action, those of action a at first[a]:first[a + 1].
    """
    n_leaves, n_samples = sample.shape
    n_actions = len(first) - 1
    step = 2 * REACH / BINS
    bend = np.zeros((scrambles, n_actions, BINS, 3))  # moments 0, 1, 2 of the slope changes in a bin
    rate = np.zeros((scrambles, n_actions))  # slope at z = -REACH
    # Within an action in order of slope: the same for every sample.
    order = np.empty(n_leaves, dtype=np.int64)
    for a in range(n_actions):
        own = by_action[first[a] : first[a + 1]]
        order[first[a] : first[a + 1]] = own[np.argsort(slopes[own])]
    height, rise, up = offset[order], slopes[order], lift[order]
    y, begin = np.empty(n_leaves), np.empty(n_leaves)
    hull = np.empty(n_leaves, dtype=np.int64)
    for j in range(n_samples):
        s = j // (n_samples // scrambles)
        e = noise[j]
        for a in range(n_actions):
            x = shift[a, j]
            for w in range(first[a], first[a + 1]):
                y[w] = height[w] + sample[order[w], j] + up[w] * e - rise[w] * x
            m = _hull(y, rise, first[a], first[a + 1], hull, begin)
            rate[s, a] += rise[hull[0]]
            for h in range(1, m):
                _put(bend[s, a], begin[h], rise[hull[h]] - rise[hull[h - 1]], step)
    return _on_grid(bend, rate, n_samples // scrambles)


@compiled
def _hull(y: Floats, slopes: Floats, low: int, high: int, hull: Ints, begin: Floats) -> int:
    """Upper envelope within the reach of lines y + slope z, low ... high - 1, by slope; returns its size."""
    best = low
    for w in range(low + 1, high):
        if y[w] > y[best]:
            best = w
    top, steep = y[best], slopes[best]
    m = 0
    for w in range(low, high):
        if y[w] + abs(slopes[w] - steep) * REACH < top:  # below the best, all the way
            continue
        at = -np.inf
        while m > 0:
            old = hull[m - 1]
            rise = slopes[w] - slopes[old]
            if rise > 0:
                at = (y[old] - y[w]) / rise
                if at > begin[m - 1]:
                    break
            elif y[w] <= y[old]:
                at = np.inf
                break
            at = -np.inf
            m -= 1
        if at < REACH:
            hull[m] = w
            begin[m] = max(at, -REACH)
            m += 1
    return m


@compiled
def _put(bend: Floats, t: float, d: float, step: float) -> None:
    """Add a kink at t with slope change d to its bin's moments."""
    g = min(int((t + REACH) / step), BINS - 1)
    x = t + REACH - (g + 0.5) * step
    bend[g, 0] += d
    bend[g, 1] += d * x
    bend[g, 2] += d * x * x


@compiled
def _on_grid(bend: Floats, rate: Floats, each: int) -> tuple[Floats, Floats, Floats]:
    """Sums over `each` samples of kinks and of slopes at -REACH, as mean values on the edges."""
    scrambles, n_actions = rate.shape
    step = 2 * REACH / BINS
    bend /= each
    rate /= each
    value = np.empty((scrambles, n_actions, BINS + 1))
    for s in range(scrambles):
        for a in range(n_actions):
            slope = rate[s, a]
            value[s, a, 0] = -REACH * slope
            for g in range(BINS):
                turn = bend[s, a, g, 0] * step / 2 - bend[s, a, g, 1]
                value[s, a, g + 1] = value[s, a, g] + slope * step + turn
                slope += bend[s, a, g, 0]
    return value, bend[:, :, :, 0].copy(), bend[:, :, :, 2].copy()


@compiled
def by_breakpoints(
    kind: Ints,
    n_children: Ints,
    leaf: Ints,
    gap: Floats,
    action: Ints,
    sample: Floats,
    slopes: Floats,
    shift: Floats,
    lift: Floats,
    noise: Floats,
    scrambles: int,
    n_actions: int,
) -> tuple[Floats, Floats, Floats]:
    """The same for any tree, given in post-order with the root's children kept apart.

    sample : rises of the leaves' contributions over the current means. Each sample moves every node's
    value at z = 0; from the gaps there, the nodes' functions of z follow as for the static value.
    """
    n_leaves, n_samples = sample.shape
    n_nodes = len(kind) - 1  # without the root
    step = 2 * REACH / BINS
    bend = np.zeros((scrambles, n_actions, BINS, 3))
    rate = np.zeros((scrambles, n_actions))
    x = np.empty(n_leaves)
    here = np.empty(n_nodes + 1)
    fall, exact = np.zeros(n_nodes + 1), np.zeros(n_nodes + 1)
    stack, first, point, line, hull = work_arrays(n_nodes + 1, n_leaves)
    for j in range(n_samples):
        s = j // (n_samples // scrambles)
        for i in range(n_leaves):
            x[i] = sample[i, j] + lift[i] * noise[j] - slopes[i] * shift[action[i], j]
        _gaps(kind, n_children, leaf, gap, x, here, fall)
        node_functions(
            kind, n_children, leaf, fall, exact, slopes, REACH, n_nodes, stack, first, point, line, hull
        )
        for a in range(n_actions):
            slope = stack[0, a]
            for h in range(first[a], first[a + 1]):
                t, d = point[0, h], point[1, h]
                if t < 0:
                    slope -= d
                _put(bend[s, a], t, d, step)
            rate[s, a] += slope
    return _on_grid(bend, rate, n_samples // scrambles)


@compiled
def _gaps(
    kind: Ints, n_children: Ints, leaf: Ints, gap: Floats, x: Floats, here: Floats, fall: Floats
) -> None:
    """How far each child of a decision node lies below its best sibling, `fall`, at leaf rises x."""
    waiting = np.empty(len(kind), dtype=np.int64)
    top = 0
    for v in range(len(kind) - 1):
        fall[v] = 0.0
        if kind[v] == _LEAF:
            here[v] = x[leaf[v]] - gap[v]
        else:
            low = top - n_children[v]
            value = here[waiting[low]]
            for c in range(low + 1, top):
                if kind[v] == _DECISION:
                    value = max(value, here[waiting[c]])
                else:
                    value += here[waiting[c]]
            if kind[v] == _DECISION:
                for c in range(low, top):
                    fall[waiting[c]] = value - here[waiting[c]]
            here[v] = value - gap[v]
            top = low
        waiting[top] = v
        top += 1
