"""VOC of one leaf from the distribution of its threshold; floor 2.

The leaf's action is worth  const + E max(y + tau Z, T)  once the leaf's posterior mean is y ~ N(mu, s^2);
tau^2 is the variance that is still to come. With  e(y) = E max(y + tau Z - T, 0),  increasing and convex,
slope  e'(y) = F_tau(y) = E F_T(y + tau Z)  in [0, 1], and `ahead` = best rival's value - this action's:

    e(y0) = e_now + ahead                                the outcome at which the best action changes
    action behind (ahead >= 0)    VOC = integral from y0 to infinity of  F_tau(y) Phi((mu - y) / s)
    action best (ahead < 0)       VOC = integral from -infinity to y0 of F_tau(y) Phi((y - mu) / s)
                                        + e_after - e_now, E max(X - T, 0) with all variance after and now

Every integrand is positive, so tiny values keep their relative accuracy as far as T's does.
"""

from __future__ import annotations

import math

import numpy as np

from distill.exact.distributions import COEFFICIENTS, REACH, Distribution, N, near_nodes, node_room
from distill.numerics import compiled, gain, gauss_legendre, norm_cdf
from distill.tree import Floats

__all__ = ["threshold_voc"]

_T, _W = gauss_legendre(N)
_UP = 38.0  # standard deviations above which a normal tail is below the smallest double
_BULK = 1e-5  # where F_tau exceeds this, normal tails beyond REACH are below rounding
_EPS = 2.0**-52
_ROOM = 5.0  # widest panel, in standard deviations of what is smooth: 16 nodes give 1e-14
_INV_SQRT_2PI = 0.3989422804014327


@compiled
def _slope(T: Distribution, y: float, tau: float, t: Floats, m: Floats) -> float:
    """F_tau(y)."""
    for up in (REACH, _UP):  # the far side matters only where nothing is near
        n, total, _moment = near_nodes(T, y, tau, up, t, m)
        if tau == 0.0:
            for i in range(n):
                total += m[i]
            return max(total, 0.0)
        for i in range(n):
            total += m[i] * norm_cdf(t[i] / tau)
        if total > _BULK:
            break
    return max(total, 0.0)


@compiled
def _excess(T: Distribution, y: float, tau: float, t: Floats, m: Floats) -> tuple[float, float]:
    """e(y) and its slope."""
    value = 0.0
    slope = 0.0
    for up in (REACH, _UP):
        n, slope, moment = near_nodes(T, y, tau, up, t, m)
        value = -moment
        for i in range(n):
            d = t[i]
            if tau == 0.0:
                slope += m[i]
                value += m[i] * d
                continue
            z = d / tau
            P = norm_cdf(z)
            slope += m[i] * P
            if z > -6.0:  # beyond, the two terms cancel too far
                value += m[i] * (d * P + tau * _INV_SQRT_2PI * math.exp(-0.5 * z * z))
            else:
                value += m[i] * tau * gain(z)
        if slope > _BULK:
            break
    return value, slope


@compiled
def _crossing(T: Distribution, tau: float, target: float, start: float, t: Floats, m: Floats) -> float:
    """y with e(y) = target > 0: Newton's method, on log e where it is far off; e convex, increasing."""
    low, high = -math.inf, math.inf
    y = start
    for _ in range(200):
        e, slope = _excess(T, y, tau, t, m)
        if e > target:
            high = min(high, y)
        elif e < target:
            low = max(low, y)
        else:
            return y
        if slope > 0.0 and e > 0.0:
            ratio = e / target
            if 0.5 < ratio < 2.0:
                step = (e - target) / slope
            else:
                step = math.log(ratio) * e / slope
            new = y - step
        else:
            new = math.inf
        if not (low < new < high):
            if low > -math.inf and high < math.inf:
                new = 0.5 * (low + high)
            elif high < math.inf:
                new = high - (1.0 + abs(high - start)) * max(tau, T.spread)
            else:
                new = low + (1.0 + abs(low - start)) * max(tau, T.spread)
        if abs(new - y) <= 2.0 * _EPS * abs(y) + 1e-17 * (tau + T.spread) or not (low < new < high):
            return new
        y = new
    return y


@compiled
def _room_to(T: Distribution, a: float, tau: float, up: bool) -> float:
    """How far from a, up or down, F_tau is smooth enough for one panel.

    Panels and hard edges of T show within REACH tau of where they are, at their own scale and tau together.
    """
    P = len(T.edges) - 1
    if tau * _ROOM <= 8.0 * _EPS * abs(a):  # no step of that size can be taken
        tau = 0.0
    spread = REACH * tau
    w = math.inf
    for step in range(2 * P + 1):
        # From near to far: what lies close may already end the panel.
        if step < P:
            p = step if up else P - 1 - step
            first, last = T.edges[p], T.edges[p + 1]
            width = math.hypot(last - first, _ROOM * tau)
        else:
            j = step - P if up else 2 * P - step
            if not T.hard[j]:
                continue
            first = last = T.edges[j]
            width = _ROOM * tau
        near, far = (first - spread - a, last + spread - a) if up else (a - last - spread, a - first + spread)
        if far > 0.0 and near < w:
            w = min(w, max(width, near))
    return w


