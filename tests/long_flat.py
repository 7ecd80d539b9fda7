"""VOC of flat trees in 80-bit arithmetic on one set of nodes a label: quick enough for thousands of labels.

A reference two digits better than the bounds. It shares the one-dimensional form of the VOC with the package
and nothing else: normal functions and rules come from `long_normal`, whose nested integrals hold it in turn.
"""

from __future__ import annotations

import math
from functools import cache

import numpy as np
from long_normal import TAIL, L, _later, _marks, _rise, _rule, cdf, expected_max, panels, pdf
from scipy.special import ndtr

from distill.tree import BeliefTree, leaf_table

_NODES = 13  # a panel, no wider than one standard deviation of anything in it
_CANCELS = 30.0  # absolute terms over their sum, above which the all-positive form is used


@cache
def _cumulate(n: int) -> np.ndarray:
    """Integral from -1 to each node of the polynomial through values at the nodes, in 80 bits."""
    x, w = _rule(n)
    P = [np.ones(n, dtype=L), x]
    for k in range(1, n):
        P.append(((2 * k + 1) * x * P[k] - k * P[k - 1]) / (k + 1))
    A = np.outer((x + 1) / 2, w)
    for k in range(1, n):
        A = A + np.outer((P[k + 1] - P[k - 1]) / 2, w * P[k])
    return A


class Flat:
    """A tree at one horizon: its actions' values once, then any leaf and batch."""

    def __init__(self, tree: BeliefTree, horizon: float) -> None:
        t = leaf_table(tree)
        self.h = horizon
        self.gain, self.v, self.n = t.gain.astype(L), t.var.astype(L), t.noise_var.astype(L)
        centre = t.offset.astype(L) + self.gain * t.mean.astype(L)
        self.centre = centre - centre.max()
        leaves = zip(self.gain, self.v, self.n, strict=True)
        self.sd = np.array([_later(g, a, b, horizon) if a > 0 else L(0) for g, a, b in leaves])
        self.action = t.action
        self.values = [
            expected_max(self.centre[t.action == a], self.sd[t.action == a])
            for a in range(t.action.max() + 1)
        ]

    def voc(self, leaf: int, batch: int) -> np.longdouble:
        """About 1e-18 relative, down to 1e-36 of scale."""
        if self.v[leaf] == 0:
            return L(0)
        a = self.action[leaf]
        own, rivals = self.values[a], [v for b, v in enumerate(self.values) if b != a]
        rest = (self.action == a) & (np.arange(len(self.sd)) != leaf)
        mean, wide, mu, rho = self.centre[rest], self.sd[rest], self.centre[leaf], self.sd[leaf]
        g, v, n = self.gain[leaf], self.v[leaf], self.n[leaf]
        s = _later(g, v, n, batch)
        left = v * n / (batch * v + n)
        sigma = _later(g, left, n, self.h) if left > 0 else L(0)
        total, lead = L(0), L(-1)
        if rivals:
            rival = max(rivals, key=lambda p: p[0] + p[1])
            lead = (rival[0] - own[0]) + (rival[1] - own[1])
            total += _beyond(mean, wide, mu, rho, s, sigma, lead)
        if math.isfinite(self.h) and lead < 0 and len(mean):
            h = L(self.h)
            roots = np.sqrt(v + n / h) + np.sqrt(v + n / (h + batch))
            steeper = n * batch / (h * (h + batch)) / roots / (g * v)
            total += _rise(mean, wide, mu, rho, _later(g, v, n, self.h + batch), steeper)
        return total


def _all_below(x, mean, wide):
    """Product of distribution functions, relative accuracy kept in the left tail."""
    F = np.ones(len(x), dtype=L)
    for m, r in zip(mean, wide, strict=True):
        F = F * (cdf((x - m) / r) if r > 0 else (x >= m))
    return F


def _beyond(mean, wide, mu, rho, s, sigma, lead):
    """E (g(y) - c)^+, or E (c - g(y))^+ where the action is best; g(y) = E max(y + sigma t, W)."""
    side = L(-1) if lead < 0 else L(1)
    if not len(mean):
        z = abs(lead) / s
        t, w = panels(np.arange(0, 60), 0.0, 40.0, 30)
        return s * np.sum(w * cdf(-(z + t)))
    marks = _marks(mean, wide)
    low = np.max(mean - TAIL * wide)
    x, w = panels(np.append(marks, _marks([mu], [rho])), low, max(marks.max(), mu + TAIL * rho))
    kappa = lead + np.sum(w * _all_below(x, mean, wide) * cdf((mu - x) / rho))
    if kappa <= 0:
        return L(0)
    y0 = _crossing(mean, wide, marks, low, mu, s, sigma, kappa)
    z = side * (y0 - mu) / s
    if z > 38:
        return L(0)
    reach = 110 / (z + np.sqrt(z * z + 110)) if z > 0 else 15 - z
    far = y0 + side * s * reach
    if sigma > 0:
        voc, terms = _one_sum(mean, wide, marks, low, mu, s, sigma, kappa, y0, far, side)
        if terms <= _CANCELS * voc:
            return voc
    return _positive(mean, wide, marks, low, mu, s, sigma, y0, far, side)


