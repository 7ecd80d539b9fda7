"""Compiled values of rollouts on any tree by moments and by samples, as one would first try; floor 2.

They read a `Topology` and a `Belief` as the allocation rules do, and give one score a leaf: the dynamic value
of a batch over its rollouts, or with `batch` > 0 of that many. The batch of a rate is that of the static
threshold: where the leaf's own mean, all others fixed, would change the choice at the root.
"""

# mypy: allow-untyped-calls
from __future__ import annotations

import math
from typing import Final

import numpy as np

from distill.allocation_rules import pass_curves, pass_values
from distill.closed_form import PEAK
from distill.kernels import compiled
from distill.numerics import gain, norm_cdf

__all__ = [
    "NODES", "SHARES", "best_other", "larger", "matched_on_tree", "peak", "sampled_on_tree",
    "sampled_together",
]  # fmt: skip

# Gauss-Hermite rule of nine points for the outcome of a batch, as the expectation of a standard normal.
NODES, _WEIGHTS = np.polynomial.hermite_e.hermegauss(9)
SHARES: Final = _WEIGHTS / _WEIGHTS.sum()

_FAR = 40.0  # standard deviations: the normal density there is 0 in double precision


@compiled
def best_other(value, own):  # type: ignore[no-untyped-def]
    """The largest value of another action; -inf where there is none."""
    rival = -np.inf
    for a in range(len(value)):
        if a != own:
            rival = max(rival, value[a])
    return rival


@compiled
def larger(m1, v1, m2, v2):  # type: ignore[no-untyped-def]
    """Mean and variance of the larger of two independent normals (Clark 1961, eqs. 2 and 3).

    With p the gap of the means over theta, theta^2 = v1 + v2, and g = E max(Z - p, 0) of a standard normal Z,
    its variance is v_upper (1 - Phi(-p) - g (p + g)) + v_lower (Phi(-p) - g (p + g)).
    """
    if m1 < m2:
        m1, v1, m2, v2 = m2, v2, m1, v1
    theta, gap = math.sqrt(v1 + v2), m1 - m2
    if gap >= _FAR * theta:
        return m1, v1
    p = gap / theta
    lift = gain(-p)
    lower = norm_cdf(-p)
    # From the upper mean on: moments about 0 would lose their digits where the means are far from it.
    both = lift * (p + lift)
    return m1 + theta * lift, max(v1 * (1.0 - lower - both) + v2 * (lower - both), 0.0)


@compiled
def peak(gap, v, n, left):  # type: ignore[no-untyped-def]
    """The best whole batch for a static gap, by the fit of the closed form."""
    if v <= 0.0:
        return 1.0
    u2 = gap * gap / v
    k = u2 * (PEAK[0] + PEAK[1] / (u2 + PEAK[2])) * n / v
    return max(1.0, min(float(left), math.floor(k + 0.5)))


@compiled
def _curves(t, value, A, B, C):  # type: ignore[no-untyped-def]
    """The value of a node's root action as max(C, A x + B) of the node's own value x, all others fixed."""
    for j in range(t.first[0], t.first[1]):
        w = t.child[j]
        A[w], B[w], C[w] = t.discount[w], t.reward[w], -np.inf
    pass_curves(t, value, 1, A, B, C)


@compiled
def _actions(t):  # type: ignore[no-untyped-def]
    """Root action of every leaf, 0-based child order."""
    of = np.zeros(len(t.parent), dtype=np.int64)
    for j in range(t.first[0], t.first[1]):
        of[t.child[j]] = j - t.first[0]
    for v in range(1, len(t.parent)):
        if t.parent[v] != 0:
            of[v] = of[t.parent[v]]
    return of[t.leaf]


@compiled
def _batches(t, b, action, left, batch):  # type: ignore[no-untyped-def]
    """Rollouts of each leaf's batch; 0 where no batch is worth anything."""
    n = len(t.parent)
    value, A, B, C = np.empty(n), np.ones(n), np.zeros(n), np.empty(n)
    pass_values(t, b.mean, value)
    _curves(t, value, A, B, C)
    n_actions = t.first[1] - t.first[0]
    own = np.empty(n_actions)
    for a in range(n_actions):
        w = t.child[t.first[0] + a]
        own[a] = t.reward[w] + t.discount[w] * value[w]
    out = np.zeros(len(t.leaf))
    for i in range(len(t.leaf)):
        w = t.leaf[i]
        rival = best_other(own, action[i])
        if rival == -np.inf or b.var[i] <= 0.0 or A[w] <= 0.0 or (left < 1 and batch == 0):
            continue
        gap = max(rival, C[w]) - A[w] * b.mean[i] - B[w]
        out[i] = float(batch) if batch > 0 else peak(gap, A[w] ** 2 * b.var[i], A[w] ** 2 * b.noise[i], left)
    return out


