"""The rate search against pricing every batch, on shapes with one peak and with many."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, RELATIVE_TAIL

from distill.exact.best_batch import best_batch

REL_TOL = 1e-7  # the search's own default, part of its contract


class Counted:
    """A VOC given as a table over k (one row a leaf), counting how often it is asked."""

    def __init__(self, table, err=0.0):
        self.table, self.err, self.asked = np.asarray(table, dtype=float), err, 0

    def __call__(self, leaf, k):
        self.asked += len(leaf)
        return self.table[leaf, k - 1], np.full(len(leaf), self.err)


def brute(table):
    rates = table / np.arange(1, table.shape[1] + 1)
    return rates.max(axis=1), rates.argmax(axis=1) + 1


def staircase(rng, remaining, steps):
    """A random non-decreasing VOC: any number of peaks of VOC(k) / k."""
    jumps = np.zeros(remaining)
    where = rng.choice(remaining, size=min(steps, remaining), replace=False)
    jumps[where] = rng.exponential(size=len(where)) ** 3
    return np.cumsum(jumps)


@given(seed=st.integers(0, 10**6), remaining=st.integers(1, 400), steps=st.integers(0, 40))
@settings(deadline=None, max_examples=150, derandomize=True)
def test_certified_search_finds_the_best_of_any_non_decreasing_voc(seed, remaining, steps):
    rng = np.random.default_rng(seed)
    table = np.array([staircase(rng, remaining, steps) for _ in range(3)])
    rate, batch, error = best_batch(Counted(table), 3, remaining)
    best, first = brute(table)
    assert np.all(np.abs(rate - best) <= error + CLOSED_FORM * best)
    assert np.all(error <= REL_TOL * best + CLOSED_FORM)
    assert np.array_equal(rate, table[np.arange(3), batch - 1] / batch)
    small = first <= 256  # there the smallest of tied batches is promised
    assert np.array_equal(batch[small & (rate == best)], first[small & (rate == best)])


def test_several_smooth_peaks():
    k = np.arange(1, 2001)
    peaks = [
        0.5 * k / (k + 3) + 40 / (1 + np.exp(-(k - 500) / 40)) + 70 / (1 + np.exp(-(k - 1500) / 50)),
        1e-3 * k / (k + 1) + 5e-2 / (1 + np.exp(-(k - 100) / 5)),
        np.sqrt(k),
        k.astype(float),
    ]
    table = np.array([p - (0 if i else peaks[0][0] * 0.999) for i, p in enumerate(peaks)])
    table = np.maximum.accumulate(np.maximum(table, 0), axis=1)
    counted = Counted(table)
    rate, batch, error = best_batch(counted, 4, 2000)
    best, first = brute(table)
    assert np.allclose(rate, best, rtol=REL_TOL, atol=0)
    assert np.all(error <= REL_TOL * rate)
    assert batch[2] == first[2] == 1
    assert batch[3] == 1  # every batch ties: the smallest
    counted = Counted(table[:3])
    best_batch(counted, 3, 2000)
    assert counted.asked < 0.1 * table[:3].size


def spread_voc(m, scale, v, n):
    """VOC of one leaf against a known rival, as a function of k: convex in the spread."""
    from scipy.stats import norm

    def voc_at(leaf, k):
        s = scale[leaf] * np.sqrt(v[leaf] * k / (k + n[leaf] / v[leaf]))
        z = -np.abs(m[leaf]) / s
        voc = s * (z * norm.cdf(z) + norm.pdf(z))
        return np.maximum(voc, 0.0), np.zeros(len(k))

    return voc_at


def test_chord_bound_and_golden_section_agree_with_brute_force():
    rng = np.random.default_rng(7)
    n_leaves, remaining = 60, 3000
    m, v = rng.exponential(size=n_leaves), 10 ** rng.uniform(-1, 1, n_leaves)
    n = v * 10 ** rng.uniform(-2, 4, n_leaves)
    f = spread_voc(m, np.ones(n_leaves), v, n)
    leaf = np.repeat(np.arange(n_leaves), remaining)
    k = np.tile(np.arange(1, remaining + 1), n_leaves)
    best, first = brute(f(leaf, k)[0].reshape(n_leaves, remaining))
    asked = {}
    for name, options in {
        "chord": {"noise_ratio": n / v},
        "golden": {"single_peak": True},
        "bounds only": {},
    }.items():
        calls = []

        def counted(leaf, k, calls=calls):
            calls.append(len(leaf))
            return f(leaf, k)

        rate, batch, _ = best_batch(counted, n_leaves, remaining, **options)
        assert np.all(rate >= best * (1 - REL_TOL)), name
        assert np.all(np.abs(batch - first) <= 1 + 1e-3 * first), name
        asked[name] = sum(calls) / n_leaves
    assert asked["chord"] < 40
    assert asked["golden"] < 40
    assert asked["bounds only"] < 400


@pytest.mark.parametrize("single_peak", [False, True])
def test_nothing_left_one_left_and_nothing_to_gain(single_peak):
    def zero(_leaf, k):
        return np.zeros(len(k)), np.zeros(len(k))

    rate, batch, error = best_batch(zero, 2, 0, single_peak=single_peak)
    assert rate.tolist() == [0, 0]
    assert batch.tolist() == [0, 0]
    assert error.tolist() == [0, 0]
    for remaining in (1, 2, 100, 2**53):
        rate, batch, error = best_batch(zero, 2, remaining, single_peak=single_peak)
        assert rate.tolist() == [0, 0]
        assert batch.tolist() == [1, 1]
        assert error.tolist() == [0, 0]


@pytest.mark.parametrize("start", [1, 2, 3, 10, 10**6, 2**52, 2**53])
@pytest.mark.parametrize("single_peak", [False, True])
def test_a_single_step_is_found_wherever_it_is(start, single_peak):
    """VOC 0 below `start`, 1 from there: the rate is 1 / start, at the very step."""

    def step(_leaf, k):
        return (k >= start).astype(float), np.zeros(len(k))

    rate, batch, error = best_batch(step, 1, 2**53, single_peak=single_peak)
    assert batch[0] == start or (not single_peak and rate[0] * start >= 1 - REL_TOL)
    assert abs(rate[0] - 1 / start) <= error[0] + CLOSED_FORM / start


def test_smooth_peak_with_a_huge_budget_is_certified():
    m, v, n = np.array([3.0]), np.array([1.0]), np.array([1e9])
    f = spread_voc(m, np.ones(1), v, n)
    dense, chord, error = best_batch(f, 1, 2**53, noise_ratio=n / v)
    golden, batch, _ = best_batch(f, 1, 2**53, single_peak=True)
    assert error[0] <= RELATIVE_TAIL * dense[0]
    assert abs(dense[0] - golden[0]) <= REL_TOL * golden[0]
    assert 1e8 < batch[0] < 1e10
    assert abs(chord[0] / batch[0] - 1) < 1e-2


def test_giving_up_is_admitted_in_the_error():
    k = np.arange(1, 10**5 + 1)
    table = (k**0.999)[None, :] * (1 + 0.5 * (k > 10**4))
    counted = Counted(table)
    rate, _, error = best_batch(counted, 1, 10**5, max_evaluations=8)
    best, _ = brute(table)
    assert counted.asked <= 8 + 16
    assert rate[0] + error[0] >= best[0]
    assert error[0] > 0


def test_errors_of_the_pricing_reach_the_rate():
    table = np.array([[0.0, 0.0, 3.0, 3.1, 3.2]])
    rate, batch, error = best_batch(Counted(table, err=0.3), 1, 5)
    assert (rate[0], batch[0]) == (1.0, 3)
    assert error[0] >= 0.3 / 3
    # k = 1 was priced 0 with a bound of 0.3, far below the rate: it adds nothing.
    assert error[0] <= 0.3 + CLOSED_FORM
