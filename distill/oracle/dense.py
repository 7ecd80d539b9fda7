"""Slow and obvious VOC of trees with dependent Gaussian leaves; floor 2, shares no code with `distill.exact`.

root_value(tree, x)           the root maximum at leaf values x, straight from the definition
static_voc(tree, leaf, k)     horizon 0, adaptive quadrature of the definition along the line m + b Z
static_voc_policies(...)      horizon 0, every policy's line, in mpmath at any precision: small trees
expected_max(mean, cov)       E[max] of up to three normals in any dependence (Afonja 1972)
action_values(tree, ...)      V_h of every root action, at most three affine options at a decision node
voc(tree, leaf, k, h)         horizon h > 0 of such trees: adaptive quadrature outside, closed form inside
monte_carlo_voc(...)          any horizon and tree: plain nested sampling, with its standard error
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import integrate, special

from distill import schema
from distill.tree import BeliefTree

__all__ = [
    "action_values",
    "expected_max",
    "monte_carlo_voc",
    "posterior",
    "resolved_covariance",
    "root_value",
    "static_voc",
    "static_voc_policies",
    "voc",
]

Array = NDArray[np.float64]


def _density(z: float) -> float:
    return math.exp(-z * z / 2) / math.sqrt(2 * math.pi)


def action_worth(tree: BeliefTree, x: Array) -> list[float]:
    """Q_a(x) of every root action at leaf values x (n_leaves,)."""
    leaf = {int(v): i for i, v in enumerate(tree.leaf_nodes)}

    def worth(v: int) -> float:
        if v in leaf:
            return float(x[leaf[v]])
        options = [float(tree.reward[c] + tree.discount[c] * worth(int(c))) for c in children(v)]
        if tree.kind[v] == schema.DECISION:
            return max(options)
        return math.fsum(p * o for p, o in zip(tree.prob[children(v)].tolist(), options, strict=True))

    def children(v: int) -> NDArray[np.int64]:
        return np.flatnonzero(tree.parent == v)

    return [float(tree.reward[a] + tree.discount[a] * worth(int(a))) for a in children(0)]


def root_value(tree: BeliefTree, x: Array) -> float:
    """max over root actions of Q_a(x)."""
    return max(action_worth(tree, x))


def covariance(tree: BeliefTree) -> Array:
    """S, dense."""
    return np.diag(np.asarray(tree.var)) if tree.cov is None else np.asarray(tree.cov)


def posterior(tree: BeliefTree, leaf: int, k: float) -> tuple[Array, Array]:
    """b, with m' = m + b Z after the mean of k rollouts at a leaf, and the covariance left, S - b b^T."""
    S = covariance(tree)
    assert tree.noise_var is not None
    b = S[:, leaf] / math.sqrt(S[leaf, leaf] + tree.noise_var[leaf] / k)
    return b, S - np.outer(b, b)


def resolved_covariance(S: Array, noise_var: Array, h: float) -> Array:
    """R_h = S (S + N/h)^-1 S, the covariance of the posterior mean after h more rollouts a leaf."""
    if h == 0:
        return np.zeros_like(S)
    if math.isinf(h):
        return S
    return np.asarray(S @ np.linalg.solve(S + np.diag(noise_var) / h, S))


def static_voc(tree: BeliefTree, leaf: int, k: float) -> float:
    """E[root(m + b Z)] - root(m), adaptive quadrature between the kinks; absolute error 1e-12 of scale."""
    b, _ = posterior(tree, leaf, k)
    m = np.asarray(tree.mean)
    now = root_value(tree, m)

    def rise(z: float) -> float:
        return root_value(tree, m + b * z) - now

    edges = sorted({*_kinks(rise, -12.0, 12.0), *np.linspace(-12, 12, 25).tolist()})
    # E[Z] = 0: taking any tangent's slope off changes nothing and leaves a function that is >= 0.
    tangent = (rise(1e-7) - rise(-1e-7)) / 2e-7
    total = 0.0
    for a, c in itertools.pairwise(edges):
        total += integrate.quad(
            lambda z: (rise(z) - tangent * z) * _density(z), a, c, epsabs=1e-15, epsrel=1e-12, limit=200
        )[0]
    return total


def _kinks(f: Any, a: float, b: float) -> Iterator[float]:
    """Where a convex piecewise-linear function bends: straight on [a, b] if the middle is on the chord."""
    middle = (a + b) / 2
    sag = (f(a) + f(b)) / 2 - f(middle)
    if sag <= 1e-14 * (abs(f(a)) + abs(f(b)) + abs(f(middle))):
        return
    if b - a < 1e-8:
        yield middle
        return
    yield from _kinks(f, a, middle)
    yield from _kinks(f, middle, b)


