"""What trials on a leaf are worth when its action has other leaves too: the walk on panels; floor 2.

Once a leaf's win rate is known to be p, its action is worth c + G(p), c the best rival's value and

    G(p) = y - c + T(y),  y = low + width p,  T(y) = E (best of the action's other leaves - y)+,

convex and rising. After y wins in t trials the action is worth c + h_t,y, h_t,y = E G(p) under
Beta(alpha + y, beta + t - y): a martingale, rising in y. So the sum of `trial_walk` holds with h in the
place of the posterior mean: each trial costs one dot product of G with the density at the nodes, and the
density of the next state is that of the last times p or 1 - p.

The nodes are laid anew for every stretch of the walk on which the density keeps its shape.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from distill.beta_numerics import beta_density, beta_divergence, beta_log_constant, lower_tail
from distill.exact.beta_panels import N, W, X, is_singular, rates_at
from distill.numerics import compiled
from distill.tree import Floats

__all__ = ["Race", "endless_gain", "expected_gap", "reachable_gap", "walk"]

_EPS = 2.0**-52
_BIG = 1e200
_WINDOW = 45.0  # nodes cover the density down to exp(-this) of its peak
_SUB = 2.5  # widest piece of a panel, in standard deviations of the density
_STRETCH = 512  # longest stretch of trials on one set of nodes
_PATIENCE = 32  # trials without a crossing before the walk looks for the first one by bisection
_BARY = np.array([1.0 / np.prod([x - y for y in X if y != x]) for x in X])
_BARY = _BARY / np.abs(_BARY).max()


class Race(NamedTuple):
    """One leaf, the others of its action, and the action's best rival; a plain tuple for compiled code.

    low, width : the leaf is worth low + width p. rival : value of the best other action.
    anchor, left, right : panels, (P,). inside, edge : T on them, (P, N) and (P + 1,), see `beta_panels`.
    They begin at the floor: below it the others are better for sure, so T has slope -1 and G is flat.
    """

    low: float
    width: float
    rival: float
    anchor: Floats
    left: Floats
    right: Floats
    inside: Floats
    edge: Floats


@compiled
def _through(values: Floats, x: float) -> float:
    """The polynomial through `values` at the nodes of a panel, at x in [-1, 1] (barycentric formula)."""
    top, bottom = 0.0, 0.0
    for r in range(N):
        if x == X[r]:
            return values[r]
        share = _BARY[r] / (x - X[r])
        top += share * values[r]
        bottom += share
    return top / bottom


@compiled
def _spread(a: float, b: float) -> float:
    """Standard deviation, or where a density is singular its smooth part's width: exponents at least 1."""
    a, b = max(a, 1.0), max(b, 1.0)
    n = a + b
    return math.sqrt((a / n) * (b / n) / (n + 1.0))


@compiled
def _edge_of_window(a: float, b: float, start: float, stop: float) -> float:
    """The point between start and stop where the density has fallen by exp(-_WINDOW) from start."""
    base = beta_divergence(a, b, start, 1.0 - start) if 0.0 < start < 1.0 else 0.0
    near, far = start, stop
    for _ in range(40):
        p = 0.5 * (near + far)
        if p <= 0.0 or p >= 1.0 or beta_divergence(a, b, p, 1.0 - p) - base > _WINDOW:
            far = p
        else:
            near = p
    span = abs(stop - start)
    return stop if abs(near - stop) < 1e-9 * span else far


@compiled
def _floor(race: Race) -> tuple[float, float]:
    """(p, G) at the floor; p <= 0 where the leaf's support begins above it."""
    y = race.anchor[0] + race.left[0]
    return (y - race.low) / race.width, (y - race.rival) + race.edge[0]


@compiled
def _overlap(race: Race, s: int, first: float, last: float) -> tuple[float, float]:
    """Offsets from the anchor of panel s between which first <= p <= last; empty where they do not ascend."""
    from_low, to_high = race.anchor[s] - race.low, (race.low + race.width) - race.anchor[s]
    d0, d1 = race.left[s], race.right[s]
    d0 = max(d0, race.width * first - from_low if first > 0.0 else -from_low)
    d1 = min(d1, race.width * last - from_low if last < 1.0 else to_high)
    return d0, d1


