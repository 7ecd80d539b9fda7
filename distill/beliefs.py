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

    .. math:: m' = m + S_{:A} (S_{AA} + D)^{-1} (y_A - m_A), \quad S' = S - S_{:A} (S_{AA} + D)^{-1} S_{A:}

    with A the leaves that were rolled out and D the diagonal of n_i / k_i.

    mean, noise_var, rollouts, observed : shape (n,); `observed` is the average return, and is read
        only where `rollouts` > 0.
    cov : shape (n, n), symmetric positive semidefinite; singular is fine, since noise is positive.
    Returns the new mean (n,) and covariance (n, n), the latter symmetric to the last bit.

    >>> m, S = dense_gaussian_update(np.zeros(2), np.array([[1.0, 0.5], [0.5, 1.0]]), np.ones(2),
    ...                              np.array([1, 0]), np.array([2.0, np.nan]))
    >>> m, S
    (array([1. , 0.5]), array([[0.5  , 0.25 ], [0.25 , 0.875]]))
    """
    seen = np.flatnonzero(rollouts)
    if not len(seen):
        return mean.copy(), cov.copy()
    total = cov[np.ix_(seen, seen)] + np.diag(noise_var[seen] / rollouts[seen])
    # Whitened by the Cholesky factor, the reduction is W' W: symmetric, and never below zero.
    factor = np.linalg.cholesky(total)
    white = np.linalg.solve(factor, cov[seen])
    surprise = np.linalg.solve(factor, observed[seen] - mean[seen])
    new = cov - white.T @ white
    new = (new + new.T) / 2
    diagonal = np.einsum("ii->i", new)
    np.maximum(diagonal, 0.0, out=diagonal)
    return mean + white.T @ surprise, new


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
