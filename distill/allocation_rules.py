"""Compiled allocation rules, posterior updates and simulated rollouts of `distill.allocation`; floor 2.

The rules are described there. Everything here works on plain arrays of one tree.
"""

# mypy: allow-untyped-calls
from __future__ import annotations

import math
from typing import Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

from distill.beliefs import (
    gaussian_mean_update,
    gaussian_var_update,
    win_loss_mean,
    win_loss_noise_var,
    win_loss_var,
)
from distill.kernels import compiled
from distill.tree import Floats, Ints

__all__ = ["RULES", "Belief", "Topology", "observe", "pass_curves", "pass_values", "pick", "run", "scale"]

RULES: Final = ("even", "uct", "thompson", "static_rate")
_EVEN, _UCT, _THOMPSON = 0, 1, 2
_SQRT_HALF: Final = math.sqrt(0.5)
_PHI_0: Final = 1.0 / math.sqrt(2.0 * math.pi)


class Topology(NamedTuple):
    """A tree for the kernels: node columns, children as one list, and leaves by node and by position."""

    parent: Ints
    is_decision: NDArray[np.bool_]
    reward: Floats
    discount: Floats
    prob: Floats
    first: Ints  # children of node v are child[first[v] : first[v + 1]]
    child: Ints
    leaf: Ints  # node of each leaf


class Belief(NamedTuple):
    """The posterior that a search updates in place; columns over leaves.

    mean, var, noise are the moments that the rules read: for win/loss leaves those of the Beta belief.
    `cov` is 0 x 0 for independent leaves, `alpha` empty for Gaussian ones.
    """

    mean: Floats
    var: Floats
    noise: Floats
    alpha: Floats
    beta: Floats
    low: Floats
    high: Floats
    cov: Floats
    visits: Ints
    returns: Floats  # sum of what the rollouts since the start returned


_mean_after = compiled(gaussian_mean_update)
_var_after = compiled(gaussian_var_update)
_win_loss_mean = compiled(win_loss_mean)
_win_loss_var = compiled(win_loss_var)
_win_loss_noise = compiled(win_loss_noise_var)


@compiled
def scale(t, var):  # type: ignore[no-untyped-def]
    """The largest standard deviation that any leaf contributes to the root, u."""
    gain = np.ones(len(t.parent))
    for c in range(1, len(t.parent)):
        gain[c] = gain[t.parent[c]] * t.discount[c] * t.prob[c]
    top = 0.0
    for i in range(len(t.leaf)):
        top = max(top, gain[t.leaf[i]] * math.sqrt(var[i]))
    return top


@compiled
def run(rng, t, b, truth, share, rollouts, budget, batch, switch, c):  # type: ignore[no-untyped-def]
    """Spend `rollouts` of `budget` around the true leaf values; `share` are the rules' cumulative weights."""
    rule = _draw_rule(rng, share)
    used = 0
    while used < rollouts:
        if switch > 0.0 and rng.random() < switch:
            rule = _draw_rule(rng, share)
        i = pick(rule, rng, t, b, budget - used, c)
        k = min(batch, rollouts - used)
        if len(b.alpha) > 0:
            wins = 0
            for _ in range(k):
                wins += rng.random() < truth[i]
            observe(b, i, float(wins), k)
        else:
            observe(b, i, truth[i] + math.sqrt(b.noise[i] / k) * rng.standard_normal(), k)
        used += k


@compiled
def _draw_rule(rng, share):  # type: ignore[no-untyped-def]
    u = rng.random() * share[-1]
    for rule in range(len(share)):
        if u < share[rule]:
            return rule
    return len(share) - 1


