"""Exact win/loss VOC at finite horizons: joint enumeration in fractions, limits, properties, refusals."""

from __future__ import annotations

from fractions import Fraction

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, RELATIVE_TAIL
from win_loss_builders import arms, change, random_tree

from distill.beta_numerics import beta_binomial_law
from distill.errors import RefusedError
from distill.exact.win_loss import price
from distill.exact.win_loss_horizon import price_horizon
from distill.oracle import win_loss as oracle
from distill.query import Query, scale_of


@pytest.mark.parametrize("seed", range(30))
def test_agrees_with_joint_enumeration(seed):
    rng = np.random.default_rng(seed)

    def draw() -> list[float]:
        return rng.integers(1, 6, 2).tolist() if seed % 2 else np.exp(rng.normal(0, 1.2, 2)).tolist()

    tree = arms(*[[tuple(draw()) for _ in range(rng.integers(1, 3))] for _ in range(2)])
    h, k = int(rng.integers(1, 4)), int(rng.integers(1, 5))
    priced = price(tree, Query(horizon=h, batch=k))
    assert priced.value == pytest.approx([float(v) for v in oracle.value_now(tree, h)], rel=CLOSED_FORM)
    for i in range(tree.n_leaves):
        miss = abs(priced.voc[i] - oracle.voc(tree, h, i, k))
        assert miss <= CLOSED_FORM * scale_of(tree)
        assert miss <= priced.error[i]


def test_agrees_with_joint_enumeration_below_rewards_and_discounts():
    for seed in (0, 1, 5, 7):
        tree = random_tree(np.random.default_rng(seed), chance=False)
        if tree.n_leaves > 6:
            continue
        priced = price(tree, Query(horizon=1, batch=2))
        for i in range(tree.n_leaves):
            assert abs(priced.voc[i] - oracle.voc(tree, 1, i, 2)) <= CLOSED_FORM * scale_of(tree)


