"""Static VOC of independent leaves: closed form against arbitrary precision, whole batches, extremes."""

from __future__ import annotations

import math
from fractions import Fraction

import mpmath as mp
import numpy as np
import pytest
from builders import bush, flat_record, win_loss_record
from flat_trees import deep_tree, shifted
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, PUBLISHED, RELATIVE_TAIL, ROUNDINGS

from distill.errors import RefusedError
from distill.exact import double_double as dd
from distill.exact import static_independent
from distill.oracle.dense import static_voc_policies
from distill.query import Query, scale_of
from distill.record import from_record

STATIC = Query(0.0)


def price(tree, query=STATIC):
    return static_independent.price(tree, query)


@pytest.mark.parametrize("seed", range(12))
def test_agrees_with_the_lines_of_all_policies_at_50_digits(seed):
    """Every policy is a line in Z; their upper envelope shares nothing with the one kink."""
    rng = np.random.default_rng(seed)
    tree = deep_tree(rng, depth=2 if seed % 2 else 3, chance=seed % 3 > 0)
    k = int(rng.integers(1, 20))
    priced = price(tree, Query(0.0, k))
    scale = scale_of(tree)
    for leaf in rng.permutation(tree.n_leaves)[:4]:
        exact = static_voc_policies(tree, int(leaf), k)
        error = abs(priced.voc[leaf] - exact)
        assert error <= priced.error[leaf]
        assert error <= CLOSED_FORM * scale
        if exact > 1e-30 * scale:
            assert error <= RELATIVE_TAIL * exact
        assert priced.error[leaf] <= CLOSED_FORM * max(scale, float(exact))


@pytest.mark.parametrize("gap", [0.0, 1e-9, 1.0, 8.0, 15.0, 36.0, 50.0])
def test_keeps_relative_accuracy_over_gaps_of_up_to_50_standard_deviations(gap):
    priced = price(bush([[0.0], [gap]], [[2.0], [0.0]], noise_var=2.0))
    with mp.workdps(60):
        exact = mp.npdf(gap) - gap * mp.erfc(gap / mp.sqrt(2)) / 2
    assert abs(priced.voc[0] - exact) <= priced.error[0]
    assert abs(priced.voc[0] - exact) <= 10 * CLOSED_FORM * exact or exact < 1e-300
    assert priced.voc[1] == priced.error[1] == 0.0


@pytest.mark.parametrize("seed", range(30))
def test_rate_is_the_best_of_all_whole_batches(seed):
    rng = np.random.default_rng(seed)
    tree = deep_tree(rng, chance=seed % 2 > 0)
    remaining = int(rng.integers(1, 120))
    rate = price(tree, Query(0.0, None, remaining))
    every = np.array([price(tree, Query(0.0, k)).voc / k for k in range(1, remaining + 1)])
    assert np.array_equal(rate.batch, every.argmax(axis=0) + 1)
    assert np.array_equal(rate.voc, every.max(axis=0))


@pytest.mark.parametrize("noise", [1e3, 1e9, 1e15])
def test_rate_finds_large_batches(noise):
    """Neighbours and a wide scan around the batch found are no better."""
    tree = bush([[0.0], [3.0]], [[1.0], [0.0]], noise_var=noise)
    rate = price(tree, Query(0.0, None, 2**53))
    k = int(rate.batch[0])
    assert k > 100
    others = {k - 1, k + 1, *(int(k * t) for t in np.geomspace(1e-2, 1e2, 101))} - {k}
    rates = [price(tree, Query(0.0, max(1, min(j, 2**53)))).voc[0] / j for j in others]
    assert max(rates) <= rate.voc[0] * (1 + ROUNDINGS)
    assert min(abs(r - rate.voc[0]) for r in rates) < 1e-3 * rate.voc[0]  # the scan does reach the peak


def test_no_rollouts_left_and_nothing_to_learn():
    tree = bush([[0.0], [3.0]], [[1.0], [0.0]])
    none = price(tree, Query(0.0, None, 0))
    assert none.voc.tolist() == none.batch.tolist() == none.error.tolist() == [0, 0]
    assert price(tree, Query(0.0, None, 50)).batch[1] == 1  # of batches that are all worth 0, the smallest
    assert price(bush([[1.0, 0.5]], [[1.0, 2.0]])).voc.tolist() != [
        0,
        0,
    ]  # one action: later choices still differ
    alone = price(bush([[1.0]], [[1.0]]))
    assert alone.voc.tolist() == [0.0]
    assert alone.value.tolist() == [1.0]


@pytest.mark.parametrize("shift", [1e8, 1e12, -1e12])
def test_differences_of_large_totals_survive(shift):
    """Rewards of 1e12 beside discounts: totals are carried to 32 digits, so not one bit changes."""
    tree = from_record(flat_record(reward=[None, 0.5, 0.0, -0.25, 0.0]))
    moved = price(shifted(tree, shift))
    assert np.array_equal(moved.voc, price(tree).voc)


