"""Normal formulas that keep relative accuracy in their tails, and quadrature rules; floor 0.

Everything is a scalar function compiled by Numba, to be called from compiled kernels; from Python they
work on single numbers. Phi and phi are the standard normal distribution function and density.

    norm_pdf(x)      phi(x)
    norm_cdf(x)      Phi(x)
    log_norm_cdf(x)  log Phi(x)
    mills(t)         Phi(-t) / phi(t), t >= 0: the Mills ratio
    gain_ratio(t)    gain(-t) / phi(t) = 1 - t mills(t), t >= 0
    gain(z)          z Phi(z) + phi(z) = E max(z + X, 0), X standard normal
    log_gain(z)      log of it

The unit normal loss L(z) of the decision literature is gain(-z).
"""

from __future__ import annotations

import math
from functools import cache

import numpy as np
from numpy.typing import NDArray

from distill.kernels import compiled

__all__ = [
    "compiled", "gain", "gain_ratio", "gauss_legendre", "legendre_antiderivative", "log_gain", "log_norm_cdf",
    "mills", "norm_cdf", "norm_pdf",
]  # fmt: skip

Floats = NDArray[np.float64]
_INV_SQRT_2 = 0.7071067811865476
_INV_SQRT_2PI = 0.3989422804014327
_LOG_SQRT_2PI = 0.9189385332046727

# gain_ratio(t) (t^2 + 1.5 t + 1) as a Chebyshev series in u = (t - 5) / (t + 5), which maps t >= 0 to
# [-1, 1): smooth at both ends, since gain_ratio(t) ~ 1 / t^2. Coefficients from 60-digit arithmetic
# (mpmath, interpolation in 80 Chebyshev points), cut where they fall below 2e-17.
_GAIN_RATIO_SERIES = (
    1.1097650680489644, -0.04720785580005119, -0.10630409847253942, 0.05377349638497877,
    -0.007811176301763078, -0.004990801318942109, 0.003983460906628026, -0.001527272979043673,
    0.00036756439837271786, -4.9172300770452295e-05, -6.031407221156741e-07, 1.6320205086512602e-06,
    -2.256583021921482e-07, -2.6031793159445973e-08, 1.0599639091102752e-08, 4.3648826669350676e-12,
    -3.943756904068002e-10, 2.201707672675194e-11, 1.4663433245704713e-11, -1.327006874405822e-12,
    -5.901012358129385e-13, 6.048279241512904e-14, 2.6234860156391483e-14, -2.336033844321444e-15,
    -1.2651139804080409e-15, 6.7583649266416e-17, 6.362944055320016e-17,
)  # fmt: skip
_SERIES = np.array(_GAIN_RATIO_SERIES)
_SERIES_TOP = len(_GAIN_RATIO_SERIES) - 1


@compiled
def norm_pdf(x: float) -> float:
    """Density phi(x) of the standard normal; relative error below (2 + x^2) 2.3e-16.

    >>> round(norm_pdf(1.0), 12)
    0.241970724519
    """
    return _INV_SQRT_2PI * math.exp(-0.5 * x * x)


@compiled
def norm_cdf(x: float) -> float:
    """Phi(x); relative error below (4 + x^2) 2.3e-16 in the left tail, down to underflow near -38.

    >>> round(norm_cdf(-10.0) * 1e24, 10)
    7.6198530242
    """
    return 0.5 * math.erfc(-x * _INV_SQRT_2)


@compiled
def gain_ratio(t: float) -> float:
    """gain(-t) / phi(t) = 1 - t Phi(-t) / phi(t) for t >= 0; relative error below 2e-15 for every t.

    Chebyshev series in (t - 5) / (t + 5) over the factor t^2 + 1.5 t + 1; behaves as 1 / t^2 for large t.

    >>> gain_ratio(0.0), round(gain_ratio(1e6) * 1e12, 9)
    (1.0, 1.0)
    """
    u = (t - 5.0) / (t + 5.0) if t < 1e300 else 1.0
    b1 = 0.0
    b2 = 0.0
    for k in range(_SERIES_TOP, 0, -1):
        b1, b2 = 2.0 * u * b1 - b2 + _SERIES[k], b1
    series: float = u * b1 - b2 + _SERIES[0]
    return series / (t * t + 1.5 * t + 1.0)


