"""Dynamic and finite-horizon VOC of flat trees: oracle, 80-bit reference, properties of rates, extremes."""

from __future__ import annotations

import math

import numpy as np
import pytest
from builders import bush, chance_record, flat_record
from flat_trees import HORIZONS, close_call, deep_tree, mixed_bush, shifted
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, QUADRATURE, RELATIVE_TAIL, ROUNDINGS
from long_normal import voc as long_voc

from distill.errors import RefusedError
from distill.exact import dynamic_flat, static_independent
from distill.oracle import independent
from distill.query import Query, scale_of
from distill.record import from_record

BATCHES = (1, 1, 4, 50, 10**6)


def price(tree, query):
    return dynamic_flat.price(tree, query)


def draw(seed):
    """A tree, a horizon above 0, a batch, and an uncertain leaf."""
    rng = np.random.default_rng(seed)
    make = (mixed_bush, close_call, deep_tree)[seed % 3]
    tree = make(rng)
    while not np.any(tree.var > 0):
        tree = make(rng)
    horizon = HORIZONS[1 + seed // 6 % 4] if seed % 2 else math.inf
    return tree, horizon, BATCHES[int(rng.integers(5))], int(rng.choice(np.flatnonzero(tree.var > 0)))


def check_against_oracle(seed):
    tree, horizon, k, leaf = draw(seed)
    priced = price(tree, Query(horizon, k))
    scale = scale_of(tree)
    assert np.max(np.abs(priced.value - independent.action_values(tree, horizon))) <= QUADRATURE * scale
    assert abs(priced.voc[leaf] - independent.voc(tree, leaf, k, horizon)) <= QUADRATURE * scale


def check_against_80_bits(seed):
    """Returns (the error over its bound, the error over the VOC)."""
    tree, horizon, k, leaf = draw(seed)
    priced = price(tree, Query(horizon, k))
    scale = scale_of(tree)
    with np.errstate(all="ignore"):
        exact = long_voc(tree, leaf, k, horizon)
    error = abs(np.longdouble(priced.voc[leaf]) - exact)
    assert error <= CLOSED_FORM * scale
    if exact > 1e-30 * scale:
        assert error <= RELATIVE_TAIL * exact
    return float(error / priced.error[leaf]) if priced.error[leaf] > 0 else float(error > 0), float(
        exact / scale
    )


@pytest.mark.parametrize("first", range(0, 160, 20))
def test_agrees_with_the_oracle(first):
    for seed in range(first, first + 20):
        check_against_oracle(seed)


@pytest.mark.slow
@pytest.mark.parametrize("first", range(160, 700, 20))
def test_agrees_with_the_oracle_on_500_more_trees(first):
    for seed in range(first, first + 20):
        check_against_oracle(seed)


def test_relative_accuracy_and_bounds_against_80_bit_arithmetic():
    shares = [check_against_80_bits(seed)[0] for seed in range(1000, 1004)]
    assert max(shares) <= 1


@pytest.mark.slow
def test_bounds_cover_and_are_not_wide():
    """They cover at least 99.9 %, and above 1e-30 of scale are at most 100 times too wide in the median."""
    shares = [check_against_80_bits(seed) for seed in range(2000, 2300)]
    assert np.mean([s <= 1 for s, _ in shares]) >= 0.999
    assert np.median([s for s, size in shares if size > 1e-30]) >= 0.01


@pytest.mark.parametrize("horizon", [0.3, 3.0, math.inf])
def test_single_leaves_are_static(horizon):
    """Where every action is one leaf, no later choice is left: V_h = mean for every h."""
    tree = bush([[0.0], [0.3], [-0.5]], [[1.0], [2.0], [0.1]], noise_var=1.7)
    flat, static = price(tree, Query(horizon, 3)), static_independent.price(tree, Query(0.0, 3))
    assert np.max(np.abs(flat.voc / static.voc - 1)) <= CLOSED_FORM
    assert np.array_equal(flat.value, static.value)


def test_one_action_is_worth_nothing_unless_later_choices_profit():
    tree = bush([[0.0, 0.3, 1.0]], [[1.0, 2.0, 0.0]])
    assert price(tree, Query()).voc.tolist() == [0, 0, 0]
    assert price(tree, Query()).error.tolist() == [0, 0, 0]
    finite = price(tree, Query(2.0, 3))
    assert np.all(finite.voc[:2] > 0)
    rise = independent.voc(tree, 0, 3, 2.0)
    assert abs(finite.voc[0] - rise) <= QUADRATURE * scale_of(tree)
    assert price(bush([[0.5]], [[1.0]]), Query(2.0)).voc.tolist() == [0]


def test_a_finite_horizon_has_several_peaks_and_the_highest_is_found():
    tree = bush([[0.0, -1.9504], [-1.7740]], [[1.0, 0.0], [0.0]], noise_var=7.95)
    rates = [price(tree, Query(30.0, k)).voc[0] / k for k in range(1, 101)]
    assert [float(f"{rates[k - 1]:.4g}") for k in (1, 5, 24)] == [1.095e-4, 1.043e-4, 1.370e-4]
    best = price(tree, Query(30.0, None, 100))
    assert (best.batch[0], best.voc[0]) == (24, max(rates))
    assert best.error[0] <= RELATIVE_TAIL * best.voc[0]


@pytest.mark.parametrize("seed", range(20))
def test_rate_is_the_best_of_all_whole_batches(seed):
    rng = np.random.default_rng(seed)
    tree = mixed_bush(rng)
    remaining = int(rng.integers(1, 60))
    horizon = math.inf if seed % 4 else 2.0
    rate = price(tree, Query(horizon, None, remaining))
    every = np.array([price(tree, Query(horizon, k)).voc / k for k in range(1, remaining + 1)])
    best = every.max(axis=0)
    assert np.all(np.abs(rate.voc - best) <= RELATIVE_TAIL * best + 1e-36 * scale_of(tree))
    sure = np.sort(every, axis=0)[-2:].min(axis=0) < best * (1 - 1e-6)
    clear = sure & (best > 1e-30 * scale_of(tree)) if remaining > 1 else np.zeros(tree.n_leaves, dtype=bool)
    assert np.array_equal(rate.batch[clear], every.argmax(axis=0)[clear] + 1)


def test_rate_with_2_to_the_53_rollouts_left():
    tree = bush([[0.0, -1.0], [3.0, 2.0]], [[1.0, 0.5], [0.2, 0.1]], noise_var=1e7)
    rate = price(tree, Query(math.inf, None, 2**53))
    k = int(rate.batch[0])
    assert k > 10**5
    around = [max(1, int(k * t)) for t in (0.5, 0.9, 0.99, 1.01, 1.1, 2.0)]
    assert all(price(tree, Query(math.inf, j)).voc[0] / j < rate.voc[0] for j in around)
    none = price(tree, Query(math.inf, None, 0))
    assert none.voc.tolist() == none.batch.tolist() == none.error.tolist() == [0] * 4


@pytest.mark.parametrize("horizon", [2.0, math.inf])
@pytest.mark.parametrize("shift", [1e8, -1e12])
def test_differences_of_large_totals_survive(shift, horizon):
    tree = from_record(flat_record())
    assert np.array_equal(price(shifted(tree, shift), Query(horizon)).voc, price(tree, Query(horizon)).voc)


@pytest.mark.parametrize("gap", [12.0, 50.0])
def test_gaps_of_up_to_50_standard_deviations(gap):
    tree = bush([[0.0, -0.5, 0.2], [gap]], [[1.0, 0.5, 0.1], [0.0]], noise_var=1.0)
    priced = price(tree, Query())
    for leaf in range(3):
        exact = long_voc(tree, leaf, 1)
        assert abs(priced.voc[leaf] - exact) <= max(priced.error[leaf], 5e-324)
        assert abs(priced.voc[leaf] - exact) <= RELATIVE_TAIL * exact or exact < 1e-30


def test_4096_leaves():
    """4,094 equal leaves against two: value from the oracle, VOC as beside a sure value."""
    n = 4094
    tree = bush([[0.0] * n, [3.0, 3.2]], [[1.0] * n, [0.5, 0.2]])
    priced = price(tree, Query())
    most = independent.expected_max([0.0] * n, [1.0] * n)
    assert abs(priced.value[0] - most) <= QUADRATURE
    assert np.ptp(priced.voc[:n]) <= ROUNDINGS
    beside = price(bush([[most], [3.0, 3.2]], [[0.0], [0.5, 0.2]]), Query())
    assert np.max(np.abs(priced.voc[n:] - beside.voc[1:])) <= QUADRATURE


def test_refuses_what_it_does_not_cover():
    with pytest.raises(RefusedError, match="horizons above 0"):
        price(from_record(flat_record()), Query(0.0))
    with pytest.raises(RefusedError, match="under decision nodes"):
        price(from_record(chance_record()), Query())


@settings(deadline=None, max_examples=60, derandomize=True)
@given(
    st.integers(0, 2**32),
    st.sampled_from([1e-300, 1e-12, 1e-3, 1.0, 1e3, 1e12, 1e300, math.inf]),
    st.booleans(),
)
def test_extremes_stay_finite_and_within_their_bound(seed, horizon, rate):
    """12 decades of scale, 8 of sds, means far apart or equal: finite, not negative, error stated small."""
    rng = np.random.default_rng(seed)
    unit = 10.0 ** rng.uniform(-6, 6)
    mean, var = [], []
    for _ in range(int(rng.integers(1, 4))):
        n = int(rng.integers(1, 6))
        mean.append((np.round(rng.normal(size=n), 1) * 10.0 ** rng.choice([-4, 0, 1.7, 3]) * unit).tolist())
        var.append(((10.0 ** rng.uniform(-4, 4, size=n) * (rng.random(n) > 0.2) * unit) ** 2).tolist())
    tree = bush(mean, var, noise_var=float((10.0 ** rng.uniform(-4, 4) * unit) ** 2))
    remaining = 20 if horizon < math.inf else int(rng.choice([1, 100, 2**53]))
    query = Query(horizon, None, remaining) if rate else Query(horizon, int(rng.choice([1, 30, 2**53])))
    priced = price(tree, query)
    scale = scale_of(tree)
    assert np.all(np.isfinite(priced.voc))
    assert np.all(priced.voc >= 0)
    assert np.all(priced.voc <= scale)
    assert np.all(priced.error >= 0)
    assert np.all(priced.error <= QUADRATURE * scale)
    assert np.all(np.isfinite(priced.value))