@compiled
def observe(b, i, observed, k):  # type: ignore[no-untyped-def]
    """Posterior update in place: `k` rollouts at leaf `i`, `observed` their average (win/loss: the wins)."""
    b.visits[i] += k
    b.returns[i] += k * observed
    if len(b.alpha) > 0:
        b.alpha[i] += observed
        b.beta[i] += k - observed
        b.mean[i] = _win_loss_mean(b.alpha[i], b.beta[i], b.low[i], b.high[i])
        b.var[i] = _win_loss_var(b.alpha[i], b.beta[i], b.low[i], b.high[i])
        b.noise[i] = _win_loss_noise(b.alpha[i], b.beta[i], b.low[i], b.high[i])
    elif len(b.cov) > 0:
        # Rank one: m' = m + g (y - m_i), S' = S - g S_i, g = S_i / (S_ii + n_i / k). It loses digits where
        # noise is tiny, which the rules can bear; `Search.tree` takes all rollouts in at once instead.
        n = len(b.mean)
        row = b.cov[i].copy()
        surprise = observed - b.mean[i]
        kept = b.noise[i] / (k * row[i] + b.noise[i])
        for j in range(n):
            g = k * row[j] / (k * row[i] + b.noise[i])
            b.mean[j] += g * surprise
            for m in range(j + 1):  # one half, mirrored: symmetric to the last bit
                b.cov[j, m] -= g * row[m]
                b.cov[m, j] = b.cov[j, m]
        for j in range(n):  # along the leaf itself nothing is subtracted: S'_ij = S_ij n / (k S_ii + n)
            b.cov[i, j] = row[j] * kept
            b.cov[j, i] = row[j] * kept
        for j in range(n):
            b.cov[j, j] = max(b.cov[j, j], 0.0)
            b.var[j] = b.cov[j, j]
    else:
        b.mean[i] = _mean_after(b.mean[i], b.var[i], b.noise[i], k, observed)
        b.var[i] = _var_after(b.var[i], b.noise[i], k)


@compiled
def pick(rule, rng, t, b, remaining, c):  # type: ignore[no-untyped-def]
    """The leaf that rule number `rule` rolls out next; `c` is UCT's constant in u."""
    if rule == _EVEN:
        return _even(rng, b.visits)
    if rule == _UCT:
        return _uct(rng, t, b, c)
    if rule == _THOMPSON:
        return _thompson(rng, t, b)
    return _static_rate(rng, t, b, remaining)


@compiled
def _even(rng, visits):  # type: ignore[no-untyped-def]
    best, ties = 0, 0
    for i in range(len(visits)):
        if ties == 0 or visits[i] < visits[best]:
            best, ties = i, 1
        elif visits[i] == visits[best]:
            ties += 1
            if rng.random() * ties < 1.0:
                best = i
    return best


@compiled
def pass_values(t, leaf_value, value):  # type: ignore[no-untyped-def]
    """Value of every node when leaf values are as given, into `value`; children come after parents."""
    for v in range(len(t.parent)):
        value[v] = -np.inf if t.is_decision[v] else 0.0
    for i in range(len(t.leaf)):
        value[t.leaf[i]] = leaf_value[i]
    for v in range(len(t.parent) - 1, 0, -1):
        p = t.parent[v]
        q = t.reward[v] + t.discount[v] * value[v]
        if t.is_decision[p]:
            value[p] = max(value[p], q)
        else:
            value[p] += t.prob[v] * q


@compiled
def _values(t, leaf_value):  # type: ignore[no-untyped-def]
    """The same as an array of its own."""
    value = np.empty(len(t.parent))
    pass_values(t, leaf_value, value)
    return value


@compiled
def _by_chance(rng, t, v):  # type: ignore[no-untyped-def]
    """A child of a chance node, drawn with its probability."""
    u = rng.random()
    for j in range(t.first[v], t.first[v + 1]):
        u -= t.prob[t.child[j]]
        if u < 0.0:
            return t.child[j]
    for j in range(t.first[v + 1] - 1, t.first[v] - 1, -1):  # rounding: the last one that can happen
        if t.prob[t.child[j]] > 0.0:
            return t.child[j]
    return t.child[t.first[v]]


