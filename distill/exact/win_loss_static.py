"""Static value of trials at win/loss leaves, on any tree of decision and chance nodes; floor 2.

As a function of one leaf's posterior mean p the root maximum is max(C, slope p + B): one kink, at
(C - B) / slope. VOC(k) = slope x the worth of k trials against a sure value there (`trial_walk`). One
upward and one downward pass find the kinks of all leaves in O(nodes); each batch 1 ... k is O(1) more.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from distill import schema
from distill.exact.trial_walk import crossing_best_rate, crossing_gain, crossing_limit, first_crossing
from distill.numerics import compiled
from distill.query import Priced, Query
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["METHOD", "price_static"]

METHOD = "win/loss, static: crossing sum"

# Longest walk a leaf; beyond, VOC(k) lies between VOC(_MAX_WALK) and VOC(infinity), and the error says so.
_MAX_WALK = 2**22
_EPS = 2.0**-52


def price_static(tree: BeliefTree, query: Query) -> Priced:
    """VOC_0 or RATE_0 of every win/loss leaf; any tree, any batch.

    The error covers roundings, that of the kink included, and for more than 2^22 trials the gap to what
    endless trials would buy.
    """
    assert tree.alpha is not None
    assert tree.beta is not None
    assert tree.low is not None
    assert tree.high is not None
    width = tree.high - tree.low
    values = tree.low + width * (tree.alpha / (tree.alpha + tree.beta))
    gain, offset, rival, action_values, magnitude = _root_kinks(
        tree.parent, tree.kind, tree.reward, tree.discount, tree.prob, values, np.abs(tree.low) + width
    )
    slope = gain * width
    rounding = 4 * _EPS * magnitude
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        kink = np.where(slope > 0, (rival - offset - gain * tree.low) / slope, math.inf)
        shift = np.where(slope > 0, rounding / slope + _EPS, 0.0)
    worth, batch, error = price_crossings(tree.alpha, tree.beta, kink, shift, query)
    return Priced(slope * worth, batch, action_values, slope * error * (1 + 4 * _EPS), METHOD)


def price_crossings(
    alpha: Floats, beta: Floats, kink: Floats, shift: Floats, query: Query
) -> tuple[Floats, Ints, Floats]:
    """Worth, batch and error of trials on leaves that compete with a sure value; unit of a probability.

    kink : the sure value on the scale of p; 0 < kink < 1 or the worth is 0. shift : its error bound.
    With a rate query, worth and error are a rollout.
    """
    if query.rate and query.remaining == 0:
        return np.zeros(len(kink)), np.zeros(len(kink), dtype=np.int64), np.zeros(len(kink))
    last = query.remaining if query.batch is None else query.batch
    assert last is not None
    # The worth rises as the kink nears the mean, whatever the batch: the rounding of the kink moves it by
    # at most what a shift towards the mean does.
    mean = alpha / (alpha + beta)
    nearer = np.where(kink >= mean, np.maximum(kink - shift, mean), np.minimum(kink + shift, mean))
    walk = _walk_rates if query.rate else _walk_batch
    worth, batch, error = walk(alpha, beta, kink, first_crossing(alpha, beta, kink), last)
    moved = np.flatnonzero((nearer > 0) & (nearer < 1) & (shift > 0))
    a, b, c = alpha[moved], beta[moved], nearer[moved]
    most = walk(a, b, c, first_crossing(a, b, c), last)[0]
    error[moved] += np.maximum(most - worth[moved], 0.0)
    return worth, batch, error


def _walk_batch(
    alpha: Floats, beta: Floats, kink: Floats, first: Floats, k: int
) -> tuple[Floats, Ints, Floats]:
    """Worth of k trials."""
    worth, walked = _gains(alpha, beta, kink, first, min(k, _MAX_WALK)), min(k, _MAX_WALK)
    error = worth * _EPS * (walked + 8)
    if k > _MAX_WALK:
        gap = np.where(first > k, 0.0, np.maximum(crossing_limit(alpha, beta, kink) - worth, 0.0))
        worth, error = worth + gap / 2, error + gap / 2
    return worth, np.full(len(kink), k, dtype=np.int64), error


def _walk_rates(
    alpha: Floats, beta: Floats, kink: Floats, first: Floats, remaining: int
) -> tuple[Floats, Ints, Floats]:
    """Best worth a trial over 1 ... remaining trials."""
    limit = crossing_limit(alpha, beta, kink)
    rate, batch, seen = _rates(alpha, beta, kink, first, min(remaining, _MAX_WALK), limit)
    error = rate * _EPS * (batch + 8)
    unseen = np.where(first > remaining, 0.0, limit / np.maximum(seen + 1.0, first))
    return rate, batch, error + np.where(seen < remaining, np.maximum(unseen - rate, 0.0), 0.0)


@compiled
def _gains(alpha: Floats, beta: Floats, kink: Floats, first: Floats, k: int) -> Floats:
    out = np.zeros(len(kink))
    for i in range(len(kink)):
        if first[i] <= k:
            out[i] = crossing_gain(alpha[i], beta[i], kink[i], k)
    return out


@compiled
def _rates(
    alpha: Floats, beta: Floats, kink: Floats, first: Floats, last: int, limit: Floats
) -> tuple[Floats, Ints, Ints]:
    rate, batch = np.zeros(len(kink)), np.ones(len(kink), dtype=np.int64)
    seen = np.full(len(kink), last, dtype=np.int64)
    for i in range(len(kink)):
        if first[i] <= last:
            gain, k, seen[i] = crossing_best_rate(alpha[i], beta[i], kink[i], 1, last, limit[i])
            rate[i], batch[i] = gain / k, k
    return rate, batch, seen


@compiled
def _root_kinks(
    parent: Ints,
    kind: NDArray[np.int8],
    reward: Floats,
    discount: Floats,
    prob: Floats,
    leaf_value: Floats,
    leaf_size: Floats,
) -> tuple[Floats, Floats, Floats, Floats, float]:
    """Per leaf gain, B and C of root maximum = max(C, gain x + B), x the leaf's value; V_0 per action; size.

    Sibling sums under a chance node are taken from both sides, never as a difference. The size bounds
    every number that entered, for the rounding.
    """
    nodes = len(parent)
    value, size = np.zeros(nodes), np.zeros(nodes)
    best, second = np.full(nodes, -math.inf), np.full(nodes, -math.inf)
    leaf = len(leaf_value)
    for c in range(nodes - 1, 0, -1):
        if kind[c] == schema.LEAF:
            leaf -= 1
            value[c], size[c] = leaf_value[leaf], leaf_size[leaf]
        elif kind[c] == schema.DECISION:
            value[c] = best[c]
        q = reward[c] + discount[c] * value[c]
        p = parent[c]
        size[p] = max(size[p], abs(reward[c]) + discount[c] * size[c])
        if kind[p] == schema.CHANCE:
            value[p] += prob[c] * q
        elif q > best[p]:
            second[p], best[p] = best[p], q
        elif q > second[p]:
            second[p] = q
    others = np.zeros(nodes)  # under chance nodes: what the siblings add
    before, after = np.zeros(nodes), np.zeros(nodes)
    for c in range(1, nodes):
        others[c] += before[parent[c]]
        before[parent[c]] += prob[c] * (reward[c] + discount[c] * value[c])
    for c in range(nodes - 1, 0, -1):
        others[c] += after[parent[c]]
        after[parent[c]] += prob[c] * (reward[c] + discount[c] * value[c])
    gain, offset, rival = np.ones(nodes), np.zeros(nodes), np.full(nodes, -math.inf)
    for c in range(1, nodes):
        p = parent[c]
        gain[c] = gain[p] * prob[c] * discount[c]
        offset[c] = offset[p] + gain[p] * prob[c] * reward[c]
        rival[c] = rival[p]
        if kind[p] == schema.CHANCE:
            offset[c] += gain[p] * others[c]
        else:
            q = reward[c] + discount[c] * value[c]
            sibling = second[p] if q == best[p] else best[p]
            if sibling > -math.inf:
                rival[c] = max(rival[c], offset[p] + gain[p] * sibling)
    leaves = np.flatnonzero(kind == schema.LEAF)
    actions = np.flatnonzero(parent == 0)
    action_values = reward[actions] + discount[actions] * value[actions]
    return gain[leaves], offset[leaves], rival[leaves], action_values, size[0]