@compiled
def mills(t: float) -> float:
    """Mills ratio Phi(-t) / phi(t) for t >= 0; relative error below 3e-15 for every t.

    >>> round(mills(0.0), 12), round(mills(1e8) * 1e8, 12)
    (1.253314137316, 1.0)
    """
    if t < 2.0:
        return 0.5 * math.erfc(t * _INV_SQRT_2) / (_INV_SQRT_2PI * math.exp(-0.5 * t * t))
    return (1.0 - gain_ratio(t)) / t


@compiled
def log_norm_cdf(x: float) -> float:
    """log Phi(x); relative error below 1e-14 + x^2 2.3e-16 for x > 0, 1e-14 for x from -1e150 to 0.

    For large x it is -Phi(-x), for x far below zero -x^2 / 2 - log(sqrt(2 pi)) + log mills(-x).

    >>> round(log_norm_cdf(-100.0), 9), round(log_norm_cdf(10.0) * 1e24, 9)
    (-5005.524208694, -7.619853024)
    """
    if x < -3.0:
        return -0.5 * x * x - _LOG_SQRT_2PI + math.log(mills(-x))
    if x < 0.5:
        return math.log(0.5 * math.erfc(-x * _INV_SQRT_2))
    return math.log1p(-0.5 * math.erfc(x * _INV_SQRT_2))


@compiled
def gain(z: float) -> float:
    """Unit normal gain z Phi(z) + phi(z) = E max(z + X, 0); relative error below (10 + z^2) 2.3e-16.

    gain(-z) is the unit normal linear loss integral L(z) (Raiffa and Schlaifer 1961, Table II). The two
    terms cancel for negative z, so there it is phi(z) gain_ratio(-z).

    >>> round(gain(0.0), 12), round(gain(-30.0) * 1e199, 9)
    (0.398942280401, 1.631956734)
    """
    if z > 0.0:
        return z + _INV_SQRT_2PI * math.exp(-0.5 * z * z) * gain_ratio(z)
    return _INV_SQRT_2PI * math.exp(-0.5 * z * z) * gain_ratio(-z)


@compiled
def log_gain(z: float) -> float:
    """log(z Phi(z) + phi(z)), also where the gain itself underflows; absolute error a few roundings.

    >>> round(log_gain(-100.0), 6)
    -5010.129579
    """
    if z > 0.0:
        return math.log(gain(z))
    return -0.5 * z * z - _LOG_SQRT_2PI + math.log(gain_ratio(-z))


@cache
def gauss_legendre(n: int) -> tuple[Floats, Floats]:
    """Nodes and weights of the n-point Gauss-Legendre rule on [-1, 1]; read-only, shape (n,) each.

    Exact for polynomials of degree 2 n - 1.

    >>> x, w = gauss_legendre(5)
    >>> round(float(w @ x**8), 12)
    0.222222222222
    """
    x, w = np.polynomial.legendre.leggauss(n)
    x.flags.writeable = w.flags.writeable = False
    return x, w


@cache
def legendre_antiderivative(n: int) -> Floats:
    """Matrix A with (A f)_j = integral from -1 to x_j of the polynomial through f at the n Gauss nodes.

    Shape (n, n), read-only. Expands f in Legendre polynomials, whose antiderivatives are
    (P_{k+1} - P_{k-1}) / (2 k + 1).

    >>> x, _ = gauss_legendre(6)
    >>> bool(np.allclose(legendre_antiderivative(6) @ (3 * x**2), x**3 + 1, atol=1e-15))
    True
    """
    x, w = gauss_legendre(n)
    P = np.polynomial.legendre.legvander(x, n)
    A = 0.5 * np.outer(x + 1.0, w)
    for k in range(1, n):
        A += 0.5 * np.outer(P[:, k + 1] - P[:, k - 1], w * P[:, k])
    A.flags.writeable = False
    return A
