"""VOC of flat trees in 80-bit arithmetic, by plain positive integrals: a reference two digits better.

Nothing is shared with the package. Normal functions come from a Chebyshev series made here in 40-digit
arithmetic; every integral runs over panels cut at each whole standard deviation of each normal in it.
"""

from __future__ import annotations

import math
from functools import cache

import mpmath as mp
import numpy as np

from distill.tree import BeliefTree, leaf_table

L = np.longdouble
TAIL = 13  # standard deviations
_MIDDLE = 5.0


@cache
def _series() -> np.ndarray:
    """Chebyshev coefficients of Mills ratio x (t + 1) in (t - 5) / (t + 5)."""
    n = 70
    with mp.workdps(60):

        def f(u):
            t = _MIDDLE * (1 + u) / (1 - u)
            with mp.workdps(60 if t < 100 else 100):
                tail = mp.erfc(t / mp.sqrt(2)) / 2 * mp.sqrt(2 * mp.pi) * mp.exp(t * t / 2)
                return tail * (t + 1)

        nodes = [mp.cos(mp.pi * (2 * j + 1) / (2 * n)) for j in range(n)]
        values = [f(u) for u in nodes]
        out = []
        for k in range(48):
            c = 2 * mp.fsum(v * mp.cos(k * mp.acos(u)) for u, v in zip(nodes, values, strict=True)) / n
            out.append(L(mp.nstr(c / 2 if k == 0 else c, 30)))
    return np.array(out)


def pdf(x: np.ndarray) -> np.ndarray:
    return np.exp(-x * x / 2) / np.sqrt(2 * L("3.14159265358979323846264338327950288"))


def cdf(x: np.ndarray) -> np.ndarray:
    """Phi(x), relative accuracy about 1e-18 in the left tail."""
    x = np.asarray(x, dtype=L)
    t = np.abs(x)
    u = (t - _MIDDLE) / (t + _MIDDLE)
    tail = np.polynomial.chebyshev.chebval(u, _series()) / (t + 1) * pdf(t)
    return np.where(x > 0, 1 - tail, tail)


@cache
def _rule(n: int) -> tuple[np.ndarray, np.ndarray]:
    with mp.workdps(30):
        x0, _ = np.polynomial.legendre.leggauss(n)
        xs, ws = [], []
        for x in x0:
            x = mp.mpf(float(x))
            for _ in range(3):
                p0, p1 = mp.mpf(1), x
                for k in range(2, n + 1):
                    p0, p1 = p1, ((2 * k - 1) * x * p1 - (k - 1) * p0) / k
                slope = n * (x * p1 - p0) / (x * x - 1)
                x -= p1 / slope
            xs.append(L(mp.nstr(x, 25)))
            ws.append(L(mp.nstr(2 / ((1 - x * x) * slope * slope), 25)))
    return np.array(xs), np.array(ws)


def panels(cuts: np.ndarray, low: float, high: float, n: int = 13) -> tuple[np.ndarray, np.ndarray]:
    """Nodes and weights over [low, high], cut at `cuts`."""
    cuts = np.asarray(cuts, dtype=L)
    edges = np.unique(np.concatenate([[L(low)], cuts[(cuts > low) & (cuts < high)], [L(high)]]))
    x, w = _rule(n)
    half = np.diff(edges)[:, None] / 2
    return (edges[:-1, None] + half + half * x).ravel(), (half * w).ravel()


def _marks(mean, sd) -> np.ndarray:
    finer = 1 if len(mean) < 16 else 8  # many leaves make the product steeper than each
    steps = np.arange(-TAIL * finer, TAIL * finer + 1).astype(L) / finer
    return np.concatenate([[m] if s == 0 else m + steps * s for m, s in zip(mean, sd, strict=True)])