def policies(tree: BeliefTree) -> Iterator[tuple[list[Any], Any]]:
    """Every way to fix the choice at each decision node: (weight of each leaf, constant), mpmath."""
    import mpmath  # only here: the rest of the oracle needs no arbitrary precision

    leaf = {int(v): i for i, v in enumerate(tree.leaf_nodes)}

    def lines(v: int) -> list[tuple[list[Any], Any]]:
        if v in leaf:
            unit = [mpmath.mpf(0)] * tree.n_leaves
            unit[leaf[v]] = mpmath.mpf(1)
            return [(unit, mpmath.mpf(0))]
        options = []
        for c in np.flatnonzero(tree.parent == v).tolist():
            g, r, p = (mpmath.mpf(float(x[c])) for x in (tree.discount, tree.reward, tree.prob))
            options.append([([p * g * w for w in ws], p * (r + g * q)) for ws, q in lines(c)])
        if tree.kind[v] == schema.DECISION:
            return [line for option in options for line in option]
        out = []
        for combination in itertools.product(*options):
            weights = [mpmath.fsum(column) for column in zip(*(ws for ws, _ in combination), strict=True)]
            out.append((weights, mpmath.fsum(q for _, q in combination)))
        return out

    yield from lines(0)


def static_voc_policies(tree: BeliefTree, leaf: int, k: int, digits: int = 50) -> Any:
    """The same from the lines of all policies, at `digits` digits: for tails and for small trees."""
    import mpmath

    with mpmath.workdps(digits):
        mpf = mpmath.mpf
        S, m = covariance(tree), tree.mean
        assert m is not None
        assert tree.noise_var is not None
        sd = mpmath.sqrt(mpf(float(S[leaf, leaf])) + mpf(float(tree.noise_var[leaf])) / k)
        lines = []
        for weights, q in policies(tree):
            at_mean = q + mpmath.fsum(w * mpf(float(x)) for w, x in zip(weights, m, strict=True))
            slope = mpmath.fsum(w * mpf(float(x)) for w, x in zip(weights, S[:, leaf], strict=True)) / sd
            lines.append((at_mean, slope))
        crossings = sorted(
            {(q1 - q2) / (s2 - s1) for (q1, s1), (q2, s2) in itertools.combinations(lines, 2) if s1 != s2}
        )
        if not crossings:
            return mpf(0)
        middles = [crossings[0] - 1]
        middles += [(a + b) / 2 for a, b in itertools.pairwise(crossings)]
        middles += [crossings[-1] + 1]
        slopes = [max((q + s * z, s) for q, s in lines)[1] for z in middles]
        total = mpf(0)
        for z, (left, right) in zip(crossings, itertools.pairwise(slopes), strict=True):
            upper_tail = mpmath.erfc(abs(z) / mpmath.sqrt(2)) / 2
            total += (right - left) * (mpmath.npdf(z) - abs(z) * upper_tail)
        return total


def expected_max(mean: Array, cov: Array) -> float:
    """E[max] of one, two or three normals, no two of them equal for sure.

    sum_i m_i P(i wins) + sum_(i<j) a_ij phi(d_ij) P(the others lie below where i and j meet), with a_ij the
    sd of X_i - X_j and d_ij = (m_i - m_j) / a_ij: Clark 1961 for two, Afonja 1972 for three.
    """
    n = len(mean)
    if n == 1:
        return float(mean[0])
    if n > 3:
        raise ValueError("expected_max holds for up to three normals")

    def a(i: int, j: int) -> float:
        return math.sqrt(cov[i, i] + cov[j, j] - 2 * cov[i, j])

    total = 0.0
    for i in range(n):
        rivals = [j for j in range(n) if j != i]
        d = [(mean[i] - mean[j]) / a(i, j) for j in rivals]
        if n == 2:
            total += mean[i] * special.ndtr(d[0]) + a(i, rivals[0]) * _density(d[0]) / 2
            continue
        j, k = rivals
        # Correlation of X_i - X_j and X_i - X_k.
        rho = (cov[i, i] - cov[i, j] - cov[i, k] + cov[j, k]) / (a(i, j) * a(i, k))
        total += mean[i] * _bivariate_cdf(d[0], d[1], rho)
        for (x, y), r in (((0, 1), j), ((1, 0), k)):
            # Given X_i = X_r the other rival loses with this probability.
            rest = (d[y] - rho * d[x]) / math.sqrt(1 - rho * rho)
            total += a(i, r) * _density(d[x]) * special.ndtr(rest) / 2
    return float(total)


def _bivariate_cdf(h: float, k: float, rho: float) -> float:
    """P(X <= h, Y <= k), standard normals of correlation rho, |rho| < 1, by Owen's T (Owen 1956, eq. 2.1)."""
    h, k = h or 1e-300, k or 1e-300
    c = math.sqrt(1 - rho * rho)
    tails = special.owens_t(h, (k / h - rho) / c) + special.owens_t(k, (h / k - rho) / c)
    return float((special.ndtr(h) + special.ndtr(k)) / 2 - tails - (0.5 if h * k < 0 else 0.0))


