"""What trials on one win/loss leaf are worth when a sure value competes: the crossing sum; floor 2.

While trials arrive, the posterior mean m_t = (alpha + y) / (alpha + beta + t), y wins in t trials, is a
martingale, so E[(m_t - c)+] grows from t - 1 to t only in the one state whose next trial can carry the
mean across c (the discrete Tanaka formula, the growth of local time at c). Walk along those states: at
or above c add a loss, below c add a win. The state (t, y) so reached adds

    P_t(y) (y / t) (m - c)      at or above c: its last trial was a win from below with odds y / t
    P_t(y) (1 - y / t) (c - m)  below c: its last trial was a loss from above

P_t(y) the beta-binomial probability. So the worth of every batch 1 ... k costs O(k) in all, as a sum of
terms >= 0: relative accuracy holds in the far tails, and the worth never falls with k by construction.
"""

from __future__ import annotations

import math

import numpy as np
from scipy.special import betainc, betaincc

from distill.beta_numerics import beta_divergence, beta_log_constant
from distill.numerics import compiled
from distill.tree import Floats

__all__ = ["crossing_best_rate", "crossing_gain", "crossing_limit", "first_crossing"]

_BIG = 1e200  # probabilities are carried with a power of this, so that none underflows


@compiled
def crossing_gain(alpha: float, beta: float, c: float, k: int) -> float:
    """E[max(m_k, c)] - max(m_0, c), m_t the posterior mean of Beta(alpha, beta) after t trials.

    alpha, beta > 0; c any number; k >= 0 trials; the result has the unit of a probability, is >= 0 and
    relatively accurate to about k roundings, given c.

    >>> round(12 * crossing_gain(1.0, 1.0, 0.5, 1), 12)
    1.0
    """
    return crossing_best_rate(alpha, beta, c, k, k, math.inf)[0]


@compiled
def crossing_best_rate(
    alpha: float, beta: float, c: float, first: int, last: int, limit: float
) -> tuple[float, int, int]:
    """Best gain(k) / k over first <= k <= last: (gain there, its k, the last k looked at).

    Ties go to the smallest k. limit >= gain(infinity): once limit / (k + 1) cannot beat the best, the
    walk stops, which certifies it. Pass infinity to walk to the end.
    """
    if not 0.0 < c < 1.0:
        return 0.0, first, last
    n = alpha + beta
    above = alpha / n >= c
    wins, t = 0, 0
    prob, gain, power = 1.0, 0.0, 0
    best_gain, best_k, best_rate = 0.0, first, 0.0
    while t < last:
        if above:
            prob *= (t + 1.0) / (t + 1.0 - wins) * ((beta + (t - wins)) / (n + t))
        else:
            prob *= (t + 1.0) / (wins + 1.0) * ((alpha + wins) / (n + t))
            wins += 1
        t += 1
        away = ((alpha + wins) - c * (n + t)) / (n + t)
        above = away >= 0.0
        share = wins / t if above else (t - wins) / t
        gain += prob * share * abs(away)
        if prob < 1.0 / _BIG and gain == 0.0:
            prob, limit = prob * _BIG, limit * _BIG
            power -= 1
        elif prob > 1.0 and power < 0:
            prob, gain, limit = prob / _BIG, gain / _BIG, limit / _BIG
            best_gain, best_rate = best_gain / _BIG, best_rate / _BIG
            power += 1
        if t >= first and gain / t > best_rate:
            best_gain, best_k, best_rate = gain, t, gain / t
        if t >= first and limit / (t + 1.0) <= best_rate:
            break
    for _ in range(-power):
        best_gain /= _BIG
    return best_gain, best_k, t


def crossing_limit(alpha: Floats, beta: Floats, c: Floats) -> Floats:
    """An upper bound of gain(infinity) = E[max(p, c)] - max(m_0, c), p ~ Beta; arrays of one shape.

    With D = c^alpha (1 - c)^beta / ((alpha + beta) B(alpha, beta)): D - (c - m) P(p > c) for m <= c,
    D - (m - c) P(p < c) for m > c; widened by 1e-10 D for the rounding of that difference.

    >>> round(float(crossing_limit(np.array([1.0]), np.array([1.0]), np.array([0.5]))[0]), 8)
    0.125
    """
    inside = (c > 0) & (c < 1)
    safe = np.where(inside, c, 0.5)
    m = alpha / (alpha + beta)
    peak = _peaks(alpha, beta, safe)
    tail = np.where(m <= safe, betaincc(alpha, beta, safe), betainc(alpha, beta, safe))
    bound = np.maximum(peak - np.abs(m - safe) * tail, 0.0) + 1e-10 * peak
    return np.where(inside, bound, 0.0)


@compiled
def _peaks(alpha: Floats, beta: Floats, c: Floats) -> Floats:
    out = np.empty(len(c))
    for i in range(len(c)):
        a, b = alpha[i], beta[i]
        log_peak = beta_log_constant(a, b) - beta_divergence(a, b, c[i], 1.0 - c[i])
        out[i] = math.exp(log_peak) / (a + b)
    return out


def first_crossing(alpha: Floats, beta: Floats, c: Floats) -> Floats:
    """A lower bound of the fewest trials that can carry the posterior mean across c; inf where none can.

    >>> first_crossing(np.array([1.0]), np.array([40.0]), np.array([0.5]))  # truly 40
    array([37.])
    """
    inside = (c > 0) & (c < 1)
    safe = np.where(inside, c, 0.5)
    ahead = safe * (alpha + beta) - alpha
    trials = np.where(ahead >= 0, ahead / (1 - safe), -ahead / safe)
    trials = np.floor(trials * (1 - 1e-9)) - 1
    return np.where(inside, np.maximum(trials, 1.0), math.inf)