@compiled
def _lay_nodes(
    a: float, b: float, p_min: float, p_max: float, race: Race
) -> tuple[Floats, Floats, Floats, Floats, Floats]:
    """Nodes p and q = 1 - p, their shares v of the density of Beta(a, b), G and T; p_min <= p <= p_max.

    The sum of v G is E[G; p_min <= p <= p_max], what lies below the floor left out. A last piece at a
    singular end is one node, at the mean of what lies in it.
    """
    n = a + b
    mean = a / n
    p_min = min(max(p_min, _floor(race)[0]), p_max)
    peak = min(max(mean, p_min), p_max)
    first = _edge_of_window(a, b, peak, p_min)
    last = _edge_of_window(a, b, peak, p_max)
    piece = _SUB * _spread(a, b)
    if peak != mean and 0.0 < peak < 1.0:
        piece = min(piece, 16.0 / abs(a / peak - b / (1.0 - peak)))
    piece *= race.width
    log_c = beta_log_constant(a, b)
    room = 0
    for s in range(len(race.anchor)):
        d0, d1 = _overlap(race, s, first, last)
        room += max(1, math.ceil((d1 - d0) / piece)) if d1 > d0 else 0
    p, q, v = np.empty(room * N), np.empty(room * N), np.empty(room * N)
    g, tail = np.empty(room * N), np.empty(room * N)
    count = 0
    for s in range(len(race.anchor)):
        d0, d1 = _overlap(race, s, first, last)
        if d1 <= d0:
            continue
        inside = race.inside[s]
        from_low, to_high = race.anchor[s] - race.low, (race.low + race.width) - race.anchor[s]
        half, middle = 0.5 * (race.right[s] - race.left[s]), 0.5 * (race.left[s] + race.right[s])
        p1, q0 = (from_low + d1) / race.width, (to_high - d0) / race.width
        at_low = from_low + d0 == 0.0 and a < 1.0 and is_singular(a) and p1 * n < 1.0
        at_high = to_high - d1 == 0.0 and b < 1.0 and is_singular(b) and q0 * n < 1.0
        if at_low or at_high:
            if at_low:
                p[count] = p1 * a / (a + 1.0)
                q[count] = 1.0 - p[count]
                v[count] = lower_tail(a, b, p1)
                d = race.width * p[count] - from_low
            else:
                q[count] = q0 * b / (b + 1.0)
                p[count] = 1.0 - q[count]
                v[count] = lower_tail(b, a, q0)
                d = to_high - race.width * q[count]
            tail[count] = _through(inside, (d - middle) / half)
            g[count] = ((race.anchor[s] - race.rival) + d) + tail[count]
            count += 1
            continue
        pieces = max(1, math.ceil((d1 - d0) / piece))
        whole = pieces == 1 and d0 == race.left[s] and d1 == race.right[s]
        step = (d1 - d0) / pieces
        for m in range(pieces):
            for r in range(N):
                d = d0 + step * (m + 0.5 * (1.0 + X[r]))
                p[count], q[count] = rates_at(from_low, to_high, d, race.width)
                if p[count] <= 0.0 or q[count] <= 0.0:
                    continue
                v[count] = 0.5 * step / race.width * W[r] * beta_density(a, b, log_c, p[count], q[count])
                tail[count] = inside[r] if whole else _through(inside, (d - middle) / half)
                g[count] = ((race.anchor[s] - race.rival) + d) + tail[count]
                count += 1
    return p[:count], q[:count], v[:count], g[:count], tail[:count]


@compiled
def _dot(v: Floats, g: Floats) -> float:
    s0, s1, s2, s3 = 0.0, 0.0, 0.0, 0.0
    stop = len(v) - len(v) % 4
    for r in range(0, stop, 4):
        s0 += v[r] * g[r]
        s1 += v[r + 1] * g[r + 1]
        s2 += v[r + 2] * g[r + 2]
        s3 += v[r + 3] * g[r + 3]
    for r in range(stop, len(v)):
        s0 += v[r] * g[r]
    return (s0 + s1) + (s2 + s3)


