"""Static value of trials at win/loss leaves, on any tree of decision and chance nodes; floor 2.

As a function of one leaf's posterior mean p the root maximum is max(C, slope p + B): one kink, at
(C - B) / slope. VOC(k) = slope x the worth of k trials against a sure value there (`trial_walk`). One
upward and one downward pass find the kinks of all leaves in O(nodes); each batch 1 ... k is O(1) more.
"""

from __future__ import annotations

import math

import numpy as np

from distill.exact.root_gaps import gap_room, root_gaps
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
    rate = tree.alpha / (tree.alpha + tree.beta)
    found = gap_room(tree.n_nodes)
    largest = root_gaps(
        tree.parent, tree.kind, tree.reward, tree.discount, tree.prob, tree.low + width * rate, found
    )
    slope, gap = found.slope[tree.leaf_nodes] * width, found.gap[tree.leaf_nodes]
    action_values = found.total[tree.action_nodes, 0]
    # The means are rounded, wherever they lie; the differences of values hardly are.
    rounding = 4 * _EPS * max(largest, float(np.max(np.abs(tree.low) + width)))
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        kink = np.where(slope > 0, rate - gap / slope, math.inf)
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