def _crossing(mean, wide, marks, low, mu, s, sigma, kappa):
    """y0 where the integral of F(x) Phi((y - x) / sigma) is kappa: in double precision, then in 80 bits."""
    m, r, mk = (np.asarray(a, dtype=float) for a in (mean, wide, marks))
    lo, sg, want = float(low), float(sigma), float(kappa)

    def short(y: float) -> float:
        if y + TAIL * sg <= lo:
            return 0.0
        x, w = (a.astype(float) for a in panels(np.append(mk, _marks([y], [sg])), lo, y + TAIL * sg, 8))
        F = np.ones(len(x))
        for a, b in zip(m, r, strict=True):
            F *= ndtr((x - a) / b) if b > 0 else (x >= a)
        return float(np.sum(w * F * (ndtr((y - x) / sg) if sg > 0 else 1.0)))

    a, b = lo - TAIL * sg, max(float(mk.max()), lo) + want + TAIL * sg
    for _ in range(30):
        y = (a + b) / 2
        a, b = (y, b) if short(y) < want else (a, y)
    y = L(b)
    near = L(b - a) * 2
    steps = np.arange(-TAIL, TAIL + 1) * sigma
    x, w = panels(np.concatenate([marks, y + steps, [y]]), low, y + TAIL * sigma + near)
    F = _all_below(x, mean, wide)
    for _ in range(30):
        if sigma > 0:
            total, slope = np.sum(w * F * cdf((y - x) / sigma)), np.sum(w * F * pdf((y - x) / sigma)) / sigma
        else:
            at, wt = panels(marks, low, y)
            total, slope = np.sum(wt * _all_below(at, mean, wide)), _all_below(np.array([y]), mean, wide)[0]
        if slope == 0:
            break
        step = (total - kappa) / slope
        y = y - np.clip(step, -near, near)
        if abs(step) <= L("1e-19") * max(s, abs(y - mu)):
            break
    return y


def _one_sum(mean, wide, marks, low, mu, s, sigma, kappa, y0, far, side):
    """(side E[D(x); y beyond y0], its absolute terms), D(x) = integral of F up to x, less kappa."""
    tau = np.sqrt(s * s + sigma * sigma)
    turn, width = mu + (tau / s) ** 2 * (y0 - mu), sigma * tau / s
    near = np.array([y0, mu]) if side * (y0 - mu) < 0 else np.array([y0])
    a = min(far, near.min()) - 14 * sigma
    b = max(far, near.max()) + 14 * sigma
    cuts = [marks, _marks([y0], [sigma]), _marks([turn], [width]), _marks([mu], [tau]), [low]]
    cuts.append(y0 + (far - y0) * np.arange(25) / 24)
    cuts = np.unique(np.concatenate(cuts))
    x, w = panels(cuts, min(a, low), b)
    F = np.where(x < low, 0, _all_below(x, mean, wide))
    half = (w / np.tile(_rule(_NODES)[1], len(w) // _NODES)).reshape(-1, _NODES)[:, :1]
    inside = half * (F.reshape(-1, _NODES) @ _cumulate(_NODES).T)
    whole = np.sum((w * F).reshape(-1, _NODES), axis=1)
    D = (np.cumsum(whole) - whole)[:, None] + inside
    D = D.ravel() - kappa
    ahead = side * ((s / tau) ** 2 * (x - mu) + mu - y0) / (s * sigma / tau)
    terms = np.where(x < a, 0, w * D * pdf((x - mu) / tau) / tau * cdf(ahead))
    return side * np.sum(terms), np.sum(np.abs(terms))


def _positive(mean, wide, marks, low, mu, s, sigma, y0, far, side):
    """Integral beyond y0 of g'(y) P(outcome beyond y): all terms positive."""
    y, wy = panels(np.append(y0 + (far - y0) * np.arange(25) / 24, marks), *sorted((y0, far)), n=11)
    if sigma == 0:
        slope = np.where(y < low, 0, _all_below(y, mean, wide))
    else:
        a, b = max(y.min() - TAIL * sigma, low), y.max() + TAIL * sigma
        steps = np.arange(np.ceil(float((b - a) / sigma)) + 1).astype(L) * sigma
        x, w = panels(np.append(marks, a + steps), a, b)
        F = w * _all_below(x, mean, wide)
        slope = np.array([np.sum(F * pdf((one - x) / sigma)) for one in y]) / sigma
    return np.sum(wy * slope * cdf(side * (mu - y) / s))