@compiled
def _gap_at(
    p: float,
    race: Race,
) -> float:
    """G(p) = y - rival + T(y)."""
    low, width, anchor, left, right, inside, edge = (
        race.low, race.width, race.anchor, race.left, race.right, race.inside, race.edge
    )  # fmt: skip
    s, stop = 0, len(anchor)
    while stop - s > 1:
        m = (s + stop) // 2
        if (anchor[m] - low) + left[m] <= width * p:
            s = m
        else:
            stop = m
    d = width * p - (anchor[s] - low)
    if d >= right[s]:
        tail = edge[s + 1]
        d = right[s] if s < len(anchor) - 1 else d
    elif d <= left[s]:
        tail, d = edge[s], left[s]
    else:
        half = 0.5 * (right[s] - left[s])
        tail = _through(inside[s], (d - left[s]) / half - 1.0)
    return ((anchor[s] - race.rival) + d) + tail


@compiled
def reachable_gap(race: Race) -> tuple[float, float, float]:
    """(G(0), G(1), p0): what the leaf can bring its action to, and where G(p0) = 0 in between."""
    g0 = _gap_at(0.0, race)
    g1 = _gap_at(1.0, race)
    p0, p1 = 0.0, 1.0
    if g0 < 0.0 < g1:
        for _ in range(60):
            p = 0.5 * (p0 + p1)
            if _gap_at(p, race) < 0.0:
                p0 = p
            else:
                p1 = p
    return g0, g1, 0.5 * (p0 + p1)


@compiled
def endless_gain(a: float, b: float, crossing: float, above: bool, under_floor: float, race: Race) -> float:
    """Worth of endless trials: E[G(p)+] where the action is behind, E[G(p)-] where it is best.

    crossing : where G changes sign. above : the action is best now. under_floor : mass below the floor.
    """
    p_min, p_max = (0.0, crossing) if above else (crossing, 1.0)
    _, _, v, g, _ = _lay_nodes(a, b, p_min, p_max, race)
    flat = max(-_floor(race)[1], 0.0) * under_floor if above else 0.0
    return abs(_dot(v, g)) + flat


class _Stretch(NamedTuple):
    """Nodes for a part of the walk: h = base + slope x mean win rate + sum of v f, off by `sure` at most.

    One of three forms. f = T, base + slope x mean rate the leaf's mean less the rival: exact where the
    other leaves hardly matter. f = G alone. f = G less its value at the floor, the base: where the leaf's
    mass reaches below the floor, where G is flat.
    """

    p: Floats
    q: Floats
    v: Floats
    f: Floats
    base: float
    slope: float
    sure: float
    mean: float
    spread: float
    n: float


@compiled
def _stretch(a: float, b: float, table_error: float, race: Race) -> _Stretch:
    n = a + b
    mean, spread = a / n, _spread(a, b)
    floor, flat = _floor(race)
    p, q, v, g, tail = _lay_nodes(a, b, 0.0, 1.0, race)
    if floor > 0.0 and (floor >= mean or beta_divergence(a, b, floor, 1.0 - floor) < _WINDOW):
        g -= flat
        size = _dot(v, g)
        sure = table_error + 4.0 * _EPS * size + 0.5 * _EPS * (abs(flat) + race.width)
        return _Stretch(p, q, v, g, flat, 0.0, sure, mean, spread, n)
    total, size, others = 0.0, 0.0, 0.0
    for r in range(len(v)):
        total += v[r]
        size += v[r] * abs(g[r])
        others += v[r] * tail[r]
    sure = table_error + min(others, size) * (abs(total - 1.0) + 2.0 * _EPS)
    sure += 0.5 * _EPS * (abs(race.low - race.rival) + race.width)
    if others < size:
        return _Stretch(p, q, v, tail, race.low - race.rival, race.width, sure, mean, spread, n)
    return _Stretch(p, q, v, g, 0.0, 0.0, sure, mean, spread, n)


@compiled
def _worth(now: _Stretch, rate: float) -> float:
    """h, where the leaf's mean win rate is `rate`."""
    return (now.base + now.slope * rate) + _dot(now.v, now.f)


