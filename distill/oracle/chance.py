"""Trees with chance nodes and rollouts still to come, slowly: nested quadrature and Monte Carlo; floor 2.

Shares no code with the exact methods. A node's value under independent leaves is held as its distribution
function and density, evaluated by definition each time they are asked for:

    leaf      normal (or sure)
    decision  F(x) = product over children of F_c((x - r) / g)
    chance    sum of independent p (r + g V): F(z) = integral of F_rest(z - t) f_c(t) dt, child after child

A sure leaf makes one atom, at the lower end of everything above it; integrals run between the ends of both
supports, where densities are smooth, over many Gauss-Legendre panels. VOC is taken by its definition, as
the difference of an expected maximum over the outcome (split at the crossing) and the best value now.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq
from scipy.special import ndtr

from distill import schema
from distill.tree import BeliefTree

__all__ = ["action_values", "monte_carlo_values", "voc"]

Floats = NDArray[np.float64]
_REACH = 10.0  # standard deviations


@dataclass
class _Law:
    """Support [low, high], an atom at low, and a density above it."""

    low: float
    high: float
    atom: float
    cdf: Callable[[Floats], Floats]
    pdf: Callable[[Floats], Floats]


def _rule(panels: int) -> tuple[Floats, Floats]:
    """Composite Gauss-Legendre rule on [0, 1], 12 nodes a panel."""
    x, w = np.polynomial.legendre.leggauss(12)
    left = np.arange(panels)[:, None] / panels
    return (left + (x + 1) / (2 * panels)).ravel(), np.tile(w / (2 * panels), panels)


def _normal(mean: float, sd: float) -> _Law:
    if sd == 0.0:
        return _Law(mean, mean, 1.0, lambda x: (x >= mean).astype(float), np.zeros_like)
    return _Law(
        mean - _REACH * sd,
        mean + _REACH * sd,
        0.0,
        lambda x: ndtr((x - mean) / sd),
        lambda x: np.exp(-0.5 * ((x - mean) / sd) ** 2) / (sd * math.sqrt(2 * math.pi)),
    )


def _affine(law: _Law, shift: float, factor: float) -> _Law:
    """shift + factor V, factor >= 0."""
    low = shift + factor * law.low
    if factor == 0.0 or law.low == law.high:
        return _normal(low, 0.0)

    def back(x: Floats) -> Floats:
        # Rounding must not carry a point on or above the atom below it.
        v = (x - shift) / factor
        return np.where(x < low, np.minimum(v, np.nextafter(law.low, -np.inf)), np.maximum(v, law.low))

    return _Law(
        low,
        shift + factor * law.high,
        law.atom,
        lambda x: law.cdf(back(x)),
        lambda x: law.pdf(back(x)) / factor,
    )


def _largest(laws: list[_Law]) -> _Law:
    low, high = max(x.low for x in laws), max(x.high for x in laws)

    def cdf(x: Floats) -> Floats:
        return np.where(x < low, 0.0, math.prod(law.cdf(x) for law in laws))

    def pdf(x: Floats) -> Floats:
        F = [law.cdf(x) for law in laws]
        total = sum(law.pdf(x) * math.prod(F[:i] + F[i + 1 :]) for i, law in enumerate(laws))
        return np.where(x < low, 0.0, total)

    return _Law(low, high, math.prod(float(law.cdf(np.array([low]))[0]) for law in laws), cdf, pdf)


def _sum(x: _Law, y: _Law, panels: int) -> _Law:
    u, w = _rule(panels)
    atom_x, atom_y = x.atom, y.atom

    def points(z: Floats) -> tuple[Floats, Floats]:
        """Where both densities live: x.low <= t <= x.high and y.low <= z - t <= y.high."""
        low = np.maximum(x.low, z - y.high)
        high = np.minimum(x.high, z - y.low)
        width = np.maximum(high - low, 0.0)
        return low[..., None] + width[..., None] * u, width[..., None] * w

    def pdf(z: Floats) -> Floats:
        t, weight = points(z)
        both: Floats = (weight * x.pdf(t) * y.pdf(z[..., None] - t)).sum(axis=-1)
        return both + atom_x * y.pdf(z - x.low) + atom_y * x.pdf(z - y.low)

    def cdf(z: Floats) -> Floats:
        # P(X + Y <= z) = F_X where even the largest Y fits, and an integral over the rest of X.
        t, weight = points(z)
        both: Floats = (weight * x.pdf(t) * y.cdf(z[..., None] - t)).sum(axis=-1)
        sure = np.maximum(x.cdf(np.minimum(z - y.high, x.high)) - atom_x, 0.0) * (z - y.high > x.low)
        total: Floats = both + sure + atom_x * y.cdf(z - x.low)
        return total

    return _Law(x.low + y.low, x.high + y.high, x.atom * y.atom, cdf, pdf)


def _law(tree: BeliefTree, node: int, mean: Floats, var: Floats, panels: int) -> _Law:
    if tree.kind[node] == schema.LEAF:
        leaf = int(np.searchsorted(tree.leaf_nodes, node))
        return _normal(float(mean[leaf]), math.sqrt(float(var[leaf])))
    children = np.flatnonzero(tree.parent == node)
    laws = [_law(tree, int(c), mean, var, panels) for c in children]
    chance = tree.kind[node] == schema.CHANCE
    p = tree.prob[children] if chance else np.ones(len(children))
    laws = [
        _affine(law, float(p[i] * tree.reward[c]), float(p[i] * tree.discount[c]))
        for i, (law, c) in enumerate(zip(laws, children, strict=True))
    ]
    if not chance:
        return _largest(laws)
    total = laws[0]
    for law in laws[1:]:
        total = _sum(total, law, panels)
    return total


def action_values(tree: BeliefTree, mean: Floats, var: Floats, panels: int = 24) -> Floats:
    """E[Q_a(M)] per root action, M_i ~ N(mean_i, var_i) independent; u.

    Expectations pass through chance nodes: only what a maximum covers is integrated.
    """

    def expected(node: int) -> float:
        if tree.kind[node] == schema.LEAF:
            return float(mean[np.searchsorted(tree.leaf_nodes, node)])
        if tree.kind[node] == schema.CHANCE:
            children = np.flatnonzero(tree.parent == node)
            parts = (tree.prob[c] * (tree.reward[c] + tree.discount[c] * expected(int(c))) for c in children)
            return math.fsum(parts)
        law = _law(tree, node, mean, var, panels)
        u, w = _rule(8 * panels)
        width = law.high - law.low
        return law.low + width * float(w @ (1.0 - law.cdf(law.low + width * u)))

    return np.array([tree.reward[a] + tree.discount[a] * expected(int(a)) for a in tree.action_nodes])


def voc(
    tree: BeliefTree, leaf: int, batch: float, horizon: float, panels: int = 24, outcomes: int = 2
) -> float:
    """VOC_h(leaf, batch) by definition: E_Z[max_a V_h(a | after)] - max_a V_h(a | now); u."""
    assert tree.mean is not None
    assert tree.var is not None
    assert tree.noise_var is not None
    mean, v, n = np.array(tree.mean), np.array(tree.var), tree.noise_var

    def to_come(variance: Floats) -> Floats:
        return np.array(
            [x * x / (x + m / horizon) if x > 0 else 0.0 for x, m in zip(variance, n, strict=True)]
        )

    now = action_values(tree, mean, to_come(v), panels)
    if v[leaf] == 0.0:
        return 0.0
    noise = n[leaf] / batch
    s = v[leaf] / math.sqrt(v[leaf] + noise)
    after = v.copy()
    after[leaf] = v[leaf] * noise / (v[leaf] + noise)
    spread = to_come(after)
    node = int(tree.leaf_nodes[leaf])
    while tree.parent[node] != 0:
        node = int(tree.parent[node])
    mine = int(np.searchsorted(tree.action_nodes, node))
    rival = float(np.delete(now, mine).max(initial=-math.inf))

    def touched(z: float) -> float:
        moved = mean.copy()
        moved[leaf] += s * z
        return float(action_values(tree, moved, spread, panels)[mine])

    ends = [-_REACH, -5.0, -2.0, 0.0, 2.0, 5.0, _REACH]
    if touched(-_REACH) < rival < touched(_REACH):
        ends.append(brentq(lambda z: touched(z) - rival, -_REACH, _REACH, xtol=1e-13))
    u, w = _rule(outcomes)
    total = 0.0
    for low, high in itertools.pairwise(sorted(ends)):
        z = low + (high - low) * u
        density = np.exp(-0.5 * z * z) / math.sqrt(2 * math.pi)
        # Measured from the best value now, so that nothing large is subtracted at the end.
        gains = np.array([max(touched(float(x)), rival) - now.max() for x in z])
        total += (high - low) * float(w @ (density * gains))
    return total


def monte_carlo_values(
    tree: BeliefTree, mean: Floats, var: Floats, draws: int, seed: int
) -> tuple[Floats, Floats]:
    """E[Q_a(M)] per root action by plain sampling, and its standard error; u."""
    rng = np.random.default_rng(seed)
    x = mean + np.sqrt(var) * rng.standard_normal((draws, len(mean)))
    values: dict[int, Floats] = {int(node): x[:, i] for i, node in enumerate(tree.leaf_nodes)}
    for node in range(tree.n_nodes - 1, 0, -1):
        if node in values:
            continue
        children = np.flatnonzero(tree.parent == node)
        backed = np.stack([tree.reward[c] + tree.discount[c] * values.pop(int(c)) for c in children])
        chance = tree.kind[node] == schema.CHANCE
        values[node] = tree.prob[children] @ backed if chance else backed.max(axis=0)
    q = np.stack([tree.reward[a] + tree.discount[a] * values[int(a)] for a in tree.action_nodes])
    return q.mean(axis=1), q.std(axis=1, ddof=1) / math.sqrt(draws)
