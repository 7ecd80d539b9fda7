from __future__ import annotations

from fractions import Fraction
from math import comb

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, EXACT, QUADRATURE
from scipy import stats
from scipy.special import betaln

from distill import beliefs

SETTINGS = settings(deadline=None, max_examples=60, derandomize=True)
fractions = st.fractions(min_value=Fraction(1, 1000), max_value=1000, max_denominator=1000)


@SETTINGS
@given(
    st.fractions(-100, 100, max_denominator=99), fractions, fractions, st.integers(1, 50), st.fractions(-9, 9)
)
def test_gaussian_update_adds_precisions(m, v, n, k, y):
    """In exact arithmetic: precision 1/v + k/n, mean the precision-weighted one."""
    precision = 1 / v + k / n
    assert beliefs.gaussian_var_update(v, n, k) == 1 / precision
    assert beliefs.gaussian_mean_update(m, v, n, k, y) == (m / v + k * y / n) / precision


@SETTINGS
@given(fractions, fractions, st.lists(st.fractions(-9, 9), min_size=1, max_size=6))
def test_one_batch_equals_its_rollouts_one_by_one(v, n, returns):
    k = len(returns)
    at_once = beliefs.gaussian_mean_update(Fraction(1), v, n, k, sum(returns) / k)
    m, w = Fraction(1), v
    for y in returns:
        m, w = beliefs.gaussian_mean_update(m, w, n, 1, y), beliefs.gaussian_var_update(w, n, 1)
    assert (m, w) == (at_once, beliefs.gaussian_var_update(v, n, k))


@pytest.mark.parametrize("ratio", [1e-16, 1e-8, 1.0, 1e8, 1e16])
@pytest.mark.parametrize("scale", [1e-12, 1.0, 1e12])
def test_gaussian_update_over_decades(ratio, scale):
    v, n, k = np.float64(scale**2 * ratio), scale**2, 7
    exact = 1 / (1 / Fraction(float(v)) + k / Fraction(n))
    assert beliefs.gaussian_var_update(v, n, k) == pytest.approx(float(exact), rel=CLOSED_FORM, abs=0)


def test_nothing_is_learned_from_no_rollout_or_about_a_sure_value():
    assert beliefs.gaussian_mean_update(3.0, 2.0, 1.0, 0, 9.0) == 3.0
    assert beliefs.gaussian_var_update(2.0, 1.0, 0) == 2.0
    assert beliefs.gaussian_mean_update(3.0, 0.0, 1e-300, 5, 9.0) == 3.0
    assert beliefs.gaussian_var_update(0.0, 1e-300, 5) == 0.0


def _random_cov(rng, n, rank):
    load = rng.standard_normal((n, rank))
    return load @ load.T


@pytest.mark.parametrize("seed", range(5))
def test_dense_update_is_the_information_form(seed):
    """(S^-1 + D^-1)^-1 on a well-conditioned case, by inverses that the update does not use."""
    rng = np.random.default_rng(seed)
    n = 6
    S, m, noise = _random_cov(rng, n, n) + np.eye(n), rng.standard_normal(n), rng.uniform(0.5, 2, n)
    k, y = rng.integers(0, 4, n), rng.standard_normal(n)
    new_m, new_S = beliefs.dense_gaussian_update(m, S, noise, k, y)
    precision = np.linalg.inv(S) + np.diag(k / noise)
    np.testing.assert_allclose(new_S, np.linalg.inv(precision), rtol=0, atol=1e3 * CLOSED_FORM)
    expected = np.linalg.solve(precision, np.linalg.solve(S, m) + k * y / noise)
    np.testing.assert_allclose(new_m, expected, rtol=0, atol=1e3 * CLOSED_FORM)


def test_dense_update_of_independent_leaves_is_the_diagonal_one():
    rng = np.random.default_rng(0)
    m, v, noise, k = rng.standard_normal(5), rng.uniform(0, 3, 5), rng.uniform(0.1, 9, 5), np.arange(5)
    y = rng.standard_normal(5)
    new_m, new_S = beliefs.dense_gaussian_update(m, np.diag(v), noise, k, y)
    np.testing.assert_allclose(new_m, beliefs.gaussian_mean_update(m, v, noise, k, y), rtol=CLOSED_FORM)
    np.testing.assert_allclose(np.diag(new_S), beliefs.gaussian_var_update(v, noise, k), rtol=CLOSED_FORM)


def test_dense_update_of_a_singular_covariance_stays_one():
    """Leaves that are one value: seeing any of them moves all alike."""
    S = np.ones((3, 3))
    m, new = beliefs.dense_gaussian_update(np.zeros(3), S, np.ones(3), np.array([0, 1, 0]), np.full(3, 2.0))
    np.testing.assert_allclose(m, 1.0, rtol=CLOSED_FORM)
    np.testing.assert_allclose(new, 0.5, rtol=CLOSED_FORM)
    assert np.array_equal(new, new.T)


shape = st.floats(1e-2, 1e4)


@SETTINGS
@given(shape, shape, st.floats(-1e3, 1e3), st.floats(1e-3, 1e3))
def test_win_loss_moments_are_those_of_the_beta_law(a, b, low, span):
    law = stats.beta(a, b, loc=low, scale=span)
    high = low + span
    assert beliefs.win_loss_mean(a, b, low, high) == pytest.approx(
        law.mean(), rel=CLOSED_FORM, abs=CLOSED_FORM * span
    )
    assert beliefs.win_loss_var(a, b, low, high) == pytest.approx(law.var(), rel=QUADRATURE, abs=EXACT)


@pytest.mark.parametrize(("a", "b", "k"), [(1, 1, 3), (2, 5, 4), (7, 1, 10)])
def test_win_loss_noise_shrinks_as_the_beta_binomial_does(a, b, k):
    """Variance of the posterior mean over all outcomes of k rollouts, enumerated, equals v^2/(v + n/k)."""
    outcomes = np.arange(k + 1)
    weight = [comb(k, j) * np.exp(betaln(a + j, b + k - j) - betaln(a, b)) for j in outcomes]
    after = beliefs.win_loss_mean(*beliefs.win_loss_update(a, b, k, outcomes), 0.0, 1.0)
    mean = np.dot(weight, after)
    v, n = beliefs.win_loss_var(a, b, 0.0, 1.0), beliefs.win_loss_noise_var(a, b, 0.0, 1.0)
    assert mean == pytest.approx(a / (a + b), rel=CLOSED_FORM)
    assert np.dot(weight, (after - mean) ** 2) == pytest.approx(v**2 / (v + n / k), rel=CLOSED_FORM)