@compiled
def _below(t, value):  # type: ignore[no-untyped-def]
    """How far the value of each edge is below that of its decision node, all leaves at their means.

    Means of nodes are counted from these values: far from 0, their differences would lose their digits. A
    chance node's value is the average of its edges' by definition, so below it there is nothing to count.
    """
    below = np.zeros(len(value))
    for w in range(1, len(value)):
        p = t.parent[w]
        if t.is_decision[p]:
            below[w] = t.reward[w] + t.discount[w] * value[w] - value[p]
    return below


@compiled
def _moments_of(t, v, below, mean, var):  # type: ignore[no-untyped-def]
    """Mean and variance of an inner node's value from its children's; maxima are taken for normals.

    mean : from the node's value with all leaves at their means on. below : see `_below`.
    """
    m, s2 = 0.0, 0.0
    for j in range(t.first[v], t.first[v + 1]):
        w = t.child[j]
        q, r2 = below[w] + t.discount[w] * mean[w], t.discount[w] ** 2 * var[w]
        if not t.is_decision[v]:
            m, s2 = m + t.prob[w] * q, s2 + t.prob[w] ** 2 * r2
        elif j == t.first[v]:
            m, s2 = q, r2
        else:
            m, s2 = larger(m, s2, q, r2)
    return m, s2


@compiled
def matched_on_tree(t, b, left, batch, nodes, shares):  # type: ignore[no-untyped-def]
    """Independent leaves: every value is taken for a normal, the outcome of a batch by quadrature.

    For every outcome the moments on the leaf's path to the root are made anew. nodes, shares : of a
    quadrature for the standard normal.
    """
    n = len(t.parent)
    value = np.empty(n)
    pass_values(t, b.mean, value)
    below = _below(t, value)
    mean, var = np.zeros(n), np.zeros(n)
    for i in range(len(t.leaf)):
        var[t.leaf[i]] = b.var[i]
    for v in range(n - 1, 0, -1):
        if t.first[v] < t.first[v + 1]:
            mean[v], var[v] = _moments_of(t, v, below, mean, var)
    n_actions = t.first[1] - t.first[0]
    own = np.empty(n_actions)
    for a in range(n_actions):
        w = t.child[t.first[0] + a]
        own[a] = below[w] + t.discount[w] * mean[w]
    action = _actions(t)
    batches = _batches(t, b, action, left, batch)
    scores = np.zeros(len(t.leaf))
    for i in range(len(t.leaf)):
        k = batches[i]
        if k == 0.0:
            continue
        rival = best_other(own, action[i])
        s2 = b.var[i] * b.var[i] / (b.var[i] + b.noise[i] / k)
        total, before = 0.0, 0.0
        for j in range(len(nodes) + 1):
            if j < len(nodes):
                mean[t.leaf[i]] = math.sqrt(s2) * nodes[j]
                var[t.leaf[i]] = max(b.var[i] - s2, 0.0)
            else:  # back to the present
                mean[t.leaf[i]], var[t.leaf[i]] = 0.0, b.var[i]
            w = t.leaf[i]
            while t.parent[w] != 0:
                w = t.parent[w]
                mean[w], var[w] = _moments_of(t, w, below, mean, var)
            if j < len(nodes):
                g = below[w] + t.discount[w] * mean[w]
                total += shares[j] * max(g, rival)
                before += shares[j] * g
        scores[i] = max(total - max(before, rival), 0.0) / (1.0 if batch > 0 else k)
    return scores


@compiled
def _drawn(rng, b, i, wins, losses):  # type: ignore[no-untyped-def]
    """A draw of a win/loss leaf's value after so many more wins and losses."""
    return b.low[i] + (b.high[i] - b.low[i]) * rng.beta(b.alpha[i] + wins, b.beta[i] + losses)


