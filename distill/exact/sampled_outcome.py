"""The outer expectation of sampled values: E_Z[max_a V_a(Z)] - max_a V_a, in gain form; compiled; floor 2."""

from __future__ import annotations

import math

import numpy as np

from distill.exact.sampled_rises import REACH
from distill.numerics import compiled, norm_cdf, norm_pdf
from distill.tree import Floats

__all__ = ["mean_over_outcomes", "outer_expectation"]

_STANDARD_ERRORS = 4.0
# Errors of interpolation over what `sampled_nodes` says is missed, the largest for one kink, the worst of
# functions, wherever it lies between nodes: 0.7 in the mean over all outcomes and 1.05 over a range of them,
# taken as _SWING each, for every bound adds both; 17.5 at one outcome.
_SWING, _HEIGHT = 0.9, 18.0


@compiled
def mean_over_outcomes(value: Floats, bend: Floats, spread: Floats) -> Floats:
    """E[v(Z)] of each function on the grid, shape (scrambles, actions); Z standard normal."""
    scrambles, n_actions, n_edges = value.shape
    middle, weight, right = _weights(n_edges - 1)
    step = 2 * REACH / (n_edges - 1)
    out = np.zeros((scrambles, n_actions))
    for s in range(scrambles):
        for a in range(n_actions):
            for g in range(n_edges - 1):
                out[s, a] += value[s, a, g] * (weight[g] - right[g]) + value[s, a, g + 1] * right[g]
                out[s, a] -= _sag(bend[s, a, g], spread[s, a, g], step) * middle[g]
    return out / np.sum(weight)


@compiled
def outer_expectation(
    now: Floats, more: Floats, value: Floats, bend: Floats, spread: Floats, missed: Floats
) -> tuple[float, float, float]:
    """VOC, a bound on its error from samples, and one on what interpolation along the outcome adds to it.

    now, more : V_a at present, and E[V_a(Z)] - V_a >= 0 (0 at h infinite); (scrambles, actions).
    value, bend, spread : V_a(z) on the grid up to a constant, which E[V_a(Z)] = now + more fixes: only the
        shape along z is taken from these, usually fewer, samples.
    missed : (2, actions) how far the mean of these, and of what `more` was taken from, may be off at any z.

    With r the best action at present, the VOC is E[max_a V_a(Z) - V_r(Z)] + E[V_r(Z)] - V_r. Which action
    is best at z is read off the mean over scrambles; given that, the VOC is linear in the samples and its
    standard error is that of the scrambles' own values. The bound is 4 of them, plus what another choice
    within 4 standard errors could add anywhere, plus what kinks inside a bin that holds a crossing hide.
    What interpolation misses swings about 0: over a range of outcomes little of its height is left.
    """
    scrambles, n_actions, n_edges = value.shape
    middle, weight, right = _weights(n_edges - 1)
    step = 2 * REACH / (n_edges - 1)
    total = now + more - mean_over_outcomes(value, bend, spread)
    v = np.empty_like(value)
    for s in range(scrambles):
        for a in range(n_actions):
            v[s, a] = value[s, a] + total[s, a]
    pooled = np.zeros((n_actions, n_edges))
    for s in range(scrambles):
        pooled += v[s] / scrambles
    present = np.zeros(n_actions)
    for s in range(scrambles):
        present += now[s] / scrambles
    r = int(np.argmax(present))
    best = np.empty(n_edges, dtype=np.int64)
    doubt, more_doubt = np.empty(n_edges), np.empty(n_edges)
    astray = missed[0] + missed[1]
    for e in range(n_edges):
        best[e] = np.argmax(pooled[:, e])
        doubt[e], more_doubt[e] = _doubt(v, pooled, astray, e, best[e])
    voc = more[:, r].copy()
    hidden, elsewhere = 0.0, 0.0
    between, worst = _SWING * missed[1, r], astray[r]
    for g in range(n_edges - 1):
        a, b = best[g], best[g + 1]
        hidden += max(doubt[g], doubt[g + 1]) * weight[g]
        between += max(more_doubt[g], more_doubt[g + 1]) * weight[g]
        if a != r or b != r:
            elsewhere += weight[g]
            worst = max(worst, astray[a], astray[b])
        share = 0.0  # of the bin where b is better than a
        if a != b:
            ahead = pooled[b, g + 1] - pooled[a, g + 1]
            share = ahead / (ahead + pooled[a, g] - pooled[b, g]) if ahead > 0 else 0.0
            kinks = np.sum(bend[:, a, g]) + np.sum(bend[:, b, g])
            hidden += kinks / scrambles * step * step / 8 * middle[g]
        for s in range(scrambles):
            if a != r:
                voc[s] += (v[s, a, g] - v[s, r, g]) * (weight[g] - right[g])
                voc[s] += (v[s, a, g + 1] - v[s, r, g + 1]) * right[g]
                sag_r = _sag(bend[s, r, g], spread[s, r, g], step)
                voc[s] -= (_sag(bend[s, a, g], spread[s, a, g], step) - sag_r) * middle[g]
            if share > 0:
                left_lead, right_lead = v[s, b, g] - v[s, a, g], v[s, b, g + 1] - v[s, a, g + 1]
                lead = share * right_lead - share * share / 2 * (right_lead - left_lead)
                voc[s] += lead * weight[g]
    mean = np.mean(voc)
    error = math.sqrt(np.sum((voc - mean) ** 2) / (scrambles * (scrambles - 1)))
    between += 2 * worst * min(elsewhere * _HEIGHT, _SWING)
    return max(float(mean), 0.0), _STANDARD_ERRORS * error + hidden, between


@compiled
def _doubt(v: Floats, pooled: Floats, astray: Floats, e: int, best: int) -> tuple[float, float]:
    """How much another action could be ahead of the best one at edge e, within 4 standard errors.

    Second, how much more it could be where interpolation is astray, in the values there and in their level.
    """
    scrambles, n_actions = v.shape[0], v.shape[1]
    worst = widest = 0.0
    for a in range(n_actions):
        if a == best:
            continue
        behind = pooled[best, e] - pooled[a, e]
        square = 0.0
        for s in range(scrambles):
            square += (v[s, best, e] - v[s, a, e] - behind) ** 2
        slack = _STANDARD_ERRORS * math.sqrt(square / (scrambles * (scrambles - 1)))
        worst = max(worst, slack - behind)
        widest = max(widest, slack + 2 * (astray[a] + astray[best]) - behind)
    return worst, widest - worst


@compiled
def _sag(bend: float, spread: float, step: float) -> float:
    """Area between the chord over a bin and the function: sum of d (t - u)(v - t) / 2 over its kinks."""
    return (bend * step * step / 4 - spread) / 2


@compiled
def _weights(bins: int) -> tuple[Floats, Floats, Floats]:
    """Of each bin: density in the middle, probability, and the part of it that the right edge carries."""
    step = 2 * REACH / bins
    middle, weight, right = np.empty(bins), np.empty(bins), np.empty(bins)
    for g in range(bins):
        u = -REACH + g * step
        middle[g] = norm_pdf(u + step / 2)
        weight[g] = norm_cdf(u + step) - norm_cdf(u) if u < 0 else norm_cdf(-u) - norm_cdf(-u - step)
        # integral of (z - u) / step phi(z)
        right[g] = (norm_pdf(u) - norm_pdf(u + step) - u * weight[g]) / step
    return middle, weight, right
