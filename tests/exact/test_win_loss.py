"""Exact win/loss VOC, static: published fractions, the oracle, tails, properties, extremes."""

from __future__ import annotations

import json
import math
from fractions import Fraction
from functools import cache
from pathlib import Path

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, LONG_WALK, QUADRATURE, RELATIVE_TAIL
from win_loss_builders import arms, change, random_tree

from distill.errors import InputError
from distill.exact.trial_walk import crossing_gain, crossing_limit, first_crossing
from distill.exact.win_loss import price
from distill.oracle import win_loss as oracle
from distill.query import Query, scale_of

PUBLISHED = json.loads((Path(__file__).parents[1] / "data" / "published_win_loss.json").read_text())[
    "entries"
]
STATIC = Query(horizon=0)


def published(*prefixes: str) -> list[object]:
    return [pytest.param(e, id=e["id"]) for e in PUBLISHED if e["id"].startswith(prefixes)]


def sure(c: float) -> list[tuple[float, ...]]:
    """An action whose static value is exactly c."""
    return [(1.0, 1.0, c - 0.25, c + 0.25)]


@pytest.mark.parametrize("entry", published("static_beta11"))
def test_published_worth_of_n_samples(entry):
    got = price(arms([(1, 1)], sure(0.5)), Query(horizon=0, batch=entry["inputs"]["n"])).voc[0]
    assert got == pytest.approx(float(Fraction(entry["exact"])), rel=CLOSED_FORM)


@pytest.mark.parametrize("entry", [p for p in published("static_beta") if "c" in p.values[0]["inputs"]])
def test_published_worth_of_one_sample_is_nothing(entry):
    inputs = entry["inputs"]
    priced = price(arms([(inputs["a"], inputs["b"])], sure(float(Fraction(inputs["c"])))), STATIC)
    assert Fraction(entry["exact"]) == 0
    assert priced.voc[0] <= priced.error[0] <= CLOSED_FORM


@pytest.mark.parametrize("entry", published("bestarm2", "bestarm3"))
def test_published_best_arm_after_n_free_samples(entry):
    """Dynamic programming over the samples, the last of them priced as static VOC."""
    n_arms = int(entry["id"][7])

    @cache
    def best(state: tuple[tuple[int, int], ...], left: int) -> float:
        if left == 1:
            priced = price(arms(*[[s] for s in state]), STATIC)
            return float(priced.value.max() + priced.voc.max())
        values = []
        for i, (a, b) in enumerate(state):
            rest = state[:i] + state[i + 1 :]
            win, loss = tuple(sorted((*rest, (a + 1, b)))), tuple(sorted((*rest, (a, b + 1))))
            values.append((a * best(win, left - 1) + b * best(loss, left - 1)) / (a + b))
        return max(values)

    got = best(((1, 1),) * n_arms, entry["inputs"]["N"])
    assert got == pytest.approx(float(Fraction(entry["exact"])), rel=CLOSED_FORM)


@pytest.mark.parametrize("entry", published("metalevel"))
def test_published_stopping_with_cost(entry):
    """One more sample is taken while its VOC, or what can follow it, beats its price."""
    cost = float(Fraction(entry["inputs"]["cost"]))

    @cache
    def best(a: int, b: int, left: int) -> float:
        stop = max(a / (a + b), 0.5)
        if left == 1:
            return stop + max(0.0, float(price(arms([(a, b)], sure(0.5)), STATIC).voc[0]) - cost)
        go = (a * best(a + 1, b, left - 1) + b * best(a, b + 1, left - 1)) / (a + b) - cost
        return max(stop, go)

    assert best(1, 1, entry["inputs"]["N"]) == pytest.approx(float(Fraction(entry["exact"])), rel=CLOSED_FORM)


@pytest.mark.parametrize("seed", range(40))
def test_agrees_with_enumeration_on_any_tree(seed):
    rng = np.random.default_rng(seed)
    tree = random_tree(rng, whole=seed % 4 == 0)
    k = int(rng.integers(1, 12))
    priced = price(tree, Query(horizon=0, batch=k))
    assert priced.value == pytest.approx([float(v) for v in oracle.value_now(tree, 0)], rel=CLOSED_FORM)
    for i in range(tree.n_leaves):
        truth = oracle.voc(tree, 0, i, k)
        assert abs(priced.voc[i] - truth) <= min(priced.error[i], CLOSED_FORM * scale_of(tree))


@pytest.mark.parametrize("seed", range(8))
def test_rate_is_the_largest_over_every_batch(seed):
    rng = np.random.default_rng(seed)
    tree = random_tree(rng, whole=seed % 2 == 0)
    remaining = 40
    rates = np.array([price(tree, Query(horizon=0, batch=k)).voc / k for k in range(1, remaining + 1)])
    priced = price(tree, Query(horizon=0, batch=None, remaining=remaining))
    assert priced.voc == pytest.approx(rates.max(axis=0), rel=CLOSED_FORM, abs=0)
    for i in range(tree.n_leaves):
        assert rates[priced.batch[i] - 1, i] == pytest.approx(priced.voc[i], rel=CLOSED_FORM, abs=0)
        assert np.all(rates[: priced.batch[i] - 1, i] < priced.voc[i]) or priced.voc[i] == 0
        assert priced.voc[i] > 0 or priced.batch[i] == 1


def test_second_trial_adds_nothing_and_the_third_does():
    """VOC(k)/k has several peaks: parity decides which batches can change the choice."""
    tree = arms([(1, 1)], sure(0.5))
    one, two, three = (price(tree, Query(horizon=0, batch=k)).voc[0] for k in (1, 2, 3))
    assert one == two < three