@pytest.mark.parametrize(
    ("a", "b"), [(1.0, 1.0), (0.3, 0.2), (0.5, 7.0), (9.0, 0.4), (1e-300, 1e-300), (3e3, 50.0)]
)
@pytest.mark.parametrize("k", [0, 1, 2, 13, 200])
def test_law_of_wins_is_relatively_accurate(a, b, k):
    law = beta_binomial_law(a, b, k)
    with mpmath.workdps(40):
        for x in {0, k // 3, k // 2, k // 2 + 1, k} & set(range(k + 1)):
            truth = (
                mpmath.binomial(k, x)
                * mpmath.rf(a, x)
                * mpmath.rf(b, k - x)
                / mpmath.rf(mpmath.mpf(a) + b, k)
            )
            assert abs(law[x] / truth - 1) <= CLOSED_FORM if truth > 1e-300 else law[x] <= 1e-290


@pytest.mark.parametrize("seed", range(6))
def test_horizon_0_is_static(seed):
    tree = random_tree(np.random.default_rng(seed), chance=False)
    for query in (Query(horizon=0, batch=4), Query(horizon=0, batch=None, remaining=30)):
        assert price_horizon(tree, query).voc == pytest.approx(
            price(tree, query).voc, rel=RELATIVE_TAIL, abs=CLOSED_FORM * scale_of(tree)
        )


def test_long_horizon_nears_the_dynamic_value():
    """Posterior means fill the unit interval like 1/h."""
    tree = arms([(3, 2), (1.5, 1)], [(2, 1.5), (1, 1)])
    dynamic = price(tree, Query(batch=3))
    misses = []
    for h in (50, 500, 5000):
        priced = price(tree, Query(horizon=h, batch=3))
        misses.append(np.abs(priced.voc - dynamic.voc).max())
        assert np.abs(priced.value - dynamic.value).max() < 1 / h
        assert misses[-1] < 1 / h
    assert misses[2] < misses[0] / 20


def test_rate_is_the_largest_over_every_batch():
    tree = arms([(3, 2), (1.5, 1)], [(2, 1.5), (1, 1)], [(6, 3)])
    rates = np.array([price(tree, Query(horizon=5, batch=k)).voc / k for k in range(1, 41)])
    priced = price(tree, Query(horizon=5, batch=None, remaining=40))
    assert priced.voc == pytest.approx(rates.max(axis=0), rel=CLOSED_FORM)
    assert priced.batch.tolist() == (rates.argmax(axis=0) + 1).tolist()


def test_search_and_enumeration_give_the_same_rate():
    """Above 200 rollouts left the rate is searched with a certificate."""
    tree = arms([(3, 2), (1.5, 1)], [(2, 1.5), (1, 1)], [(6, 3)])
    every, searched = (price(tree, Query(horizon=5, batch=None, remaining=n)) for n in (200, 600))
    assert searched.voc == pytest.approx(every.voc, rel=RELATIVE_TAIL)


def test_one_action_still_gains():
    """Trials added to h others improve the choice that is left, whatever the root action."""
    tree = arms([(1, 1), (1, 1)])
    priced = price(tree, Query(horizon=2, batch=3))
    assert priced.voc[0] == pytest.approx(oracle.voc(tree, 2, 0, 3), rel=CLOSED_FORM)
    assert priced.voc[0] > 0


def test_rise_keeps_relative_accuracy():
    """A leaf far behind in the only action: the gain of more trials is tiny and right."""
    tree = arms([(1, 12), (12, 2)])
    priced = price(tree, Query(horizon=2, batch=60))
    truth = oracle.voc(tree, 2, 0, 60)
    assert 0 < truth < 1e-12
    assert priced.voc[0] == pytest.approx(truth, rel=RELATIVE_TAIL, abs=0)


exponents = st.one_of(st.integers(1, 40).map(float), st.floats(0.05, 60))
bushes = st.lists(st.lists(st.tuples(exponents, exponents), min_size=1, max_size=3), min_size=1, max_size=3)


@settings(deadline=None, max_examples=40, derandomize=True)
@given(
    actions=bushes,
    h=st.integers(1, 20),
    k=st.integers(1, 30),
    up=st.floats(-1e3, 1e3),
    times=st.floats(1e-6, 1e6),
)
def test_horizon_properties(actions, h, k, up, times):
    tree = arms(*actions)
    query = Query(horizon=h, batch=k)
    plain = price(tree, query)
    scale = scale_of(tree)
    assert np.all(plain.voc >= 0)
    assert np.all(np.isfinite(plain.voc))
    assert np.all(np.isfinite(plain.error))
    more = price(tree, Query(horizon=h, batch=k + 1))
    assert np.all(more.voc >= plain.voc - plain.error - more.error)
    shifted = price(change(tree, low=tree.low + up, high=tree.high + up), query)
    assert np.all(np.abs(shifted.voc - plain.voc) <= shifted.error + plain.error + CLOSED_FORM * scale)
    scaled = price(change(tree, low=tree.low * times, high=tree.high * times), query)
    assert scaled.voc == pytest.approx(plain.voc * times, rel=RELATIVE_TAIL, abs=CLOSED_FORM * scale * times)
    turned = price(arms(*[leaves[::-1] for leaves in actions[::-1]]), query)
    assert turned.voc[::-1] == pytest.approx(plain.voc, rel=RELATIVE_TAIL, abs=CLOSED_FORM * scale)


def test_extremes_are_finite_and_bounded():
    tree = arms(
        [(1e6, 1e6), (1e-3, 1e-3), (0.5, 1e5)],
        [(1.0, 1e6, -1e12, 1e12), (5.0, 1.0, 0.0, 1e-12)],
        [(1e15, 1.0), (1e-300, 1.0), (2.0, 2.0, 0.5, 0.5 + 1e-15)],
    )
    for query in (Query(horizon=3), Query(horizon=1, batch=1000), Query(horizon=7, batch=None, remaining=50)):
        priced = price(tree, query)
        for column in (priced.voc, priced.error):
            assert np.all(np.isfinite(column))
            assert np.all(column >= 0)


def test_too_many_outcomes_are_refused_by_name():
    tree = arms([(1, 1), (1, 1)], [(2, 1)])
    for query in (
        Query(horizon=10**6),
        Query(horizon=3, batch=2**53),
        Query(horizon=3, batch=None, remaining=2**40),
    ):
        with pytest.raises(RefusedError, match="horizon"):
            price(tree, query)


def test_published_pair_of_uniform_arms():
    """h = 1 at both of two uniform arms: E max of two draws from {1/3, 2/3} is 7/12."""
    value = price(arms([(1, 1), (1, 1)]), Query(horizon=1)).value[0]
    assert value == pytest.approx(float(Fraction(7, 12)), rel=CLOSED_FORM)