def product(x, mean, sd):
    """(prod_j Phi_j, 1 - it), both with relative accuracy."""
    up = np.zeros(np.shape(x), dtype=L)  # -log of the product
    for m, s in zip(mean, sd, strict=True):
        if s == 0:
            up = np.where(x >= m, up, np.inf)
        else:
            z = (x - m) / s
            low = cdf(np.minimum(z, 0))
            up = up - np.where(
                z > 0, np.log1p(-cdf(-np.maximum(z, 0))), np.log(np.maximum(low, L("1e-4000")))
            )
    return np.exp(-up), -np.expm1(-up)


def expected_max(mean, sd):
    """(largest mean, what the maximum adds to it), L."""
    mean, sd = np.asarray(mean, dtype=L), np.asarray(sd, dtype=L)
    k = int(np.argmax(mean))
    others = np.arange(len(mean)) != k
    if len(mean) == 1:
        return mean[0], L(0)
    low = min(float(np.min(mean - TAIL * sd)), float(mean[k]))
    high = float(np.max(mean + TAIL * sd))
    x, w = panels(_marks(mean, sd), low, high)
    below = product(x, mean[[k]], sd[[k]])[0]
    return mean[k], np.sum(w * below * product(x, mean[others], sd[others])[1])


def _later(gain, v, n, h):
    return gain * v / np.sqrt(v + n / L(h))


def voc(tree: BeliefTree, leaf: int, batch: int, horizon: float = math.inf) -> np.longdouble:
    """VOC_h of `batch` rollouts at a leaf of a flat tree, about 1e-16 relative where c - V is exact."""
    t = leaf_table(tree)
    gain, v, n = t.gain.astype(L), t.var.astype(L), t.noise_var.astype(L)
    centre = t.offset.astype(L) + gain * t.mean.astype(L)
    centre = centre - centre.max()
    if v[leaf] == 0:
        return L(0)
    sd = np.array([_later(g, a, b, horizon) if a > 0 else L(0) for g, a, b in zip(gain, v, n, strict=True)])
    a = t.action[leaf]
    values = [expected_max(centre[t.action == b], sd[t.action == b]) for b in range(t.action.max() + 1)]
    own = values.pop(a)
    rest = (t.action == a) & (np.arange(len(sd)) != leaf)
    mean, wide, mu = centre[rest], sd[rest], centre[leaf]
    g, vi, ni = gain[leaf], v[leaf], n[leaf]
    s = _later(g, vi, ni, batch)
    left = vi * ni / (batch * vi + ni)
    sigma = _later(g, left, ni, horizon) if left > 0 else L(0)
    total = L(0)
    if values:
        rival = max(values, key=lambda p: p[0] + p[1])
        lead = (rival[0] - own[0]) + (rival[1] - own[1])
        total += _beyond(mean, wide, mu, sd[leaf], s, sigma, lead)
    if math.isfinite(horizon) and (not values or lead < 0) and len(mean):
        roots = np.sqrt(vi + ni / L(horizon)) + np.sqrt(vi + ni / (L(horizon) + batch))
        steeper = ni * batch / (L(horizon) * (L(horizon) + batch)) / roots / (g * vi)
        total += _rise(mean, wide, mu, sd[leaf], _later(g, vi, ni, horizon + batch), steeper)
    return total


def _rise(mean, wide, mu, rho, tau, steeper):
    """E max(N(mu, tau^2), W) - E max(N(mu, rho^2), W), tau > rho, steeper = 1 / rho - 1 / tau.

    E max(X, W) = mu + integral of P(W > x) P(X < x) dx, so it is the integral over u > 0 of
    (Phi(u / rho) - Phi(u / tau)) (F(mu + u) - F(mu - u)).
    """
    reach = TAIL * max(float(tau), float(rho))
    cuts = np.concatenate([np.abs(_marks(mean, wide) - mu), _marks([L(0)], [rho]), _marks([L(0)], [tau])])
    u, w = panels(cuts, 0.0, reach)
    x, weight = _rule(16)
    narrow = np.minimum(u * steeper, 1)
    between = np.zeros_like(u)  # Phi(u / rho) - Phi(u / tau), as an integral of phi where it would cancel
    for q in range(16):
        between += narrow * weight[q] / 2 * pdf(u / tau + (1 + x[q]) / 2 * narrow)
    between = np.where(u * steeper < 1, between, cdf(-u / tau) - cdf(-u / rho))
    F_up, S_up = product(mu + u, mean, wide)
    F_down, S_down = product(mu - u, mean, wide)
    step = np.where(S_down < 0.5, S_down - S_up, F_up - F_down)
    return np.sum(w * between * step)