def action_values(tree: BeliefTree, mean: Array, R: Array) -> list[float]:
    """V(a) = E[Q_a(M)], M ~ N(mean, R), where at most three affine options meet at each decision node.

    Chance nodes keep expectations linear, wherever they are; a decision node must lie above affine
    options only (leaves, or chance nodes without a choice below), nested decision nodes counting as one.
    """
    leaf = {int(v): i for i, v in enumerate(tree.leaf_nodes)}

    def options(v: int) -> list[tuple[Array, float]] | None:
        """The affine options between which V(v) is the best; None where there is more to it."""
        if v in leaf:
            return [(np.eye(tree.n_leaves)[leaf[v]], 0.0)]
        below = []
        for c in np.flatnonzero(tree.parent == v).tolist():
            under = options(c)
            if under is None:
                return None
            g, r = float(tree.discount[c]), float(tree.reward[c])
            below.append([(g * w, r + g * q) for w, q in under])
        if tree.kind[v] == schema.DECISION:
            return [line for lines in below for line in lines]
        if any(len(lines) > 1 for lines in below):
            return None
        p = tree.prob[np.flatnonzero(tree.parent == v)]
        return [
            (
                np.sum([x * lines[0][0] for x, lines in zip(p, below, strict=True)], axis=0),
                math.fsum(x * lines[0][1] for x, lines in zip(p.tolist(), below, strict=True)),
            )
        ]

    def expected(v: int) -> float:
        lines = options(v)
        if lines is not None:
            W = np.array([w for w, _ in lines])
            return expected_max(W @ mean + [q for _, q in lines], W @ R @ W.T)
        if tree.kind[v] == schema.DECISION:
            raise ValueError("a decision node above chance nodes that lie above decision nodes")
        return math.fsum(
            float(tree.prob[c]) * (float(tree.reward[c]) + float(tree.discount[c]) * expected(c))
            for c in np.flatnonzero(tree.parent == v).tolist()
        )

    return [float(tree.reward[a]) + float(tree.discount[a]) * expected(int(a)) for a in tree.action_nodes]


def voc(tree: BeliefTree, leaf: int, k: int, h: float) -> float:
    """VOC_h of a tree that `action_values` covers; absolute error about 1e-10 of scale."""
    assert tree.noise_var is not None
    b, left = posterior(tree, leaf, k)
    m = np.asarray(tree.mean)
    now = max(action_values(tree, m, resolved_covariance(covariance(tree), tree.noise_var, h)))
    R = resolved_covariance(left, tree.noise_var, h)

    def rise(z: float) -> float:
        return (max(action_values(tree, m + b * z, R)) - now) * float(_density(z))

    edges = np.linspace(-9, 9, 19)
    return math.fsum(
        integrate.quad(rise, a, c, epsabs=1e-11, epsrel=1e-9, limit=100)[0]
        for a, c in itertools.pairwise(edges)
    )


def monte_carlo_voc(
    tree: BeliefTree, leaf: int, k: int, h: float, rng: np.random.Generator, outer: int, inner: int
) -> tuple[float, float]:
    """VOC_h by plain nested sampling on any tree, and its standard error; bias falls as 1 / inner.

    The same inner draws serve every outer one, and the values now.
    """
    assert tree.noise_var is not None
    b, left = posterior(tree, leaf, k)
    m = np.asarray(tree.mean)
    draws = rng.standard_normal((inner, tree.n_leaves))
    root_now = _root_factor(resolved_covariance(covariance(tree), tree.noise_var, h))
    root_after = _root_factor(resolved_covariance(left, tree.noise_var, h))
    now = max(_mean_worth(tree, m + draws @ root_now.T))
    after = np.array(
        [max(_mean_worth(tree, m + b * z + draws @ root_after.T)) for z in rng.standard_normal(outer)]
    )
    return float(after.mean() - now), float(after.std(ddof=1) / math.sqrt(outer))


def _mean_worth(tree: BeliefTree, x: Array) -> list[float]:
    """Mean of Q_a over rows of leaf values."""
    value = np.empty((tree.n_nodes, len(x)))
    leaf = {int(v): i for i, v in enumerate(tree.leaf_nodes)}
    for v in range(tree.n_nodes - 1, -1, -1):
        if v in leaf:
            value[v] = x[:, leaf[v]]
            continue
        kids = np.flatnonzero(tree.parent == v)
        options = tree.reward[kids, None] + tree.discount[kids, None] * value[kids]
        value[v] = options.max(axis=0) if tree.kind[v] == schema.DECISION else tree.prob[kids] @ options
    actions = tree.action_nodes
    return [float(np.mean(tree.reward[a] + tree.discount[a] * value[a])) for a in actions]


def _root_factor(R: Array) -> Array:
    """A with A A^T = R, for singular R too."""
    values, vectors = np.linalg.eigh(R)
    return np.asarray(vectors * np.sqrt(np.maximum(values, 0)))