@compiled
def sampled_on_tree(rng, t, b, left, batch, samples):  # type: ignore[no-untyped-def]
    """Independent leaves: leaf values drawn once for all candidates, `samples` outcomes of each batch.

    Given a draw of the other leaves, an action's value is max(C, A x + B) of the leaf's own x. Normal leaves
    take opposite pairs of outcomes, and keep their draw's remainder; win/loss leaves draw wins, then values.
    """
    n, n_leaves, coins = len(t.parent), len(t.leaf), len(b.alpha) > 0
    n_actions = t.first[1] - t.first[0]
    x = np.empty((samples, n_leaves))
    z = np.empty((samples, n_leaves))
    A = np.ones(n)
    B, C = np.zeros((samples, n)), np.empty((samples, n))
    value, own = np.empty(n), np.zeros(n_actions)
    for s in range(samples):
        for i in range(n_leaves):
            if coins:
                x[s, i] = _drawn(rng, b, i, 0.0, 0.0)
            else:
                z[s, i] = rng.standard_normal()
                x[s, i] = b.mean[i] + math.sqrt(b.var[i]) * z[s, i]
        pass_values(t, x[s], value)
        _curves(t, value, A, B[s], C[s])
        for a in range(n_actions):
            w = t.child[t.first[0] + a]
            own[a] += (t.reward[w] + t.discount[w] * value[w]) / samples
    outcomes = np.empty(samples)
    for o in range(0, samples - 1, 2):
        outcomes[o] = rng.standard_normal()
        outcomes[o + 1] = -outcomes[o]
    action = _actions(t)
    batches = _batches(t, b, action, left, batch)
    scores = np.zeros(n_leaves)
    for i in range(n_leaves):
        k, w = batches[i], t.leaf[i]
        if k == 0.0:
            continue
        rival = best_other(own, action[i])
        s2 = b.var[i] * b.var[i] / (b.var[i] + b.noise[i] / k)
        moved, rest = math.sqrt(s2), math.sqrt(max(b.var[i] - s2, 0.0))
        total, before = 0.0, 0.0
        for o in range(samples):
            wins = 0.0
            if coins:
                wins = float(rng.binomial(int(k), rng.beta(b.alpha[i], b.beta[i])))
            g = 0.0
            for s in range(samples):
                if coins:
                    y = _drawn(rng, b, i, wins, k - wins)
                else:
                    y = b.mean[i] + moved * outcomes[o] + rest * z[s, i]
                g += max(C[s, w], A[w] * y + B[s, w]) / samples
            total += max(g, rival) / samples
            before += g / samples
        scores[i] = max(total - max(before, rival), 0.0) / (1.0 if batch > 0 else k)
        scores[i] += 1e-12 * A[w] * moved  # where all come to 0, the most uncertain leads
    return scores


@compiled
def sampled_together(rng, t, b, root, left, batch, samples):  # type: ignore[no-untyped-def]
    """Correlated normal leaves: every outcome moves all leaves, so each takes whole backups.

    root : a triangular root of the covariance. A draw x becomes one of the posterior by
    x + S e_i (y - x_i - e) / (S_ii + n_i / k), y the batch's average, e a draw of its noise.
    """
    n, n_leaves = len(t.parent), len(t.leaf)
    n_actions = t.first[1] - t.first[0]
    x = np.empty((samples, n_leaves))
    for s in range(samples):
        z = np.array([rng.standard_normal() for _ in range(n_leaves)])
        x[s] = b.mean + root @ z
    outcomes, noise = np.empty(samples), np.empty(samples)
    for o in range(0, samples - 1, 2):
        outcomes[o], noise[o] = rng.standard_normal(), rng.standard_normal()
        outcomes[o + 1], noise[o + 1] = -outcomes[o], -noise[o]
    action = _actions(t)
    batches = _batches(t, b, action, left, batch)
    scores = np.zeros(n_leaves)
    value, moved_to = np.empty(n), np.empty(n_leaves)
    for i in range(n_leaves):
        k = batches[i]
        if k == 0.0:
            continue
        seen = b.cov[i, i] + b.noise[i] / k
        total, before = 0.0, np.zeros(n_actions)
        for o in range(samples):
            own = np.zeros(n_actions)
            y = b.mean[i] + math.sqrt(seen) * outcomes[o]
            for s in range(samples):
                step = (y - x[s, i] - math.sqrt(b.noise[i] / k) * noise[s]) / seen
                for j in range(n_leaves):
                    moved_to[j] = x[s, j] + b.cov[j, i] * step
                pass_values(t, moved_to, value)
                for a in range(n_actions):
                    w = t.child[t.first[0] + a]
                    own[a] += (t.reward[w] + t.discount[w] * value[w]) / samples
            total += own.max() / samples
            before += own / samples
        scores[i] = max(total - before.max(), 0.0) / (1.0 if batch > 0 else k)
        scores[i] += 1e-12 * b.cov[i, i] / math.sqrt(seen)
    return scores
