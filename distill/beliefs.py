"""Posterior updates after rollouts: Gaussian (independent or dense) and win/loss; floor 1.

Conjugate formulas: Gelman, Carlin, Stern, Dunson, Vehtari and Rubin, Bayesian Data Analysis, 3rd ed.
(2013), sections 2.4 (beta-binomial), 2.5 and 3.5 (normal, known noise).

The elementwise functions are plain arithmetic, so they broadcast over arrays and compile unchanged
inside the search kernels of `distill.allocation`.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from distill.tree import Floats, Ints

__all__ = [
    "dense_gaussian_update",
    "gaussian_mean_update",
    "gaussian_var_update",
    "win_loss_mean",
    "win_loss_noise_var",
    "win_loss_update",
    "win_loss_var",
]


def gaussian_mean_update(mean: Any, var: Any, noise_var: Any, rollouts: Any, observed: Any) -> Any:
    r"""Posterior mean of a leaf value after `rollouts` whose average was `observed`.

    .. math:: m' = m + \frac{k v}{k v + n} (y - m)

    All arguments broadcast. mean, observed: u; var >= 0 and noise_var > 0: u^2; rollouts k >= 0.
    k = 0 or var = 0 leaves the mean as it is. The error is a few roundings of |m| + |y|.

    >>> gaussian_mean_update(0.0, 1.0, 4.0, 4, 2.0)
    1.0
    """
    return mean + rollouts * var / (rollouts * var + noise_var) * (observed - mean)


def gaussian_var_update(var: Any, noise_var: Any, rollouts: Any) -> Any:
    r"""Posterior variance of a leaf value after `rollouts`; shapes and units as for the mean.

    .. math:: v' = \frac{v\, n}{k v + n}

    Relative accuracy of a few roundings over the whole range: nothing is subtracted.

    >>> gaussian_var_update(1.0, 4.0, 4)
    0.5
    """
    return var * (noise_var / (rollouts * var + noise_var))


def dense_gaussian_update(
    mean: Floats, cov: Floats, noise_var: Floats, rollouts: Ints, observed: Floats
) -> tuple[Floats, Floats]:
    r"""Joint posterior of correlated leaf values after rollouts at any of them.

    .. math:: S' = L (I + L^T D L)^{-1} L^T, \quad m' = m + S' D (y - m), \quad S = L L^T

    with D the diagonal of k_i / n_i: the information form, for any rank of S. Nothing is subtracted
    from S, so S' is positive semidefinite to its own rounding even where noise is tiny beside S.

    mean, noise_var, rollouts, observed : shape (n,); `observed` is the average return, and is read
        only where `rollouts` > 0.
    cov : shape (n, n), symmetric positive semidefinite; singular is fine, since noise is positive.
    Returns the new mean (n,) and covariance (n, n), the latter symmetric to the last bit.

    >>> m, S = dense_gaussian_update(np.zeros(2), np.array([[1.0, 0.5], [0.5, 1.0]]), np.ones(2),
    ...                              np.array([1, 0]), np.array([2.0, np.nan]))
    >>> m.round(12), S.round(12)
    (array([1. , 0.5]), array([[0.5  , 0.25 ], [0.25 , 0.875]]))
    """
    seen = rollouts > 0
    if not np.any(seen):
        return mean.copy(), cov.copy()
    spectrum, basis = np.linalg.eigh(cov)
    root = basis * np.sqrt(np.maximum(spectrum, 0.0))
    root[np.diag(cov) == 0] = 0.0  # a sure leaf stays sure to the last bit
    weight = np.where(seen, rollouts / noise_var, 0.0)
    surprise = np.where(seen, weight * (observed - mean), 0.0)
    information = np.eye(len(cov)) + root.T @ (weight[:, None] * root)
    white = np.linalg.solve(np.linalg.cholesky(information), root.T)
    new = white.T @ white
    return mean + white.T @ (white @ surprise), (new + new.T) / 2


def win_loss_update(alpha: Any, beta: Any, rollouts: Any, wins: Any) -> Any:
    """Posterior Beta parameters of a win/loss leaf after `wins` of `rollouts`; all broadcast.

    >>> win_loss_update(1.0, 1.0, 3, 2)
    (3.0, 2.0)
    """
    return alpha + wins, beta + (rollouts - wins)


def win_loss_mean(alpha: Any, beta: Any, low: Any, high: Any) -> Any:
    """Mean of low + (high - low) p, p ~ Beta(alpha, beta), u; all broadcast.

    >>> win_loss_mean(1.0, 3.0, 0.0, 8.0)
    2.0
    """
    return low + (high - low) * (alpha / (alpha + beta))


def win_loss_var(alpha: Any, beta: Any, low: Any, high: Any) -> Any:
    r"""Variance of low + (high - low) p, p ~ Beta(alpha, beta), u^2; all broadcast.

    .. math:: (high - low)^2 \frac{\alpha\beta}{(\alpha+\beta)^2 (\alpha+\beta+1)}

    >>> win_loss_var(1.0, 1.0, 0.0, 6.0)
    3.0
    """
    total = alpha + beta
    return (high - low) ** 2 * (alpha / total) * (beta / total) / (total + 1)


def win_loss_noise_var(alpha: Any, beta: Any, low: Any, high: Any) -> Any:
    """Expected variance of one win/loss rollout given p, u^2; all broadcast.

    It is the variance of the value times alpha + beta, so that k rollouts shrink the variance of the
    posterior mean exactly as Gaussian rollouts of this noise would: v k / (k + alpha + beta).

    >>> win_loss_noise_var(1.0, 1.0, 0.0, 6.0)
    6.0
    """
    total = alpha + beta
    return (high - low) ** 2 * (alpha / total) * (beta / (total + 1))