@compiled
def expected_gap(a: float, b: float, race: Race) -> float:
    """E G(p): what the leaf's action is worth now, less the rival."""
    return _worth(_stretch(a, b, 0.0, race), a / (a + b))


@compiled
def walk(
    a: float,
    b: float,
    first: int,
    last: int,
    limit: float,
    table_error: float,
    race: Race,
) -> tuple[float, int, int, float]:
    """Best gain(k) / k over first <= k <= last: (gain there, its k, last k looked at, error of the gain).

    With first = last = k, the gain of k trials. limit >= gain(infinity) stops the walk early, as in
    `trial_walk.crossing_best_rate`; infinity walks to the end. table_error bounds the error of G.
    """
    n = a + b
    now = _stretch(a, b, table_error, race)
    h = _worth(now, a / n)
    above = h >= 0.0
    wins, t, stretch = 0, 0, 0
    prob, power = 1.0, 0
    gain, error = 0.0, 0.0
    best_gain, best_error, best_k, best_rate = 0.0, 0.0, first, 0.0
    turned = False
    while t < last:
        if t == _PATIENCE and not turned:
            t = _first_turn(a, b, above, t, last, race) - 1
            if t >= last:
                return 0.0, first, last, now.sure if abs(h) <= now.sure else 0.0
            wins = 0 if above else t
            prob, power = 1.0, 0
            for s in range(t):
                prob *= ((b if above else a) + s) / (n + s)
                if prob < 1.0 / _BIG:
                    prob *= _BIG
                    power -= 1
            limit *= _BIG ** float(-power)
            stretch = _STRETCH
        a_t, b_t, n_t = a + wins, b + (t - wins), n + t
        if stretch >= _STRETCH or n_t > 1.5 * now.n or abs(a_t / n_t - now.mean) > now.spread:
            now = _stretch(a_t, b_t, table_error, race)
            stretch = 0
        if above:
            prob *= (t + 1.0) / (t + 1.0 - wins) * (b_t / n_t)
            factor = n_t / b_t
            for r in range(len(now.v)):
                now.v[r] *= now.q[r] * factor
        else:
            prob *= (t + 1.0) / (wins + 1.0) * (a_t / n_t)
            factor = n_t / a_t
            for r in range(len(now.v)):
                now.v[r] *= now.p[r] * factor
            wins += 1
        t += 1
        stretch += 1
        h = _worth(now, (a + wins) / (n + t))
        turned = turned or above != (h >= 0.0)
        above = h >= 0.0
        share = wins / t if above else (t - wins) / t
        gain += prob * share * abs(h)
        # Where the side of the rival is in doubt, so is which of both terms applies.
        error += prob * now.sure * (share if abs(h) > now.sure else 1.0)
        if prob > 1.0 and power < 0:
            prob, gain, error, limit = prob / _BIG, gain / _BIG, error / _BIG, limit / _BIG
            best_gain, best_error, best_rate = best_gain / _BIG, best_error / _BIG, best_rate / _BIG
            power += 1
        if t == first or (t > first and gain / t > best_rate):
            best_gain, best_error, best_k, best_rate = gain, error, t, gain / t
        if t >= first and limit / (t + 1.0) <= best_rate:
            break
    for _ in range(-power):
        best_gain, best_error = best_gain / _BIG, best_error / _BIG
    return best_gain, best_k, t, best_error + best_gain * _EPS * (8.0 + best_k)


@compiled
def _first_turn(
    a: float,
    b: float,
    above: bool,
    t: int,
    last: int,
    race: Race,
) -> int:
    """Fewest trials, all losses (action best) or all wins, that change the sign of h; last + 1 if none do.

    h has one sign up to t trials.
    """
    known, step = t, t
    found = last + 1
    while known < last and found - known > 1:
        trial = min(known + step, last) if found > last else (known + found) // 2
        wins, losses = (0, trial) if above else (trial, 0)
        then = _stretch(a + wins, b + losses, 0.0, race)
        if (_worth(then, (a + wins) / (a + b + trial)) >= 0.0) != above:
            found = trial
        else:
            known, step = trial, 2 * step
    return found
