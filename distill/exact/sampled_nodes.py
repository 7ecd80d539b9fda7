"""Mean value of every root action at fixed outcomes, from sampled leaf values, and between them; floor 2.

As a function of the outcome z each action's mean value is an average of thousands of convex kinked
functions: smooth, unless hardly anything but z is unknown about its choices. So it is evaluated at NODES
outcomes and carried from there to every outcome by the polynomial in w through them, z ~ sinh(2 w): right to
1e-13 for what is linear in z, and closest where most outcomes fall. What the polynomial may miss is read off
its last Chebyshev coefficients.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.polynomial import chebyshev

from distill import schema
from distill.exact.sampled_rises import BINS, REACH
from distill.numerics import compiled
from distill.tree import Floats, Ints

__all__ = ["NODES", "at_nodes", "between_nodes"]

_COUNT = 21  # odd: one of them is 0
_BEND = 2.0  # of the map from [-1, 1] to outcomes: nodes 4 times closer in the middle than at the ends
_BLOCK = 128  # samples valued together, a divisor of the points a scramble: what is in use fits the L1 cache
_LAST = 4  # coefficients that stand for those cut off: a sum that holds if 4 more halve them
_PUSH, _MAX, _ADD, _ACTION = 0, 1, 2, 3
_LEAF, _DECISION = schema.LEAF, schema.DECISION


def _nodes() -> tuple[Floats, Floats, Floats, Floats]:
    """The outcomes; from values there to Chebyshev coefficients, and to values and slope changes of bins."""
    w = chebyshev.chebpts1(_COUNT)
    to_series = chebyshev.chebvander(w, _COUNT - 1) * (2 / _COUNT)
    to_series[:, 0] /= 2
    edges = np.arcsinh(np.linspace(-1, 1, BINS + 1) * math.sinh(_BEND)) / _BEND
    to_edges = to_series @ chebyshev.chebvander(np.clip(edges, -1, 1), _COUNT - 1).T
    slope = np.diff(to_edges) / (2 * REACH / BINS)
    at_edges = np.hstack([slope[:, :1], (slope[:, 1:] + slope[:, :-1]) / 2, slope[:, -1:]])
    last = np.ascontiguousarray(to_series[:, -_LAST:])
    return REACH * np.sinh(_BEND * w) / math.sinh(_BEND), last, to_edges, np.diff(at_edges)


NODES, _TO_LAST, _TO_EDGES, _TO_BENDS = _nodes()


def between_nodes(value: Floats) -> tuple[Floats, Floats, Floats, Floats]:
    """From values (scrambles, actions, NODES): values, slope changes and second moments of all bins.

    As `sampled_rises` has them, the slope changes spread evenly over a bin. Last, (actions,), what their mean
    over scrambles may be off by anywhere: the sum of the last coefficients, each beyond 2 standard errors.
    Within these it is the samples' own roughness, which differs by scramble and counts there.
    """
    last = value @ _TO_LAST
    noise = last.std(axis=0, ddof=1) / math.sqrt(len(value))
    missed = np.maximum(np.abs(last.mean(axis=0)) - 2 * noise, 0).sum(axis=1)
    bend = value @ _TO_BENDS
    step = 2 * REACH / BINS
    return value @ _TO_EDGES, bend, bend * (step * step / 12), missed


@compiled
def at_nodes(
    kind: Ints,
    n_children: Ints,
    leaf: Ints,
    gap: Floats,
    sample: Floats,
    slopes: Floats,
    shift: Floats,
    lift: Floats,
    noise: Floats,
    nodes: Floats,
    scrambles: int,
    n_actions: int,
) -> Floats:
    """Mean values, (scrambles, actions, nodes), over each action's static value; any tree.

    kind, n_children, leaf, gap : post-order, the root's children kept apart.
    sample : (n_leaves, scrambles x points) rises of the leaves' contributions over the current means, to
        which lift_l noise_j + slopes_l (z - shift_aj) is added for leaf l of action a.
    """
    n_nodes = len(kind) - 1  # without the root
    each = sample.shape[1] // scrambles
    joins = _joins(kind, n_children)
    out = np.zeros((scrambles, n_actions, len(nodes)))
    y, stack = np.empty(_BLOCK), np.empty((_depth(kind, joins), len(nodes), _BLOCK))
    for s in range(scrambles):
        for start in range(s * each, (s + 1) * each, _BLOCK):
            low = 0
            e = noise[start : start + _BLOCK]
            for a in range(n_actions):
                x = shift[a, start : start + _BLOCK]
                top = -1
                for v in range(low, n_nodes):
                    low = v + 1
                    behind = 0.0 if joins[v] == _ACTION else gap[v]
                    if kind[v] == _LEAF:
                        i = leaf[v]
                        row = sample[i, start : start + _BLOCK]
                        b, c = slopes[i], lift[i]
                        for j in range(_BLOCK):
                            y[j] = row[j] + c * e[j] - b * x[j] - behind
                        if joins[v] == _MAX:
                            _max_line(y, b, nodes, stack[top])
                        elif joins[v] == _ADD:
                            _add_line(y, b, nodes, stack[top])
                        else:
                            top += 1
                            stack[top] = 0.0
                            _add_line(y, b, nodes, stack[top])
                    else:
                        if behind != 0:
                            stack[top] -= behind
                        if joins[v] == _MAX:
                            top -= 1
                            _max(stack[top + 1], stack[top])
                        elif joins[v] == _ADD:
                            top -= 1
                            stack[top] += stack[top + 1]
                    if joins[v] == _ACTION:
                        break
                _add_sums(stack[0], out[s, a])
    return out / each


@compiled
def _joins(kind: Ints, n_children: Ints) -> Ints:
    """What becomes of each node's value: new on the stack, or joined to that of siblings before it."""
    joins = np.full(len(kind), _PUSH)
    waiting = np.empty(len(kind), dtype=np.int64)
    top = 0
    for v in range(len(kind)):
        if kind[v] != _LEAF:
            low = top - n_children[v]
            if v == len(kind) - 1:
                joins[waiting[:top]] = _ACTION
            else:
                joins[waiting[low + 1 : top]] = _MAX if kind[v] == _DECISION else _ADD
            top = low
        waiting[top] = v
        top += 1
    return joins


