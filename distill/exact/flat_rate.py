"""Best batch at one leaf of a flat tree: the whole number k <= remaining of greatest VOC(k) / k; floor 2.

At an infinite horizon VOC(k) / k is taken to have one peak (no counterexample is known; not proved) and
its derivative comes with the VOC. At a finite horizon it may have several, and branch and bound over k
certifies the best: more rollouts never lose value.
"""

from __future__ import annotations

import math

import numpy as np

from distill.exact.looks import Looks, later_sd, voc_at
from distill.numerics import compiled, gain_ratio
from distill.tree import Floats

__all__ = ["best_rate"]

_CERTAIN = 1e-7  # a rate that exceeds the best found by less than this share is not looked for
_MOST_BATCHES = 4096  # priced a leaf before the search gives up its certificate; the error then says so


@compiled
def best_rate(looks: Looks, remaining: float) -> tuple[float, float, float]:
    """(batch, rate, error bound) of greatest VOC(k) / k; one peak is taken for granted at h = inf only."""
    if looks.h == math.inf:
        return _one_peak(looks, remaining)
    return _every_peak(looks, remaining)


@compiled
def _one_peak(looks: Looks, remaining: float) -> tuple[float, float, float]:
    """Regula falsi on log k for where k VOC'(k) = VOC(k), down to neighbouring whole numbers."""
    low = 1.0
    voc, error, climb, y0 = voc_at(looks, low)
    if remaining == 1.0 or (climb <= voc and voc > 0.0):
        return 1.0, voc, error
    rate_low = voc
    error_low = error
    f_low = _excess(climb, voc)
    high = remaining
    voc, error, climb, _ = voc_at(looks, high)
    rate_high = voc / high
    error_high = error / high
    if voc == 0.0:
        return 1.0, rate_low, error_low
    if climb > voc:
        if high - low > 1.0:
            low = high - 1.0
            voc, error, _, _ = voc_at(looks, low)
            rate_low = voc / low
            error_low = error / low
    else:
        f_high = _excess(climb, voc)
        guess = _first_order_batch(looks, y0, remaining)
        stale = 0
        while high - low > 1.0:
            k = min(max(guess, low + 1.0), high - 1.0)
            voc, error, climb, _ = voc_at(looks, k)
            f = _excess(climb, voc)
            if climb > voc or voc == 0.0:
                stale = stale + 1 if stale > 0 else 1
                low, rate_low, error_low, f_low = k, voc / k, error / k, f
                if stale > 1:
                    f_high *= 0.5
            else:
                stale = stale - 1 if stale < 0 else -1
                high, rate_high, error_high, f_high = k, voc / k, error / k, f
                if stale < -1:
                    f_low *= 0.5
            share = f_low / (f_low - f_high)
            if not 0.0 < share < 1.0:
                share = 0.5
            guess = math.floor(low * (high / low) ** share + 0.5)
    if rate_low >= rate_high:
        return low, rate_low, error_low
    return high, rate_high, error_high


@compiled
def _excess(climb: float, voc: float) -> float:
    """log(k VOC' / VOC), within bounds: its root is the peak of VOC(k) / k."""
    if voc <= 0.0 or climb >= voc * 1e30:
        return 69.0
    if climb <= voc * 1e-30:
        return -69.0
    return math.log(climb / voc)


@compiled
def _first_order_batch(looks: Looks, y0: float, remaining: float) -> float:
    """Where the peak would be if the action's value were linear with its crossing at y0."""
    low = 1.0
    high = remaining
    distance = abs(y0 - looks.mu)
    while high > 1.02 * low:
        k = math.sqrt(low) * math.sqrt(high)
        z = distance / later_sd(looks.gain, looks.v, looks.n, k)
        if 2.0 * (1.0 + k * (looks.v / looks.n)) * gain_ratio(z) < 1.0:
            low = k
        else:
            high = k
    return math.floor(math.sqrt(low) * math.sqrt(high) + 0.5)


@compiled
def _every_peak(looks: Looks, remaining: float) -> tuple[float, float, float]:
    """Branch and bound: VOC never falls with k, so inside (a, b) no rate exceeds VOC(b) / (a + 1)."""
    voc, error, _, _ = voc_at(looks, 1.0)
    best_k, best, ceiling = 1.0, voc, voc + error
    if remaining == 1.0:
        return best_k, best, error
    last, error, _, _ = voc_at(looks, remaining)
    ceiling = max(ceiling, (last + error) / remaining)
    if last / remaining > best:
        best_k, best = remaining, last / remaining
    room = 64
    opened = np.empty((room, 4))  # intervals not priced inside: a, b, ceiling of VOC(b), bound of the rate
    count = _open(opened, 0, 1.0, remaining, last + error)
    for _ in range(_MOST_BATCHES):
        j = 0
        for q in range(count):
            if opened[q, 3] > opened[j, 3]:
                j = q
        if count == 0 or opened[j, 3] <= best * (1.0 + _CERTAIN):
            break
        a = opened[j, 0]
        b = opened[j, 1]
        top = opened[j, 2]
        count -= 1
        for q in range(4):
            opened[j, q] = opened[count, q]
        k = min(max(math.floor(math.sqrt(a) * math.sqrt(b)), a + 1.0), b - 1.0)
        voc, error, _, _ = voc_at(looks, k)
        ceiling = max(ceiling, (voc + error) / k)
        if voc / k > best or (voc / k == best and k < best_k):
            best_k, best = k, voc / k
        if count + 2 > room:
            room *= 2
            wider = np.empty((room, 4))
            for q in range(count):
                for r in range(4):
                    wider[q, r] = opened[q, r]
            opened = wider
        count = _open(opened, count, a, k, voc + error)
        count = _open(opened, count, k, b, top)
    for q in range(count):
        ceiling = max(ceiling, opened[q, 3])
    return best_k, best, ceiling - best


@compiled
def _open(opened: Floats, count: int, a: float, b: float, top: float) -> int:
    """Keep (a, b), if there is a whole number inside; returns how many are kept."""
    if b - a <= 1.0:
        return count
    opened[count, 0] = a
    opened[count, 1] = b
    opened[count, 2] = top
    opened[count, 3] = top / (a + 1.0)
    return count + 1