@compiled
def _uct(rng, t, b, c):  # type: ignore[no-untyped-def]
    value = _values(t, b.mean)
    visits = np.zeros(len(t.parent))
    for i in range(len(t.leaf)):
        visits[t.leaf[i]] = b.visits[i]
    for v in range(len(t.parent) - 1, 0, -1):
        visits[t.parent[v]] += visits[v]
    v = 0
    while t.first[v] < t.first[v + 1]:
        if not t.is_decision[v]:
            v = _by_chance(rng, t, v)
            continue
        best, best_score, fresh = -1, -np.inf, 0
        for j in range(t.first[v], t.first[v + 1]):
            w = t.child[j]
            if visits[w] == 0.0:
                fresh += 1
                if rng.random() * fresh < 1.0:
                    best = w
            elif fresh == 0:
                score = (
                    t.reward[w] + t.discount[w] * value[w] + c * math.sqrt(math.log(visits[v]) / visits[w])
                )
                if score > best_score or best < 0:
                    best, best_score = w, score
        v = best
    return np.searchsorted(t.leaf, v)


@compiled
def _thompson(rng, t, b):  # type: ignore[no-untyped-def]
    draw = np.empty(len(t.leaf))
    for i in range(len(t.leaf)):
        if len(b.alpha) > 0:
            draw[i] = b.low[i] + (b.high[i] - b.low[i]) * rng.beta(b.alpha[i], b.beta[i])
        else:
            draw[i] = b.mean[i] + math.sqrt(b.var[i]) * rng.standard_normal()
    value = _values(t, draw)
    v = 0
    while t.first[v] < t.first[v + 1]:
        if not t.is_decision[v]:
            v = _by_chance(rng, t, v)
            continue
        best, best_q = t.child[t.first[v]], -np.inf
        for j in range(t.first[v], t.first[v + 1]):
            w = t.child[j]
            q = t.reward[w] + t.discount[w] * value[w]
            if q > best_q:
                best, best_q = w, q
        v = best
    return np.searchsorted(t.leaf, v)


@compiled
def pass_curves(t, value, first_node, A, B, C):  # type: ignore[no-untyped-def]
    """Each node's max(C, A x + B), its value x alone free, from its parent's; parents from `first_node` on.

    A decision node folds its best other child into C, a chance node its other children into B.
    """
    for v in range(first_node, len(t.parent)):
        if t.first[v] == t.first[v + 1]:
            continue
        first, second = -np.inf, -np.inf
        for j in range(t.first[v], t.first[v + 1]):
            q = t.reward[t.child[j]] + t.discount[t.child[j]] * value[t.child[j]]
            if q > first:
                first, second = q, first
            elif q > second:
                second = q
        for j in range(t.first[v], t.first[v + 1]):
            w = t.child[j]
            q = t.reward[w] + t.discount[w] * value[w]
            if t.is_decision[v]:
                other = second if q == first else first
                C[w] = max(C[v], A[v] * other + B[v]) if A[v] > 0.0 else C[v]
                A[w] = A[v] * t.discount[w]
                B[w] = A[v] * t.reward[w] + B[v]
            else:
                C[w] = C[v]
                A[w] = A[v] * t.prob[w] * t.discount[w]
                B[w] = A[v] * (value[v] - t.prob[w] * t.discount[w] * value[w]) + B[v]


@compiled
def _static_rate(rng, t, b, remaining):  # type: ignore[no-untyped-def]
    """Best leaf by max over k in 1, 2, 4, ... of VOC_0(k) / k; `even` where every value underflows.

    The root's value as a function of one node's value x is max(C, A x + B), passed down from the root.
    """
    n = len(t.parent)
    value = _values(t, b.mean)
    A, B, C = np.ones(n), np.zeros(n), np.full(n, -np.inf)
    pass_curves(t, value, 0, A, B, C)
    best, best_rate = -1, 0.0
    for i in range(len(t.leaf)):
        w = t.leaf[i]
        gap = abs(A[w] * b.mean[i] + B[w] - C[w])
        k = 1
        while k <= remaining:
            s = A[w] * b.var[i] / math.sqrt(b.var[i] + b.noise[i] / k)
            if s > 0.0:
                z = gap / s
                rate = s * (_PHI_0 * math.exp(-0.5 * z * z) - 0.5 * z * math.erfc(z * _SQRT_HALF)) / k
                if rate > best_rate:
                    best, best_rate = i, rate
            k *= 2
    return best if best >= 0 else _even(rng, b.visits)