@pytest.mark.parametrize(
    ("a", "b", "c", "k"),
    [
        (1.5, 80.0, 0.6, 150),
        (200.0, 3.0, 0.5, 400),
        (1e3, 1e3, 0.7, 5000),
        (1e-3, 3.0, 0.9, 60),
        (0.02, 500.0, 0.2, 200),
    ],
)
def test_tails_keep_relative_accuracy(a, b, c, k):
    """Against the plain sum at 40 digits."""
    with mpmath.workdps(40):
        a_, b_, c_ = mpmath.mpf(a), mpmath.mpf(b), mpmath.mpf(c)
        above = a_ / (a_ + b_) >= c_
        log_odds = -mpmath.log(mpmath.beta(a_, b_))
        truth = mpmath.mpf(0)
        for x in range(k + 1):
            away = (a_ + x) / (a_ + b_ + k) - c_
            if (away < 0) == above:
                truth += (
                    mpmath.exp(log_odds) * mpmath.binomial(k, x) * mpmath.beta(a_ + x, b_ + k - x) * abs(away)
                )
        got = crossing_gain(a, b, c, k)
        assert 0 < truth < 1e-3
        assert abs(got / truth - 1) < 1e-2 * RELATIVE_TAIL


def test_limit_and_first_crossing_bound_the_walk():
    rng = np.random.default_rng(5)
    for _ in range(200):
        a, b = np.exp(rng.normal(1, 2, 2))
        c, k = rng.uniform(0.01, 0.99), int(rng.integers(1, 300))
        gain = crossing_gain(a, b, c, k)
        limit, first = crossing_limit(*np.array([[a], [b], [c]])), first_crossing(*np.array([[a], [b], [c]]))
        assert gain <= limit[0]
        assert crossing_gain(a, b, c, 200_000) == pytest.approx(limit[0], rel=LONG_WALK) or limit[0] < 1e-6
        assert gain == 0 or first[0] <= k


beliefs = st.tuples(st.floats(0.05, 50), st.floats(0.05, 50))
bushes = st.lists(st.lists(beliefs, min_size=1, max_size=3), min_size=1, max_size=3)


@settings(deadline=None, max_examples=60, derandomize=True)
@given(actions=bushes, k=st.integers(1, 30), up=st.floats(-1e3, 1e3), times=st.floats(1e-6, 1e6))
def test_static_properties(actions, k, up, times):
    query = Query(horizon=0, batch=k)
    tree = arms(*actions)
    plain = price(tree, query)
    scale = scale_of(tree)
    assert np.all(plain.voc >= 0)
    assert np.all(np.isfinite(plain.voc))
    assert np.all(np.isfinite(plain.error))
    assert np.all(price(tree, Query(horizon=0, batch=k + 1)).voc >= plain.voc - plain.error)
    if len(actions) == 1 and len(actions[0]) == 1:
        assert np.all(plain.voc == 0)
    shifted = price(change(tree, low=tree.low + up, high=tree.high + up), query)
    assert np.all(np.abs(shifted.voc - plain.voc) <= shifted.error + plain.error + CLOSED_FORM * scale)
    scaled = price(change(tree, low=tree.low * times, high=tree.high * times), query)
    assert scaled.voc == pytest.approx(plain.voc * times, rel=QUADRATURE, abs=CLOSED_FORM * scale * times)
    turned = price(arms(*[leaves[::-1] for leaves in actions[::-1]]), query)
    assert turned.voc[::-1] == pytest.approx(plain.voc, rel=QUADRATURE, abs=CLOSED_FORM * scale)


def test_extremes_are_finite_and_bounded():
    tree = arms(
        [(1e15, 1e15), (1e-3, 1e-3)], [(1.0, 1e6, -1e12, 1e12), (5.0, 1.0, 0.0, 1e-12)], [(2**53, 1.0)]
    )
    for k in (1, 10_000, 2**53):
        for query in (Query(horizon=0, batch=k), Query(horizon=0, batch=None, remaining=k)):
            priced = price(tree, query)
            assert np.all(np.isfinite(priced.voc))
            assert np.all(priced.voc >= 0)
            assert np.all(np.isfinite(priced.error))
            assert np.all(priced.error >= 0)


def test_no_rollouts_left_gives_rate_0_batch_0():
    priced = price(arms([(1, 1)], [(1, 1)]), Query(horizon=0, batch=None, remaining=0))
    assert priced.voc.tolist() == [0, 0]
    assert priced.batch.tolist() == [0, 0]


def test_endless_budget_is_certified():
    """The rate of a fresh leaf is found long before 2^53 trials, and without an error for the rest."""
    priced = price(arms([(1, 1)], [(2, 2)]), Query(horizon=0, batch=None, remaining=2**53))
    near = price(arms([(1, 1)], [(2, 2)]), Query(horizon=0, batch=None, remaining=100))
    assert priced.voc.tolist() == near.voc.tolist()
    assert np.all(priced.error < CLOSED_FORM)


@pytest.mark.parametrize("h", [0.5, 1.25])
def test_horizon_must_be_whole(h):
    with pytest.raises(InputError, match="whole"):
        price(arms([(1, 1)], [(1, 1)]), Query(horizon=h))


def test_one_action_is_worth_nothing_whatever_happens():
    assert math.isclose(price(arms([(1, 1), (2, 1)]), STATIC).voc.sum(), 0.0)