@compiled
def _beyond(
    T: Distribution, y0: float, mu: float, s: float, tau: float, up: bool, t: Floats, m: Floats
) -> tuple[float, float]:
    """The integral on one side of y0, and a bound on its quadrature error."""
    sign = 1.0 if up else -1.0
    last = T.edges[len(T.edges) - 1]
    total = 0.0
    error = 0.0
    values = np.empty(N)
    a = y0
    for _ in range(10000):
        z = sign * (a - mu) / s
        rest = s * gain(-z)  # the integral of the normal factor alone
        if rest == 0.0:
            break
        if up and a >= last + REACH * tau:
            total += rest
            break
        width = s * (_ROOM if z < 2.0 else 10.0 / z)
        if z < -9.0:  # the normal factor is 1 there
            width = s * (-z - 8.0)
        w = min(width, _room_to(T, a, tau, up))
        half = 0.5 * w
        piece = 0.0
        lowest = math.inf
        for i in range(N):
            y = a + sign * half * (1.0 + _T[i])
            F = _slope(T, y, tau, t, m)
            lowest = min(lowest, F)
            values[i] = F * norm_cdf(sign * (mu - y) / s)
            piece += _W[i] * half * values[i]
        total += piece
        error += half * _unresolved(values) + 5e-14 * piece
        a += sign * w
        z = sign * (a - mu) / s
        rest = s * gain(-z) * (1.0 if up else lowest)
        if rest <= 1e-17 * total or a == a - sign * w:
            break
    return total, error


@compiled
def _unresolved(values: Floats) -> float:
    """What Gauss-Legendre leaves out of an integrand, from how its Chebyshev coefficients fall.

    The rule is exact to degree 2 N - 1, and coefficients of analytic functions fall geometrically: from the
    last ones of N, those at 2 N are about their square over the largest.
    """
    last = 0.0
    before = 0.0
    largest = 0.0
    for i in range(N):
        last += COEFFICIENTS[N - 1, i] * values[i]
        before += COEFFICIENTS[N - 2, i] * values[i]
        largest = max(largest, values[i])
    tail = abs(last) + abs(before)
    return 8.0 * tail * min(tail / largest, 1.0) if largest > 0.0 else 0.0


@compiled
def _gain_of_variance(
    T: Distribution, mu: float, sd_now: float, sd_after: float, t: Floats, m: Floats
) -> tuple[float, float]:
    """e_after - e_now = integral over u from sd_now to sd_after of E phi((mu - T) / u), and its error."""
    total = 0.0
    error = 0.0
    high = sd_after
    ratio = 0.5
    values = np.empty(N)
    for _ in range(2000):
        if not high > sd_now:
            break
        low = max(sd_now, ratio * high)
        half = 0.5 * (high - low)
        piece = 0.0
        for i in range(N):
            u = low + half + half * _T[i]
            n, _mass, _moment = near_nodes(T, mu, u, _UP, t, m)
            values[i] = 0.0
            for j in range(n):
                z = t[j] / u
                values[i] += m[j] * math.exp(-0.5 * z * z)
            piece += _W[i] * half * values[i]
        left = half * _unresolved(values)
        if left > 1e-14 * (total + piece) and ratio < 0.999:
            ratio = math.sqrt(ratio)  # exp(-z^2 / 2) is steep in u: shorter steps
            continue
        total += piece
        error += left
        high = low
        if piece <= 1e-17 * total or high < 1e-300:
            break
        ratio = max(0.5, ratio * ratio)
    return total * _INV_SQRT_2PI, error * _INV_SQRT_2PI


@compiled
def threshold_voc(
    T: Distribution,
    mu: float,
    sd_now: float,
    s: Floats,
    tau: Floats,
    ahead: float,
    slack: float,
    voc: Floats,
    error: Floats,
) -> None:
    """VOC of one leaf for several batches; fills voc and error, u.

    T : the threshold; mu, sd_now : mean and standard deviation now of what is compared with it.
    s, tau : spread of the posterior mean that the batch brings, and what is still to come after it.
    ahead : best rival's value less this action's (-inf: no rival). slack : error bound of `ahead`.
    """
    room = node_room(T, _UP)
    t = np.empty(room)
    m = np.empty(room)
    e_now, _slope = _excess(T, mu, sd_now, t, m)
    target = e_now + ahead
    slack += T.error
    for k in range(len(s)):
        voc[k] = 0.0
        error[k] = 0.0
        if s[k] == 0.0:
            continue
        best = ahead < 0.0
        if best:
            sd_after = math.sqrt(s[k] * s[k] + tau[k] * tau[k])
            if sd_after > sd_now * (1.0 + 1e-14):
                voc[k], error[k] = _gain_of_variance(T, mu, sd_now, sd_after, t, m)
                voc[k] = max(voc[k], 0.0)
                # An error of T swings e by at most T.error, and each e averages it with its own normal:
                # their difference by no more than the total variation between the two.
                apart = min(0.5 * math.log(sd_after / sd_now), 1.0)
                error[k] += 1e-13 * voc[k] + apart * T.error
        if target <= -slack:
            continue
        if target <= 0.0:
            error[k] += slack
            continue
        start = target + T.mean
        y0 = _crossing(T, tau[k], target, start, t, m)
        value, quad = _beyond(T, y0, mu, s[k], tau[k], not best, t, m)
        voc[k] += value
        # At an outcome y the value is known to T.error + slack, for e_tau(y) - e_now is off by T.error at
        # most; that carries over with the odds of such an outcome.
        _e0, slope0 = _excess(T, y0, tau[k], t, m)
        z = (mu - y0) / s[k] if not best else (y0 - mu) / s[k]
        odds = norm_cdf(z + min(slack / (s[k] * max(slope0, 1e-300)), 1e6))
        error[k] += quad + (slack + 2.0 * _EPS * (abs(y0) + abs(mu))) * odds
