"""VOC of independent Gaussian leaves, the slow and obvious way; floor 2.

Both sides of VOC = E_Z[max_a V_h(a | after)] - max_a V_h(a | now) are computed as they stand, by nested
adaptive quadrature: over the outcome Z, and of 1 - product of normal distribution functions inside.
A difference of two numbers of the size of the values: absolute accuracy about 1e-11 of the scale, no more.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Sequence

import numpy as np
from scipy.integrate import quad
from scipy.optimize import brentq

from distill.oracle.dense import static_voc
from distill.tree import BeliefTree, Floats, leaf_table

__all__ = ["action_values", "expected_max", "rate", "voc"]

_WANTED = 1e-12  # of the scale, asked of every quadrature
_WIDTH = 9.0  # standard deviations integrated over: 1e-19 lies beyond


def expected_max(mean: Sequence[float], sd: Sequence[float]) -> float:
    """E max of independent N(mean, sd^2), sd = 0 allowed, by adaptive quadrature.

    >>> round(expected_max([0.0, 0.0], [1.0, 1.0]), 10)  # 1 / sqrt(pi)
    0.5641895835
    """
    low = max(
        m - _WIDTH * s for m, s in zip(mean, sd, strict=True)
    )  # some leaf is above it, whatever happens
    high = max(m + _WIDTH * s for m, s in zip(mean, sd, strict=True))

    def some_leaf_above(x: float) -> float:
        none = 1.0
        for m, s in zip(mean, sd, strict=True):
            none *= 0.5 * math.erfc((m - x) / (s * math.sqrt(2))) if s > 0 else float(x >= m)
        return 1 - none

    marks = [
        m + t * s for m, s in zip(mean, sd, strict=True) for t in ((-5, -1.5, 1.5, 5) if s > 0 else (0,))
    ]
    return low + _integral(some_leaf_above, low, high, marks, _WANTED * max(sd))


def action_values(tree: BeliefTree, horizon: float) -> Floats:
    """V_h of every root action of a decision-only tree, in child order."""
    t = leaf_table(tree)
    assert t.mean is not None
    assert t.var is not None
    assert t.noise_var is not None
    centre = t.offset + t.gain * t.mean
    sd = t.gain * [
        _later_sd(v, n, horizon) for v, n in zip(t.var.tolist(), t.noise_var.tolist(), strict=True)
    ]
    members = [t.action == a for a in range(len(tree.action_nodes))]
    return np.array([expected_max(centre[own].tolist(), sd[own].tolist()) for own in members])


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
    own = [int(i) for i in np.flatnonzero(t.action == t.action[leaf])]
    at = own.index(leaf)
    mean = (t.offset + t.gain * tree.mean)[own].tolist()
    s = float(t.gain[leaf]) * _later_sd(v, n, batch)
    left = v * n / (batch * v + n)
    later = [_later_sd(float(tree.var[i]), float(tree.noise_var[i]), horizon) for i in own]
    later[at] = _later_sd(left, n, horizon)
    sd = [float(t.gain[i]) * x for i, x in zip(own, later, strict=True)]
    now = action_values(tree, horizon)
    rivals = np.delete(now, t.action[leaf])
    rival = float(rivals.max()) if len(rivals) else -math.inf
    best = float(now.max())

    def value_after(z: float) -> float:
        """V_h of the leaf's action after outcome z."""
        return expected_max([*mean[:at], mean[at] + s * z, *mean[at + 1 :]], sd)

    # The value bends where the leaf meets another one, and where the action overtakes its best rival.
    marks = [
        0.0,
        *(
            (m - mean[at] + t * math.hypot(x, sd[at])) / s
            for m, x in zip(mean, sd, strict=True)
            for t in (-2, 2)
        ),
    ]
    if value_after(-_WIDTH) < rival < value_after(_WIDTH):
        marks.append(brentq(lambda z: value_after(z) - rival, -_WIDTH, _WIDTH, xtol=1e-10))

    def gain(z: float) -> float:
        return (max(value_after(z), rival) - best) * math.exp(-z * z / 2) / math.sqrt(2 * math.pi)

    return _integral(gain, -_WIDTH, _WIDTH, marks, 10 * _WANTED * max(*sd, s))


def rate(tree: BeliefTree, leaf: int, remaining: int, horizon: float = math.inf) -> tuple[float, int]:
    """(max over k <= remaining of VOC(k) / k, its smallest k), pricing every k."""
    rates = [voc(tree, leaf, k, horizon) / k for k in range(1, remaining + 1)]
    best = int(np.argmax(rates))
    return rates[best], best + 1


def _later_sd(v: float, n: float, rollouts: float) -> float:
    """sqrt(v^2 / (v + n / rollouts)): spread of a posterior mean after so many rollouts."""
    return v / math.sqrt(v + n / rollouts) if v > 0 else 0.0


def _integral(
    f: Callable[[float], float], low: float, high: float, marks: Sequence[float], wanted: float
) -> float:
    """Adaptive quadrature of f over [low, high], cut at the marks."""
    if not low < high:
        return 0.0
    inside = sorted(m for m in marks if low < m < high)
    cuts = [low]
    for m in inside:
        if m - cuts[-1] > 1e-12 * (high - low):
            cuts.append(m)
    cuts.append(high)
    pieces = [
        quad(f, a, b, epsabs=wanted / len(cuts), epsrel=0, limit=200, full_output=1)[0]
        for a, b in itertools.pairwise(cuts)
    ]
    return math.fsum(pieces)
