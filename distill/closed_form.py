"""The static rate of independent Gaussian leaves in closed form, fast; floor 1, light.

A runtime falls back to it, and the features start from the same two fits.
"""

from __future__ import annotations

import math
from typing import Final

import numpy as np
from numpy.typing import NDArray

__all__ = ["LOSS_A", "LOSS_B", "LOSS_P", "LOSS_Q", "PEAK", "highest_rates", "static_rates"]

Floats = NDArray[np.float64]

# f(-z) / phi(z) for z >= 0, f(z) = z Phi(z) + phi(z), as a sum of (a + b z) / (z^2 + p z + q): a rational
# function fitted to 50-digit values; relative error at most 1.2e-7 on [0, 45].
LOSS_P: Final = (4.00784443, 3.79671751, 3.43685931)
LOSS_Q: Final = (4.24084249, 5.83015642, 10.41195629)
LOSS_A: Final = (11.51409415, -10.08967894, 0.16193711)
LOSS_B: Final = (3.38642359, -3.74393112, 0.35750722)

# Where s_k f(-gap / s_k) / k peaks over real k > 0: k v / n = u^2 (a + b / (u^2 + c)), u = gap / sd.
# The rate there is within 0.4 % of the best for every u. (a, b, c).
PEAK: Final = (0.5229, 0.6189, 0.29506)

# The same numbers beside rows of z, 1 / sqrt(2 pi) in what stands above.
_P, _Q = (np.array(x).reshape(3, 1, 1) for x in (LOSS_P, LOSS_Q))
_A, _B = (np.array(x).reshape(3, 1, 1) / np.sqrt(2 * np.pi) for x in (LOSS_A, LOSS_B))

_TINY: Final = 1e-300
_MOST_NOISE: Final = 1e18  # over a leaf's variance
_Z_LIMIT: Final = 40.0  # exp(-z^2 / 2) is 0 in double precision


def static_rates(
    mean: Floats,
    var: Floats,
    noise_var: Floats,
    gain: Floats,
    offset: Floats,
    remaining: float,
    batch: int | None = None,
) -> tuple[Floats, NDArray[np.int64]]:
    r"""The static rate of every leaf of a decision-only tree, u a rollout, and its batch; shape (n,).

    .. math:: \max_{1 \le k \le R} s_k f(-|m_i - c_i| / s_k) / k, \quad s_k^2 = v^2 / (v + n / k)

    with m = gain mean + offset, v = gain^2 var, n = gain^2 noise_var and c_i the largest m of the other
    leaves (Frazier and Powell 2010, section 4). VOC(k) / k has a single peak here. The batch is a
    neighbour of the fitted peak; the rate is within 0.5 % of the best batch's. No leaf alone, no leaf
    without variance and nothing with remaining = 0 is worth anything. With `batch`, the value of that
    many rollouts together instead, u, whatever remains.

    >>> rate, batch = static_rates(*np.array([[0, 0.1], [1, 1], [4, 4], [1, 1], [0, 0.0]]), 100)
    >>> rate.round(4).tolist(), batch.tolist()
    ([0.1329, 0.1329], [1, 1])
    """
    n = len(mean)
    if batch is None and remaining < 1:
        return np.zeros(n), np.zeros(n, dtype=np.int64)
    if n < 2:
        return np.zeros(n), np.full(n, batch or 0, dtype=np.int64)
    # A call of NumPy takes a microsecond, more than its work on a few leaves: hence few of them.
    with np.errstate(all="ignore"):
        m = gain * mean + offset
        top = m.argmax()
        gap = m[top] - m
        gap[top] = np.inf
        gap[top] = gap.min()
        sd = np.abs(gain) * np.sqrt(var)
        noise = np.minimum(np.maximum(noise_var / np.maximum(var, _TINY), 1 / _MOST_NOISE), _MOST_NOISE)
        if batch is not None:
            (value,) = _gains(gap, sd, noise, np.full((1, n), float(batch)))
            return value, np.full(n, batch, dtype=np.int64)
        most = math.floor(remaining)
        u2 = np.square(gap / np.maximum(sd, _TINY))
        peak = u2 * (PEAK[0] + PEAK[1] / (u2 + PEAK[2])) * noise
        k = np.empty((2, n))
        np.floor(np.minimum(np.maximum(peak, 1.0), most), out=k[0])
        np.minimum(k[0] + 1.0, most, out=k[1])
        low, high = _gains(gap, sd, noise, k) / k
    upper = high > low
    return np.where(upper, high, low), np.where(upper, k[1], k[0]).astype(np.int64)


def highest_rates(var: Floats, noise_var: Floats, gain: Floats, batch: int = 1) -> Floats:
    r"""A bound that no rate of a leaf exceeds, whatever the rest of the tree and the horizon; shape (n,).

    .. math:: 2 f(0) s_1 = \sqrt{2 / \pi} \, v / \sqrt{v + n}

    with v and n the leaf's variances at the root. Why: k rollouts move V_h of the leaf's action by a
    function of the posterior mean that rises by at most 1 per unit, so the gain over any rival is at most
    s_k f(0); where h is finite, the action's own V_h rises by at most the same again (it is 0 for h = 0
    and infinity). And s_k / k = v / sqrt(k^2 v + k n) is largest at k = 1. With `batch`, the bound of the
    value of that many rollouts together, with s_k in place of s_1.

    >>> highest_rates(np.array([1.0, 0.0]), np.array([3.0, 3.0]), np.ones(2)).round(4).tolist()
    [0.3989, 0.0]
    """
    with np.errstate(all="ignore"):
        sd = np.abs(gain) * np.sqrt(var)
        resolved = np.sqrt(batch / (batch + noise_var / np.maximum(var, _TINY)))
        return np.asarray(np.sqrt(2 / np.pi) * sd * resolved)


def _gains(gap: Floats, sd: Floats, noise: Floats, k: Floats) -> Floats:
    """s_k f(-gap / s_k); shape (rows, n), as `k`."""
    s = sd * np.sqrt(k / (k + noise))
    return np.asarray(s * _loss(gap / np.maximum(s, _TINY)))


def _loss(z: Floats) -> Floats:
    """f(-z) for z >= 0, shape (rows, n); 0 from z = 40 on."""
    z = np.minimum(z, _Z_LIMIT)
    square = z * z
    below = _P * z
    below += square
    below += _Q
    above = _B * z
    above += _A
    above /= below
    return np.asarray(np.add.reduce(above, axis=0) * np.exp(-0.5 * square))
