"""Mean value of every root action along a line of outcomes, from sampled leaf values; compiled; floor 2.

Given base points and slopes b, each action's value Q_a(y_j + b z) is a convex piecewise-linear function
of the outcome z. Its mean over the samples of a scramble is kept on a grid of z from -REACH to REACH:
values at the edges, and in each bin the slope changes' total and second moment about the middle, so that
integrals over bins are right to third order in the bin's width, kinks included.

    by_envelope     decision nodes only: upper envelope of the leaves' lines, fast
    by_breakpoints  any tree: the nodes' own piecewise-linear functions
"""

from __future__ import annotations

import numpy as np

from distill import schema
from distill.exact.piecewise import node_functions, work_arrays
from distill.numerics import compiled
from distill.tree import Floats, Ints

__all__ = ["REACH", "by_breakpoints", "by_envelope", "mean_values"]

REACH = 6.0  # outcomes beyond 6 standard deviations are left to the error bound: gain(-6) = 1.6e-10
_BINS = 384
_BLOCK = 256  # samples valued together: fits the cache
_DECISION, _LEAF = schema.DECISION, schema.LEAF


@compiled
def by_envelope(
    sample: Floats,
    offset: Floats,
    slopes: Floats,
    shift: Floats,
    lift: Floats,
    noise: Floats,
    first: Ints,
    scrambles: int,
) -> tuple[Floats, Floats, Floats]:
    """Mean values, (scrambles, actions, bins + 1), up to a constant; slope changes and second moments.

    Leaves are sorted by action, those of action a at first[a]:first[a + 1]; leaf l of sample j is worth
    offset_l + sample_jl + lift_l noise_j + slopes_l (z - shift_j).
    sample : (scrambles x points, n_leaves), one scramble's points next to each other.
    """
    n_samples, n_leaves = sample.shape
    n_actions = len(first) - 1
    step = 2 * REACH / _BINS
    bend = np.zeros((scrambles, n_actions, _BINS, 3))  # moments 0, 1, 2 of the slope changes in a bin
    rate = np.zeros((scrambles, n_actions))  # slope at z = -REACH
    # Within an action in order of slope: the same for every sample.
    order = np.empty(n_leaves, dtype=np.int64)
    for a in range(n_actions):
        order[first[a] : first[a + 1]] = first[a] + np.argsort(slopes[first[a] : first[a + 1]])
    height, rise, up = offset[order], slopes[order], lift[order]
    y, begin = np.empty(n_leaves), np.empty(n_leaves)
    hull = np.empty(n_leaves, dtype=np.int64)
    for j in range(n_samples):
        s = j // (n_samples // scrambles)
        e, x = noise[j], shift[j]
        row = sample[j]
        for w in range(n_leaves):
            y[w] = height[w] + row[order[w]] + up[w] * e - rise[w] * x
        for a in range(n_actions):
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
    g = min(int((t + REACH) / step), _BINS - 1)
    x = t + REACH - (g + 0.5) * step
    bend[g, 0] += d
    bend[g, 1] += d * x
    bend[g, 2] += d * x * x


@compiled
def _on_grid(bend: Floats, rate: Floats, each: int) -> tuple[Floats, Floats, Floats]:
    """Sums over `each` samples of kinks and of slopes at -REACH, as mean values on the edges."""
    scrambles, n_actions = rate.shape
    step = 2 * REACH / _BINS
    bend /= each
    rate /= each
    value = np.empty((scrambles, n_actions, _BINS + 1))
    for s in range(scrambles):
        for a in range(n_actions):
            slope = rate[s, a]
            value[s, a, 0] = -REACH * slope
            for g in range(_BINS):
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
    n_samples, n_leaves = sample.shape
    n_nodes = len(kind) - 1  # without the root
    step = 2 * REACH / _BINS
    bend = np.zeros((scrambles, n_actions, _BINS, 3))
    rate = np.zeros((scrambles, n_actions))
    x = np.empty(n_leaves)
    here = np.empty(n_nodes + 1)
    fall, exact = np.zeros(n_nodes + 1), np.zeros(n_nodes + 1)
    stack, first, point, line, hull = work_arrays(n_nodes + 1, n_leaves)
    for j in range(n_samples):
        s = j // (n_samples // scrambles)
        for i in range(n_leaves):
            x[i] = sample[j, i] + lift[i] * noise[j] - slopes[i] * shift[j]
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


@compiled
def mean_values(
    kind: Ints, n_children: Ints, leaf: Ints, gap: Floats, sample: Floats, scrambles: int, n_actions: int
) -> Floats:
    """Mean value of every action, (scrambles, actions), below the best root value at the means; any tree."""
    each = sample.shape[1] // scrambles
    value = np.zeros((scrambles, n_actions))
    stack = np.empty((len(kind), _BLOCK))
    for s in range(scrambles):
        for start in range(0, each, _BLOCK):
            size = min(_BLOCK, each - start)
            a = s * each + start
            _rises(kind, n_children, leaf, gap, sample[:, a : a + size], size, stack)
            for action in range(n_actions):
                value[s, action] += np.sum(stack[action, :size])
    value /= each
    return value


@compiled
def _rises(
    kind: Ints, n_children: Ints, leaf: Ints, gap: Floats, x: Floats, size: int, stack: Floats
) -> None:
    """Values of the root's children for a block of samples, left in the first rows of `stack`."""
    top = 0
    for v in range(len(kind) - 1):  # the last node is the root
        if kind[v] == _LEAF:
            low = top
            for j in range(size):
                stack[low, j] = x[leaf[v], j] - gap[v]
        else:
            low = top - n_children[v]
            for c in range(low + 1, top):
                if kind[v] == _DECISION:
                    for j in range(size):
                        if stack[c, j] > stack[low, j]:
                            stack[low, j] = stack[c, j]
                else:
                    for j in range(size):
                        stack[low, j] += stack[c, j]
            if gap[v] != 0:
                for j in range(size):
                    stack[low, j] -= gap[v]
        top = low + 1