def test_means_of_1e12_with_discounts_are_exact_to_their_own_digits():
    record = flat_record(mean=[None, None, 1e12, 1e12 + 0.25, 0.9e12 + 0.5])
    priced = price(from_record(record))
    gain = [Fraction(0.9), Fraction(0.9) * Fraction(0.8), Fraction(1.0)]
    offset = [Fraction(1, 2), Fraction(1, 2) - Fraction(0.9) / 4, Fraction(0)]
    total = [g * Fraction(m) + o for g, m, o in zip(gain, record["mean"][2:], offset, strict=True)]
    assert max(total) == total[0]
    gap = float(total[0] - max(total[1:]))
    s = 0.9 * 1.0 / math.sqrt(2.0)
    with mp.workdps(40):
        z = mp.mpf(gap) / mp.mpf(s)
        exact = mp.mpf(s) * (mp.npdf(z) - z * mp.erfc(z / mp.sqrt(2)) / 2)
    assert abs(priced.voc[0] - exact) <= ROUNDINGS + 10 * ROUNDINGS * exact


def test_probabilities_of_1e_minus_12_and_0():
    tree = from_record(
        {
            "format": "belief-tree/1", "parent": [-1, 0, 1, 1, 1, 0],
            "kind": ["decision", "chance", "leaf", "leaf", "leaf", "leaf"],
            "prob": [None, None, 1e-12, 0.0, 1 - 1e-12, None],
            "mean": [None, None, 5.0, 5.0, 1.0, 1.0], "var": [None, None, 1.0, 1.0, 1.0, 0.0],
            "noise_var": [None, None, 1.0, 1.0, 1.0, 1.0],
        }
    )  # fmt: skip
    priced = price(tree)
    s = 1e-12 / math.sqrt(2)
    z = (5e-12 - 1e-12) / s
    with mp.workdps(40):
        exact = s * (mp.npdf(z) - z * mp.erfc(z / mp.sqrt(2)) / 2)
    assert abs(priced.voc[0] - exact) < 1e-3 * exact  # 1 - 1e-12 is rounded in the record itself
    assert priced.voc[1] == 0.0
    assert priced.voc[2] == pytest.approx(0.28209479, abs=PUBLISHED * 1e-8)


def test_large_trees_match_small_ones():
    """4,096 leaves under one root: each leaf against the best of the others."""
    rng = np.random.default_rng(5)
    mean = rng.normal(size=4096)
    tree = bush([[m] for m in mean.tolist()], [[1.0]] * 4096)
    priced = price(tree)
    top = np.sort(mean)[-2:]
    z = np.abs(mean - np.where(mean == top[1], top[0], top[1])) * math.sqrt(2)
    for i in (int(mean.argmax()), 0, 17, 4095):
        assert priced.voc[i] == pytest.approx(
            price(bush([[0.0], [z[i]]], [[2.0], [0.0]], 2.0)).voc[0] / math.sqrt(2)
        )


def test_packed_pricing_is_pricing_one_by_one():
    rng = np.random.default_rng(9)
    trees = [deep_tree(rng, chance=i % 2 > 0) for i in range(40)]
    for query in (STATIC, Query(0.0, 7), Query(0.0, None, 30)):
        for tree, together in zip(trees, static_independent.price_many(trees, query), strict=True):
            alone = price(tree, query)
            for name in ("voc", "batch", "error", "value"):
                assert np.array_equal(getattr(together, name), getattr(alone, name))
    assert static_independent.price_many([], STATIC) == []


def test_refuses_what_it_does_not_cover():
    with pytest.raises(RefusedError, match="horizon 0, not inf"):
        price(from_record(flat_record()), Query())
    with pytest.raises(RefusedError, match="win/loss"):
        price(from_record(win_loss_record()))
    with pytest.raises(RefusedError, match="cov"):
        price(from_record(flat_record(var=None, cov=np.eye(3).tolist())))


@settings(deadline=None, max_examples=60, derandomize=True)
@given(st.floats(-1e50, 1e50), st.floats(-1e-5, 1e-5), st.floats(-1e50, 1e50), st.floats(-1e3, 1e3))
def test_double_double_holds_32_digits(a, b, c, d):
    x, y = Fraction(a) + Fraction(b), Fraction(c) + Fraction(d)
    a_hi, a_lo = dd.add(a, 0.0, b, 0.0)
    c_hi, c_lo = dd.add(c, 0.0, d, 0.0)
    slack = Fraction(1, 2**100)
    hi, lo = dd.add(a_hi, a_lo, c_hi, c_lo)
    assert abs(Fraction(hi) + Fraction(lo) - x - y) <= slack * max(abs(x), abs(y))
    hi, lo = dd.scale(a_hi, a_lo, d)
    assert abs(Fraction(hi) + Fraction(lo) - x * Fraction(d)) <= slack * abs(x * Fraction(d)) + Fraction(
        1, 10**300
    )
