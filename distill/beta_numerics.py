"""Beta and beta-binomial formulas that keep relative accuracy at any concentration; floor 0.

The density is evaluated in saddle-point form: with n = a + b and mu = a / n,

    f(p) = exp(log_c) exp(-n KL(mu || p)) / (p q),  q = 1 - p,
    log_c = d(n) - d(a) - d(b) + log(a b / (2 pi n)) / 2,

where d is the remainder of Stirling's formula (C. Loader, Fast and accurate computation of binomial
probabilities, 2000). No term grows with n near the mode, so a million trials cost no digits. All
functions are compiled; p and q are passed apart, because 1 - p loses the digits of a q near 0.
"""

from __future__ import annotations

import math

import numpy as np

from distill.numerics import Floats, compiled

__all__ = [
    "beta_binomial_law",
    "beta_density",
    "beta_divergence",
    "beta_log_constant",
    "log1p_minus",
    "lower_tail",
    "stirling_rest",
]

_HALF_LOG_2PI = 0.9189385332046727


@compiled
def log1p_minus(u: float) -> float:
    """log(1 + u) - u for u > -1, relative accuracy near u = 0 too; unit-free, <= 0.

    Near 0: with r = u / (2 + u), log(1 + u) = 2 atanh(r), so the value is
    -u r + 2 (r^3/3 + r^5/5 + ...), whose terms do not cancel.

    >>> round(1e17 * log1p_minus(1e-8), 6)
    -5.0
    """
    if abs(u) >= 0.35:
        return math.log1p(u) - u
    r = u / (2.0 + u)
    s = r * r
    series = 0.0
    for odd in range(27, 1, -2):
        series = series * s + 1.0 / odd
    return -u * r + 2.0 * r * s * series


@compiled
def stirling_rest(z: float) -> float:
    """d(z) = log Gamma(z + 1) - (z + 1/2) log z + z - log(2 pi) / 2, for z > 0; between 0 and 1/(12 z).

    From z = 16 the asymptotic series, error below 1e-16 (Abramowitz and Stegun 1964, 6.1.41).

    >>> round(stirling_rest(1.0), 12)
    0.081061466795
    """
    if z < 16.0:
        return math.lgamma(z + 1.0) - (z + 0.5) * math.log(z) + z - _HALF_LOG_2PI
    s = 1.0 / (z * z)
    c = 1.0 / 1188.0 - s * 691.0 / 360360.0
    c = 1.0 / 1680.0 - s * c
    c = 1.0 / 1260.0 - s * c
    c = 1.0 / 360.0 - s * c
    return (1.0 / 12.0 - s * c) / z


@compiled
def beta_log_constant(a: float, b: float) -> float:
    """log_c of the saddle-point density of Beta(a, b); a, b > 0."""
    n = a + b
    rest = stirling_rest(n) - stirling_rest(a) - stirling_rest(b)
    return rest + 0.5 * (math.log(a / n) + math.log(b)) - _HALF_LOG_2PI


@compiled
def beta_divergence(a: float, b: float, p: float, q: float) -> float:
    """n KL(mu || p) = a log(mu / p) + b log((1 - mu) / q) >= 0, for Beta(a, b), 0 < p < 1, q = 1 - p.

    >>> beta_divergence(3.0, 1.0, 0.75, 0.25)
    -0.0
    """
    n = a + b
    mu, nu = a / n, b / n
    away = p - mu if p <= q else nu - q
    u, v = away / mu, -away / nu
    left = log1p_minus(u) if abs(u) < 0.35 else math.log(p / mu) - u
    right = log1p_minus(v) if abs(v) < 0.35 else math.log(q / nu) - v
    return -(a * left + b * right)


@compiled
def beta_density(a: float, b: float, log_c: float, p: float, q: float) -> float:
    """Density of Beta(a, b) at p, where log_c = beta_log_constant(a, b), 0 < p < 1 and q = 1 - p.

    0 where its exponential is below 1e-300: subnormal numbers are slow, and hold no relative accuracy.

    >>> round(beta_density(2.0, 2.0, beta_log_constant(2.0, 2.0), 0.5, 0.5), 12)
    1.5
    """
    exponent = log_c - beta_divergence(a, b, p, q)
    return math.exp(exponent) / (p * q) if exponent > -690.0 else 0.0


@compiled
def lower_tail(a: float, b: float, p: float) -> float:
    """I_p(a, b) = P(Beta(a, b) <= p) close to 0: for p <= 1/4 and p (a + b) of the order of 1 or less.

    I_p = p^a q^b / (a B(a, b)) sum_n (a + b)_n / (a + 1)_n p^n, all terms positive
    (NIST Handbook of Mathematical Functions 2010, 8.17.7 after Euler's transformation 15.8.1).

    >>> round(lower_tail(1.0, 1.0, 0.125), 12)
    0.125
    """
    if p <= 0.0:
        return 0.0
    q = 1.0 - p
    first = math.exp(beta_log_constant(a, b) - beta_divergence(a, b, p, q)) / a
    term, total, n = 1.0, 1.0, 0
    while term > 1e-17 * total and n < 10_000:
        term *= (a + b + n) / (a + 1.0 + n) * p
        total += term
        n += 1
    return first * total


@compiled
def beta_binomial_law(a: float, b: float, k: int) -> Floats:
    """P(x wins in k trials), x = 0 ... k, p ~ Beta(a, b); ratios from the mode out, divided by their total.

    >>> beta_binomial_law(1.0, 1.0, 3)
    array([0.25, 0.25, 0.25, 0.25])
    """
    out = np.empty(k + 1)
    n = a + b
    if a >= 1.0 and b >= 1.0:
        top = 0 if n <= 2.0 else min(k, int((k + 1) * ((a - 1.0) / (n - 2.0))))
        split = k
    elif b >= 1.0:
        top, split = 0, k
    elif a >= 1.0:
        top, split = k, k
    else:  # heavy at both ends: each half from its own end
        top, split = 0, k // 2
    out[top] = 1.0
    for x in range(top, split):
        out[x + 1] = out[x] * ((k - x) / (x + 1.0)) * ((a + x) / (b + (k - x - 1)))
    if split < k:
        out[k] = 1.0
        for s in range(k):
            out[k] *= (a + s) / (b + s)
    for x in range(top if split == k else k, 0 if split == k else split + 1, -1):
        out[x - 1] = out[x] * (x / (k - x + 1.0)) * ((b + (k - x)) / (a + (x - 1)))
    return out / np.sum(out)
