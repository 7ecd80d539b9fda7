"""Dynamic VOC of independent Gaussian leaves below decisions in plain vectorised NumPy, to measure Numba by.

The same mathematics as the compiled method, all leaves of a tree at once, on fixed rules: 256 Gauss-Legendre
nodes along every action's values, 32 along the outcomes beyond the crossing, which is found by bisection.
"""

from __future__ import annotations

import numpy as np
from scipy.special import log_ndtr, ndtr

from distill.tree import BeliefTree, leaf_table

X, W = np.polynomial.legendre.leggauss(256)
T, U = np.polynomial.legendre.leggauss(32)
REACH = 8.5


def voc(tree: BeliefTree) -> np.ndarray:
    """VOC_inf of one rollout at every leaf, shape (n_leaves,); every variance above 0."""
    table = leaf_table(tree)
    v, n, gain = table.var, table.noise_var, table.gain
    m = table.offset + gain * table.mean
    sd, s, left = gain * np.sqrt(v), gain * v / np.sqrt(v + n), gain * np.sqrt(v * (n / (v + n)))
    a, n_actions = table.action, int(table.action.max()) + 1
    low, high = np.full(n_actions, -np.inf), np.full(n_actions, -np.inf)
    np.maximum.at(low, a, m - REACH * sd)
    np.maximum.at(high, a, m + REACH * sd)
    half = (high - low)[:, None] / 2
    x, w = low[:, None] + half * (1 + X), half * W
    own = log_ndtr((x[a] - m[:, None]) / sd[:, None])
    together = np.zeros_like(x)
    np.add.at(together, a, own)
    value = high - np.sum(w * np.exp(together), axis=1)
    if n_actions == 1:
        return np.zeros(len(m))
    rest = w[a] * np.exp(together[a] - own)
    rival = np.array([np.delete(value, b).max() for b in range(n_actions)])[a]

    def lead(y: np.ndarray) -> np.ndarray:
        """Of the leaf's action over its rival once the leaf's mean is y, (leaves, outcomes)."""
        inner = ndtr((x[a][:, None] - y[:, :, None]) / left[:, None, None])
        over = np.maximum(y - high[a][:, None], 0)
        return high[a][:, None] + over - np.einsum("lg,log->lo", rest, inner) - rival[:, None]

    bottom, top = m - 9 * s, m + 9 * s
    for _ in range(40):
        middle = (bottom + top) / 2
        ahead = lead(middle[:, None])[:, 0] >= 0
        bottom, top = np.where(ahead, bottom, middle), np.where(ahead, middle, top)
    best = value[a] >= rival
    start, stop = np.where(best, m - 9 * s, top), np.where(best, bottom, m + 9 * s)
    span = np.maximum(stop - start, 0)[:, None] / 2
    y = start[:, None] + span * (1 + T)
    density = np.exp(-0.5 * ((y - m[:, None]) / s[:, None]) ** 2) / (s[:, None] * np.sqrt(2 * np.pi))
    return np.maximum(np.sum(span * U * density * np.abs(lead(y)), axis=1), 0)