@compiled
def _depth(kind: Ints, joins: Ints) -> int:
    """Most values of one action that wait at once."""
    most, top = 1, 0
    for v in range(len(kind) - 1):
        if kind[v] == _LEAF:
            top += joins[v] != _MAX and joins[v] != _ADD
        else:
            top -= joins[v] == _MAX or joins[v] == _ADD
        most = max(most, top)
        if joins[v] == _ACTION:
            top = 0
    return most


@compiled
def _max_line(y: Floats, slope: float, nodes: Floats, to: Floats) -> None:
    for g in range(len(nodes)):
        up, row = slope * nodes[g], to[g]
        for j in range(_BLOCK):
            t = y[j] + up
            row[j] = t if t > row[j] else row[j]


@compiled
def _add_line(y: Floats, slope: float, nodes: Floats, to: Floats) -> None:
    for g in range(len(nodes)):
        up, row = slope * nodes[g], to[g]
        for j in range(_BLOCK):
            row[j] += y[j] + up


@compiled
def _max(x: Floats, to: Floats) -> None:
    for g in range(len(x)):
        left, row = x[g], to[g]
        for j in range(_BLOCK):
            row[j] = left[j] if left[j] > row[j] else row[j]


@compiled
def _add_sums(x: Floats, out: Floats) -> None:
    """Sums over the samples of a block, by halves; x is used up."""
    for g in range(len(x)):
        row, half = x[g], _BLOCK // 2
        while half >= 4:
            for j in range(half):
                row[j] += row[half + j]
            half //= 2
        out[g] += row[0] + row[1] + row[2] + row[3]
