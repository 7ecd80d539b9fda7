"""Compiled values of rollouts on leaf tables by moments and by samples, as one would first try; floor 2.

Means, variances and noise are those at the root; `action` is the root action of each leaf. They give one
score a leaf: the dynamic value of a batch over its rollouts, or with `batch` > 0 of that many.
"""

# mypy: allow-untyped-calls
from __future__ import annotations

import math

import numpy as np

from distill.kernels import compiled
from distill.tree_peer_kernels import best_other, larger, peak

__all__ = ["matched_on_table", "sampled_on_table", "sampled_wins"]


@compiled
def matched_on_table(m, v, noise, action, left, batch, nodes, shares):  # type: ignore[no-untyped-def]
    """Dynamic value by moments: every maximum is taken for a normal, the outcome by quadrature.

    Siblings' maxima come from running maxima from both ends. The batch is that of the threshold to the
    rival, unless one is given.
    """
    m = m - m.max()  # a shift of all means changes nothing, and far from 0 the gains would lose their digits
    n_leaves = len(m)
    n_actions = action.max() + 1
    before = np.full((n_leaves, 2), -np.inf)
    after = np.full((n_leaves, 2), -np.inf)
    for order, out in ((1, before), (-1, after)):
        so_far = np.full((n_actions, 2), -np.inf)
        for j in range(n_leaves):
            i = j if order == 1 else n_leaves - 1 - j
            a = action[i]
            out[i, 0], out[i, 1] = so_far[a, 0], so_far[a, 1]
            if so_far[a, 0] == -np.inf:
                so_far[a, 0], so_far[a, 1] = m[i], v[i]
            else:
                so_far[a, 0], so_far[a, 1] = larger(so_far[a, 0], so_far[a, 1], m[i], v[i])
        value = so_far[:, 0]
    scores = np.zeros(n_leaves)
    for i in range(n_leaves):
        rival = best_other(value, action[i])
        if v[i] <= 0.0 or rival == -np.inf or (left < 1 and batch == 0):
            continue
        if before[i, 0] == -np.inf:
            mu, r2 = after[i, 0], after[i, 1]
        elif after[i, 0] == -np.inf:
            mu, r2 = before[i, 0], before[i, 1]
        else:
            mu, r2 = larger(before[i, 0], before[i, 1], after[i, 0], after[i, 1])
        k = float(batch) if batch > 0 else peak(rival - m[i], v[i], noise[i], left)
        s2 = v[i] * v[i] / (v[i] + noise[i] / k)
        total, mean = 0.0, 0.0
        for j in range(len(nodes)):
            x = m[i] + math.sqrt(s2) * nodes[j]
            g = x if mu == -np.inf else larger(x, max(v[i] - s2, 0.0), mu, r2)[0]
            total += shares[j] * max(g, rival)
            mean += shares[j] * g
        scores[i] = max(total - max(mean, rival), 0.0) / (1.0 if batch > 0 else k)
    return scores


@compiled
def _keep_two(top, y):  # type: ignore[no-untyped-def]
    """The two largest so far, `top`, with y taken in."""
    if y > top[0]:
        top[1], top[0] = top[0], y
    elif y > top[1]:
        top[1] = y


@compiled
def sampled_on_table(rng, m, v, noise, action, left, batch, samples):  # type: ignore[no-untyped-def]
    """Dynamic value by samples: leaf values drawn once, shared by all candidates and outcomes.

    An even number of outcomes in opposite pairs; where all candidates come to 0, the most uncertain leads.
    """
    n_leaves, n_actions = len(m), action.max() + 1
    x = np.empty((samples, n_leaves))
    top = np.full((samples, n_actions, 2), -np.inf)
    value = np.zeros(n_actions)
    for s in range(samples):
        for i in range(n_leaves):
            x[s, i] = rng.standard_normal()
            y = m[i] + math.sqrt(v[i]) * x[s, i]
            _keep_two(top[s, action[i]], y)
        for a in range(n_actions):
            value[a] += top[s, a, 0] / samples
    outcomes = np.empty(samples)
    for o in range(0, samples - 1, 2):
        outcomes[o] = rng.standard_normal()
        outcomes[o + 1] = -outcomes[o]
    scores = np.zeros(n_leaves)
    for i in range(n_leaves):
        rival = best_other(value, action[i])
        if v[i] <= 0.0 or rival == -np.inf or (left < 1 and batch == 0):
            continue
        k = float(batch) if batch > 0 else peak(rival - m[i], v[i], noise[i], left)
        s2 = v[i] * v[i] / (v[i] + noise[i] / k)
        moved, rest = math.sqrt(s2), math.sqrt(max(v[i] - s2, 0.0))
        total, mean = 0.0, 0.0
        for o in range(samples):
            g = 0.0
            for s in range(samples):
                own = m[i] + math.sqrt(v[i]) * x[s, i]
                siblings = top[s, action[i], 1] if own == top[s, action[i], 0] else top[s, action[i], 0]
                g += max(siblings, m[i] + moved * outcomes[o] + rest * x[s, i]) / samples
            total += max(g, rival) / samples
            mean += g / samples
        scores[i] = max(total - max(mean, rival), 0.0) / (1.0 if batch > 0 else k)
        scores[i] += 1e-12 * moved
    return scores


@compiled
def sampled_wins(rng, alpha, beta, low, span, action, left, batch, samples):  # type: ignore[no-untyped-def]
    """The same of win/loss leaves: wins of a batch are drawn, then values given them.

    low, span : of each leaf's value at the root, so that it is low + span p.
    """
    n_leaves, n_actions = len(alpha), action.max() + 1
    x = np.empty((samples, n_leaves))
    top = np.full((samples, n_actions, 2), -np.inf)
    value = np.zeros(n_actions)
    for s in range(samples):
        for i in range(n_leaves):
            y = low[i] + span[i] * rng.beta(alpha[i], beta[i])
            x[s, i] = y
            _keep_two(top[s, action[i]], y)
        for a in range(n_actions):
            value[a] += top[s, a, 0] / samples
    scores = np.zeros(n_leaves)
    for i in range(n_leaves):
        rival = best_other(value, action[i])
        total = alpha[i] + beta[i]
        v = span[i] ** 2 * alpha[i] * beta[i] / (total * total * (total + 1.0))
        if v <= 0.0 or rival == -np.inf or (left < 1 and batch == 0):
            continue
        gap = rival - low[i] - span[i] * alpha[i] / total
        k = float(batch) if batch > 0 else peak(gap, v, v * total, left)
        sum_of, mean = 0.0, 0.0
        for _ in range(samples):
            wins = float(rng.binomial(int(k), rng.beta(alpha[i], beta[i])))
            g = 0.0
            for s in range(samples):
                siblings = top[s, action[i], 1] if x[s, i] == top[s, action[i], 0] else top[s, action[i], 0]
                y = low[i] + span[i] * rng.beta(alpha[i] + wins, beta[i] + k - wins)
                g += max(siblings, y) / samples
            sum_of += max(g, rival) / samples
            mean += g / samples
        scores[i] = max(sum_of - max(mean, rival), 0.0) / (1.0 if batch > 0 else k)
        scores[i] += 1e-12 * v * math.sqrt(1.0 / (v + v * total / k))
    return scores