def _beyond(mean, wide, mu, rho, s, sigma, lead):
    """E (g(y) - c)^+, or E (c - g(y))^+ where the action is best; g(y) = E max(y + sigma t, W)."""
    if not len(mean):
        z = abs(lead) / s
        t, w = panels(np.arange(0, 60), 0.0, 40.0, 30)
        return s * np.sum(w * cdf(-(z + t)))
    # kappa = c - E W = lead + E (X - W)^+.
    low, high = float(np.max(mean - TAIL * wide)), float(np.max(mean + TAIL * wide))
    top = max(high, float(mu + TAIL * rho))
    marks = np.concatenate([_marks(mean, wide), _marks([mu], [rho])])
    x, w = panels(marks, low, top)
    kappa = lead + np.sum(w * product(x, mean, wide)[0] * cdf((mu - x) / rho))

    def smooth(y):
        """(g(y) - E W, g'(y))."""
        if sigma == 0:
            if y <= low:
                return L(0), L(0)
            x, w = panels(marks, low, float(y))
            end = product(np.array([y]), mean, wide)[0][0]
            return np.sum(w * product(x, mean, wide)[0]), end
        a, b = max(float((low - y) / sigma), -40.0), TAIL + 1.0
        if a >= b:
            return L(0), L(0)
        t, w = panels(np.concatenate([(marks - y) / sigma, np.arange(-40, TAIL + 2)]), a, b)
        F = product(y + sigma * t, mean, wide)[0]
        before = L(0)
        if a == -40.0:
            x2, w2 = panels(marks, low, float(y - 40 * sigma))
            before = np.sum(w2 * product(x2, mean, wide)[0])
        return before + sigma * np.sum(w * F * cdf(-t)), np.sum(w * F * pdf(t))

    side = -1 if lead < 0 else 1
    if kappa <= 0:
        y0 = L(-np.inf)
        if side < 0:
            return L(0)
    else:
        a, b = mu - 40 * s, mu + 40 * s
        if smooth(a)[0] > kappa:
            return L(0) if side < 0 else _whole(smooth, mu, s) - kappa
        if smooth(b)[0] < kappa:
            return L(0)
        for _ in range(12):
            middle = (a + b) / 2
            a, b = (middle, b) if smooth(middle)[0] < kappa else (a, middle)
        y0 = b
        for _ in range(60):
            value, slope = smooth(y0)
            step = (value - kappa) / slope
            y0 = min(max(y0 - step, a), b)
            if abs(step) < L("1e-17") * s:
                break
    z = side * (y0 - mu) / s
    if z > 38:
        return L(0)
    start = max(z, L(-14))
    end = L(14) if z < 0 else z + 110 / (z + np.sqrt(z * z + 110))
    cuts = start + (end - start) * np.arange(1, 24) / 24
    kinks = side * (np.concatenate([marks, _marks(mean, np.sqrt(wide * wide + sigma * sigma))]) - mu) / s
    t, w = panels(np.concatenate([cuts, kinks]), float(start), float(end), 11)
    slopes = np.array([smooth(mu + side * s * one)[1] for one in t])
    return s * np.sum(w * slopes * cdf(-t))


def _whole(smooth, mu, s):
    t, w = panels(np.arange(-14, 15), -14.0, 14.0)
    return np.sum(w * pdf(t) * np.array([smooth(mu + s * one)[0] for one in t]))
