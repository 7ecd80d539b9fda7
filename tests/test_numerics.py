"""Normal formulas against 50-digit arithmetic, over both tails."""

from __future__ import annotations

import math

import mpmath as mp
import numpy as np
import pytest
from ladder import GAIN_RATIO, MILLS, ROUNDINGS

from distill import numerics as nm

EPS = 2.3e-16
# Both tails, the joins between branches, and where the density underflows.
POINTS = [0.0, 1e-300, 1e-9, 0.3, 0.49999, 0.5, 1.0, 1.99999, 2.0, 2.99999, 3.0, 5.0, 7.5, 12.0, 20.0, 37.0]
FAR = [50.0, 1e3, 1e8, 1e100]


def _phi(x: mp.mpf) -> mp.mpf:
    return mp.exp(-x * x / 2) / mp.sqrt(2 * mp.pi)


def _cdf(x: mp.mpf) -> mp.mpf:
    return mp.erfc(-x / mp.sqrt(2)) / 2


@pytest.fixture(autouse=True)
def _digits():
    with mp.workdps(50):
        yield


@pytest.mark.parametrize("x", [s * p for p in POINTS for s in (-1.0, 1.0)])
def test_densities_and_distribution_functions_keep_their_stated_relative_error(x):
    z = mp.mpf(x)
    assert abs(nm.norm_pdf(x) / _phi(z) - 1) <= (2 + x * x) * EPS
    assert abs(nm.norm_cdf(x) / _cdf(z) - 1) <= (4 + x * x) * EPS
    exact_log = mp.log1p(-_cdf(-z)) if x > 0 else mp.log(_cdf(z))
    assert abs(nm.log_norm_cdf(x) / exact_log - 1) <= ROUNDINGS + (EPS * x * x if x > 0 else 0)
    exact_gain = z * _cdf(z) + _phi(z)
    assert abs(nm.gain(x) / exact_gain - 1) <= (10 + x * x) * EPS
    assert abs(nm.log_gain(x) - mp.log(exact_gain)) <= ROUNDINGS + EPS * x * x


@pytest.mark.parametrize("t", [*POINTS, *np.linspace(0, 40, 161).tolist()])
def test_ratios_keep_relative_accuracy(t):
    z = mp.mpf(t)
    with mp.workdps(80):
        ratio = _cdf(-z) / _phi(z)
        assert abs(nm.mills(t) / ratio - 1) <= MILLS
        assert abs(nm.gain_ratio(t) / (1 - z * ratio) - 1) <= GAIN_RATIO


@pytest.mark.parametrize("t", FAR)
def test_far_tails_follow_their_asymptotic_series(t):
    z = mp.mpf(t)
    ratio = 1 / z - 1 / z**3 + 3 / z**5 - 15 / z**7 + 105 / z**9 - 945 / z**11 + 10395 / z**13
    assert abs(nm.mills(t) / ratio - 1) <= MILLS
    loss = 1 / z**2 - 3 / z**4 + 15 / z**6 - 105 / z**8 + 945 / z**10 - 10395 / z**12 + 135135 / z**14
    assert abs(nm.gain_ratio(t) / loss - 1) <= GAIN_RATIO
    assert abs(nm.log_norm_cdf(-t) / (-z * z / 2 + mp.log(ratio / mp.sqrt(2 * mp.pi))) - 1) <= ROUNDINGS
    assert nm.norm_cdf(-t) == nm.gain(-t) == 0.0
    assert nm.gain(t) == t


def test_nothing_turns_into_nan_at_infinities():
    assert nm.norm_cdf(-math.inf) == 0.0
    assert nm.norm_cdf(math.inf) == 1.0
    assert nm.gain(-math.inf) == 0.0
    assert nm.log_norm_cdf(math.inf) == 0.0


@pytest.mark.parametrize("n", [4, 16, 20, 32])
def test_rules_integrate_polynomials(n):
    x, w = nm.gauss_legendre(n)
    for degree in (0, 2, n, 2 * n - 1):
        exact = 2 / (degree + 1) if degree % 2 == 0 else 0.0
        assert abs(w @ x**degree - exact) < ROUNDINGS
    A = nm.legendre_antiderivative(n)
    assert np.allclose(A @ x ** (n - 1), (x**n - (-1) ** n) / n, atol=ROUNDINGS, rtol=0)
    with pytest.raises(ValueError, match="read-only"):
        x[0] = 0.0
