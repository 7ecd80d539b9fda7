"""VOC with more than 30 digits (mpmath) on small trees, from the definition: tails and relative accuracy.

Gaussian leaves, dependent or not, any horizon: expectations are closed forms where at most two affine options
meet at a decision node (Clark 1961), and one outcome is integrated over, in gain form. Win/loss leaves, h
infinite: E max as an integral of regularised incomplete beta functions.
"""

from __future__ import annotations

from functools import cache
from itertools import pairwise
from typing import Any

import mpmath as mp
import numpy as np
from mpmath.calculus.quadrature import GaussLegendre

from distill import schema
from distill.tree import BeliefTree

DIGITS = 50  # worked with; VOC of 1e-30 of scale then has 20


def gaussian_voc(tree: BeliefTree, leaf: int, k: int, h: float) -> mp.mpf:
    """VOC_h(leaf, k)."""
    with mp.workdps(DIGITS):
        n = tree.n_leaves
        cov = np.diag(tree.var) if tree.cov is None else tree.cov
        S = mp.matrix(n, n)
        for i in range(n):
            for j in range(n):
                S[i, j] = mp.mpf(float(cov[i, j]))
        noise = [mp.mpf(float(x)) for x in tree.noise_var]
        mean = [mp.mpf(float(x)) for x in tree.mean]
        if S[leaf, leaf] == 0:
            return mp.mpf(0)
        root = mp.sqrt(S[leaf, leaf] + noise[leaf] / k)
        b = [S[i, leaf] / root for i in range(n)]
        left = mp.matrix(n, n)
        for i in range(n):
            for j in range(n):
                left[i, j] = S[i, j] - b[i] * b[j]
        actions = [_options(tree, int(a)) for a in tree.action_nodes]
        now = [_worth(one, mean, _resolved(S, noise, h)) for one in actions]
        R = _resolved(left, noise, h)
        best = max(range(len(now)), key=lambda a: now[a])

        def values(z: Any) -> list[Any]:
            at = [m + x * z for m, x in zip(mean, b, strict=True)]
            return [_worth(one, at, R) for one in actions]

        def lead(z: Any) -> Any:
            """How far the best rival is above the action that is best now: 0 or more counts."""
            v = values(z)
            return max((x for a, x in enumerate(v) if a != best), default=mp.mpf("-1e9")) - v[best]

        # E of the best now, after less before: 0 but for rounding where h is infinite, a rise otherwise.
        cuts = [mp.mpf(x) for x in range(-16, 17)]
        rise = mp.mpf(0)
        if mp.isfinite(h):
            for a, c in pairwise(cuts):
                rise += _integral(lambda z: (values(z)[best] - now[best]) * mp.npdf(z), a, c)
        signs = [lead(c) > 0 for c in cuts]
        total = mp.mpf(0)
        for (a, c), (s0, s1) in zip(pairwise(cuts), pairwise(signs), strict=True):
            if s0 != s1:
                kink = _bisected(lead, a, c)
                a, c = (kink, c) if s1 else (a, kink)
            elif not s0:
                continue
            total += _integral(lambda z: lead(z) * mp.npdf(z), a, c)
        return total + rise


@cache
def _rule() -> list[tuple[Any, Any]]:
    return GaussLegendre(mp.mp).calc_nodes(5, int(3.4 * DIGITS))


def _integral(f: Any, a: Any, b: Any) -> Any:
    """48 Gauss-Legendre nodes over at most one standard deviation."""
    half, middle = (b - a) / 2, (a + b) / 2
    return half * mp.fsum(w * f(middle + half * x) for x, w in _rule())


def _bisected(f: Any, a: Any, b: Any) -> Any:
    up = f(b) > 0
    for _ in range(25):
        middle = (a + b) / 2
        a, b = (a, middle) if (f(middle) > 0) == up else (middle, b)
    return mp.findroot(f, (a, b), solver="anderson", tol=mp.mpf(10) ** (-2 * DIGITS + 20), verify=False)


def _resolved(S: Any, noise: list[Any], h: float) -> Any:
    """R_h = S (S + N / h)^-1 S."""
    if h == 0:
        return S * 0
    if not mp.isfinite(h):
        return S
    return S * mp.inverse(S + mp.diag([x / mp.mpf(h) for x in noise])) * S


def _options(tree: BeliefTree, node: int) -> Any:
    """Q of a root action: a list of (odds, options), added up; each option an affine (weights, constant)."""
    leaf = {int(v): i for i, v in enumerate(tree.leaf_nodes)}

    def below(v: int) -> list[tuple[Any, list[Any]]]:
        r, g = mp.mpf(float(tree.reward[v])), mp.mpf(float(tree.discount[v]))
        if v in leaf:
            parts = [(mp.mpf(1), [({leaf[v]: mp.mpf(1)}, mp.mpf(0))])]
        else:
            kids = np.flatnonzero(tree.parent == v).tolist()
            if tree.kind[v] == schema.CHANCE:
                parts = [(mp.mpf(float(tree.prob[c])) * p, o) for c in kids for p, o in below(c)]
            else:
                under = [below(c) for c in kids]
                if any(len(u) > 1 or u[0][0] != 1 for u in under):
                    raise ValueError("a choice above a chance node")
                parts = [(mp.mpf(1), [one for u in under for one in u[0][1]])]
        # p (r + g V): the constant goes into the options, chance nodes' odds sum to 1.
        return [(p, [({i: g * w for i, w in ws.items()}, r + g * q) for ws, q in o]) for p, o in parts]

    return below(node)


def _worth(parts: Any, mean: list[Any], R: Any) -> Any:
    total = mp.mpf(0)
    for p, options in parts:
        m = [q + sum(w * mean[i] for i, w in ws.items()) for ws, q in options]
        if len(options) == 1:
            total += p * m[0]
            continue
        if len(options) > 2:
            raise ValueError("more than two options")
        w = dict(options[0][0])
        for i, x in options[1][0].items():
            w[i] = w.get(i, mp.mpf(0)) - x
        spread = mp.sqrt(max(sum(x * y * R[i, j] for i, x in w.items() for j, y in w.items()), mp.mpf(0)))
        gap = -abs(m[0] - m[1])
        more = mp.mpf(0)
        if spread > 0:
            z = gap / spread
            more = spread * (z * mp.erfc(-z / mp.sqrt(2)) / 2 + mp.npdf(z))
        total += p * (max(m) + more)
    return total


def dynamic_win_loss_voc(actions: list[list[tuple[int, int]]], action: int, leaf: int, k: int) -> mp.mpf:
    """Dynamic VOC of leaves on [0, 1]: E max = 1 - integral of the product of I_y(a, b); 40 digits."""
    with mp.workdps(40):

        def expected(leaves: list[tuple[Any, Any]]) -> Any:
            def below(y: Any) -> Any:
                return mp.fprod(mp.betainc(a, b, 0, y, regularized=True) for a, b in leaves)

            return 1 - mp.quad(below, mp.linspace(0, 1, 5))

        now = [expected(leaves) for leaves in actions]
        rival = max((v for a, v in enumerate(now) if a != action), default=mp.mpf(0))
        a, b = actions[action][leaf]
        total = mp.mpf(0)
        for x in range(k + 1):
            odds = mp.binomial(k, x) * mp.beta(a + x, b + k - x) / mp.beta(a, b)
            after = list(actions[action])
            after[leaf] = (a + x, b + k - x)
            total += odds * (max(expected(after), rival) - max(now[action], rival))
        return total
