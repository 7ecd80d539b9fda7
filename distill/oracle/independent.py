"""VOC of independent Gaussian leaves, the slow and obvious way; floor 2.

Both sides of VOC = E_Z[max_a V_h(a | after)] - max_a V_h(a | now) are computed as they stand: expected
maxima by adaptive quadrature of 1 - product of normal distribution functions, the outcome Z by
Gauss-Legendre panels that are doubled until the answer stands still, split where the best action changes.
A difference of two numbers of the size of the values: absolute accuracy about 1e-11 of the scale, no more.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable
from typing import cast

import numpy as np
from scipy.integrate import quad_vec
from scipy.optimize import brentq
from scipy.stats import norm

from distill.oracle.dense import static_voc
from distill.tree import BeliefTree, Floats, leaf_table

__all__ = ["action_values", "expected_max", "rate", "voc"]

_WANTED = 1e-12  # of the scale, asked of every quadrature
_WIDTH = 9.0  # standard deviations integrated over: 1e-19 lies beyond
_ORDER = 12  # Gauss-Legendre nodes a panel of the outcome


def expected_max(mean: Floats, sd: Floats) -> Floats:
    """E max over the first axis of independent N(mean, sd^2), by adaptive quadrature.

    mean : shape (leaves, ...); sd : shape (leaves,), zero allowed. Returns shape (...).

    >>> round(float(expected_max(np.zeros(2), np.ones(2))), 10)  # 1 / sqrt(pi)
    0.5641895835
    """
    mean = np.asarray(mean, dtype=float)
    sd = np.asarray(sd, dtype=float).reshape(-1, *[1] * (mean.ndim - 1))
    others = tuple(range(1, mean.ndim))
    low = float(np.max(np.min(mean - _WIDTH * sd, axis=others)))  # some leaf is above it, whatever happens
    high = float(np.max(mean + _WIDTH * sd))
    if not low < high:
        return cast(Floats, np.max(mean, axis=0))
    safe = np.where(sd > 0, sd, 1.0)

    def some_leaf_above(x: float) -> Floats:
        cdf = np.where(sd > 0, norm.cdf((x - mean) / safe), np.where(x >= mean, 1.0, 0.0))
        return cast(Floats, 1 - np.prod(cdf, axis=0))

    ends = [f(mean + t * sd, axis=others).ravel() for t in (-5, -2, 0, 2, 5) for f in (np.min, np.max)]
    marks = np.unique(np.concatenate(ends))
    marks = marks[(marks > low) & (marks < high)]
    area, _ = quad_vec(
        some_leaf_above, low, high, epsabs=_WANTED * float(np.max(sd)), epsrel=0, norm="max", points=marks
    )
    return cast(Floats, low + area)


def action_values(tree: BeliefTree, horizon: float) -> Floats:
    """V_h of every root action of a decision-only tree, in child order."""
    t = leaf_table(tree)
    assert t.mean is not None
    assert t.var is not None
    assert t.noise_var is not None
    centre, sd = t.offset + t.gain * t.mean, t.gain * _later_sd(t.var, t.noise_var, horizon)
    n_actions = len(tree.action_nodes)
    return np.array([float(expected_max(centre[t.action == a], sd[t.action == a])) for a in range(n_actions)])


def voc(tree: BeliefTree, leaf: int, batch: float, horizon: float = math.inf) -> float:
    """VOC_h of `batch` rollouts at one leaf. horizon 0: any tree; otherwise decision nodes only."""
    assert tree.mean is not None
    assert tree.var is not None
    assert tree.noise_var is not None
    v, n = float(tree.var[leaf]), float(tree.noise_var[leaf])
    if v == 0:
        return 0.0
    if horizon == 0:
        return static_voc(tree, leaf, batch)
    t = leaf_table(tree)
    centre, sd = t.offset + t.gain * tree.mean, t.gain * _later_sd(tree.var, tree.noise_var, horizon)
    own = np.flatnonzero(t.action == t.action[leaf])
    gain = float(t.gain[leaf])
    s = gain * float(_later_sd(np.array(v), np.array(n), batch))
    left = v * n / (batch * v + n)
    sd_after = np.where(own == leaf, gain * _later_sd(np.array(left), np.array(n), horizon), sd[own])
    now = action_values(tree, horizon)
    rivals = np.delete(now, t.action[leaf])
    rival = float(rivals.max()) if len(rivals) else -math.inf

    def value_after(z: Floats) -> Floats:
        """V_h of the leaf's action after outcome z; shape of z."""
        mean = np.repeat(centre[own][:, None], len(z), axis=1)
        mean[own == leaf] += s * z
        return expected_max(mean, sd_after)

    def lead(z: float) -> float:
        return float(value_after(np.array([z]))[0]) - rival

    cuts = [-_WIDTH, 0.0, _WIDTH]
    if lead(-_WIDTH) < 0 < lead(_WIDTH):
        cuts.append(brentq(lead, -_WIDTH, _WIDTH, xtol=1e-9))
    after = _mean_over_outcomes(lambda z: np.maximum(value_after(z), rival), sorted(cuts), float(np.max(sd)))
    return after - float(np.max(now))


def rate(tree: BeliefTree, leaf: int, remaining: int, horizon: float = math.inf) -> tuple[float, int]:
    """(max over k <= remaining of VOC(k) / k, its smallest k), pricing every k."""
    rates = [voc(tree, leaf, k, horizon) / k for k in range(1, remaining + 1)]
    best = int(np.argmax(rates))
    return rates[best], best + 1


def _later_sd(v: Floats, n: Floats, rollouts: float) -> Floats:
    """sqrt(v^2 / (v + n / rollouts)): spread of a posterior mean after so many rollouts."""
    return cast(
        Floats, np.sqrt(v) * np.sqrt(np.divide(v, v + n / rollouts, where=v > 0, out=np.zeros_like(v)))
    )


def _mean_over_outcomes(f: Callable[[Floats], Floats], cuts: list[float], scale: float) -> float:
    """E f(Z) over the standard normal Z, f smooth between the cuts."""
    x, w = np.polynomial.legendre.leggauss(_ORDER)
    before = math.inf
    for pieces in (3, 6, 12, 24, 48, 96):
        edges = np.unique(
            np.concatenate([np.linspace(a, b, pieces + 1) for a, b in itertools.pairwise(cuts)])
        )
        half = np.diff(edges)[:, None] / 2
        z = (edges[:-1, None] + half + half * x).ravel()
        total = float((half * w).ravel() * norm.pdf(z) @ f(z))
        if abs(total - before) <= _WANTED * scale:
            break
        before = total
    return total
