"""The dispatcher: which method prices what, tolerances, and the laws that every exact VOC obeys."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from builders import bush, chance_record, flat_record, win_loss_record
from flat_trees import HORIZONS, deep_tree, mixed_bush, scaled, shifted
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, QUADRATURE, RELATIVE_TAIL

from distill import voc
from distill.errors import RefusedError, ToleranceError
from distill.query import Query, scale_of
from distill.record import from_record, to_record
from distill.tree import BeliefTree

LAW = settings(deadline=None, max_examples=40, derandomize=True)
SEEDS = st.integers(0, 2**32)
horizons = st.sampled_from(HORIZONS)


def price(tree, horizon=math.inf, batch=1, **more):
    return voc.price(tree, Query(horizon, batch, **more))


@pytest.mark.parametrize(
    ("record", "horizon", "method"),
    [
        (flat_record(), 0.0, "static independent, closed form"),
        (flat_record(), 2.0, "independent maximum, quadrature"),
        (flat_record(), math.inf, "independent maximum, quadrature"),
        (chance_record(), 0.0, "static independent, closed form"),
    ],
)
def test_names_the_method(record, horizon, method):
    assert price(from_record(record), horizon).method == method


@pytest.mark.parametrize(
    ("record", "horizon", "module"),
    [
        (chance_record(), math.inf, "dynamic_chance"),
        (flat_record(var=None, cov=np.eye(3).tolist()), 0.0, "static_dense"),
        (flat_record(var=None, cov=np.eye(3).tolist()), math.inf, "dynamic_dense"),
        (win_loss_record(), math.inf, "win_loss"),
        (win_loss_record(), 0.0, "win_loss"),
    ],
)
def test_sends_each_case_to_its_module_and_refuses_by_name_without_it(monkeypatch, record, horizon, module):
    tree = from_record(record)
    asked = []

    def find(name):
        asked.append(name)

    monkeypatch.setattr(voc.importlib.util, "find_spec", find)
    with pytest.raises(RefusedError, match="not priced exactly yet"):
        price(tree, horizon)
    assert asked == [f"distill.exact.{module}"]


def test_a_tolerance_is_kept_or_refused_by_name():
    tree = from_record(flat_record())
    bounds = price(tree, 3.0).error / scale_of(tree)
    assert np.array_equal(price(tree, 3.0, tolerance=float(bounds.max())).voc, price(tree, 3.0).voc)
    with pytest.raises(
        ToleranceError, match=r"independent maximum.*error bound .* of leaf \d exceeds .* of scale"
    ):
        price(tree, 3.0, tolerance=float(bounds.max()) / 2)
    with pytest.raises(ToleranceError, match="static independent"):
        voc.price_many([tree], Query(0.0, tolerance=1e-30))
    sure = bush([[0.0], [1.0]], [[0.0], [0.0]])  # scale 0: an error of 0 meets every tolerance
    assert price(sure, tolerance=1e-30).voc.tolist() == [0, 0]


def test_many_trees_come_back_in_order():
    rng = np.random.default_rng(0)
    trees = [deep_tree(rng, chance=i % 3 == 0) for i in range(9)]
    together = voc.price_many(trees, Query(0.0, 2))
    for tree, priced in zip(trees, together, strict=True):
        assert np.array_equal(priced.voc, price(tree, 0.0, 2).voc)
    flat = [mixed_bush(rng) for _ in range(3)]
    for tree, priced in zip(flat, voc.price_many(flat, Query()), strict=True):
        assert np.array_equal(priced.voc, price(tree).voc)


def slack(tree):
    return QUADRATURE * scale_of(tree)


@LAW
@given(SEEDS, horizons, st.sampled_from([1, 3, 40]))
def test_adding_a_constant_to_every_total_changes_nothing(seed, horizon, k):
    tree = deep_tree(np.random.default_rng(seed))
    moved, still = price(shifted(tree, 37.5), horizon, k), price(tree, horizon, k)
    assert np.max(np.abs(moved.voc - still.voc)) <= slack(tree)
    assert np.max(np.abs(moved.value - 37.5 - still.value)) <= 1e-13 * (37.5 + np.abs(still.value).max())


@LAW
@given(SEEDS, horizons, st.floats(1e-6, 1e6))
def test_scaling_utilities_scales_everything(seed, horizon, by):
    tree = deep_tree(np.random.default_rng(seed))
    large, plain = price(scaled(tree, by), horizon), price(tree, horizon)
    assert np.max(np.abs(large.voc - by * plain.voc)) <= by * slack(tree)
    exact = price(scaled(tree, 1024.0), horizon)
    assert np.array_equal(exact.voc, 1024.0 * plain.voc)


@LAW
@given(SEEDS, horizons)
def test_relabelling_siblings_permutes(seed, horizon):
    """Depth-first order with every node's children reversed."""
    tree = deep_tree(np.random.default_rng(seed))
    record = to_record(tree)
    children = [[c for c, p in enumerate(record["parent"]) if p == node] for node in range(tree.n_nodes)]
    order, stack = [], [0]
    while stack:
        node = stack.pop()
        order.append(node)
        stack.extend(children[node])  # popped from the end: last child first
    place = {node: i for i, node in enumerate(order)}
    columns = {
        k: [v[node] for node in order] for k, v in record.items() if isinstance(v, list) and k != "parent"
    }
    parent = [-1] + [place[record["parent"][node]] for node in order[1:]]
    turned = from_record({**record, **columns, "parent": parent})
    leaf_of = {int(node): i for i, node in enumerate(tree.leaf_nodes)}
    moved = [leaf_of[order[node]] for node in turned.leaf_nodes]
    assert np.max(np.abs(price(turned, horizon).voc - price(tree, horizon).voc[moved])) <= slack(tree)


@LAW
@given(SEEDS, horizons)
def test_voc_is_not_negative_never_falls_with_the_batch_and_ends_at_perfect_information(seed, horizon):
    tree = deep_tree(np.random.default_rng(seed))
    batches = [1, 2, 3, 10, 100, 10**4, 10**8, 2**53]
    priced = [price(tree, horizon, k) for k in batches]
    for less, more in itertools.pairwise(priced):
        assert np.all(less.voc >= 0)
        assert np.all(more.voc >= less.voc - less.error - more.error)
    assert np.all(priced[-1].voc <= scale_of(tree))
    if horizon == math.inf:
        assert np.array_equal(priced[-1].voc[tree.var == 0], np.zeros(np.count_nonzero(tree.var == 0)))


@LAW
@given(SEEDS, st.sampled_from([0.0, math.inf]))
def test_noise_without_end_leaves_nothing_to_learn(seed, horizon):
    tree = mixed_bush(np.random.default_rng(seed))
    noisy = BeliefTree(**{**vars(tree), "noise_var": tree.noise_var * 1e30})
    assert np.all(price(noisy, horizon).voc <= 1e-12 * scale_of(tree))


@LAW
@given(SEEDS)
def test_a_vanishing_horizon_is_static_and_a_vast_one_dynamic(seed):
    tree = deep_tree(np.random.default_rng(seed))
    static, dynamic = price(tree, 0.0, 3), price(tree, math.inf, 3)
    # Spreads now are of order sqrt(h): 1e-13 and less of the scale.
    assert np.max(np.abs(price(tree, 1e-26, 3).voc - static.voc)) <= slack(tree)
    assert np.max(np.abs(price(tree, 1e14, 3).voc - dynamic.voc)) <= slack(tree)
    assert np.max(np.abs(price(tree, 1e14).value - dynamic.value)) <= slack(tree)


@LAW
@given(SEEDS, horizons)
def test_one_action_leaves_no_choice_now(seed, horizon):
    """V_inf cannot change in expectation; at a finite horizon a batch still helps the later choice."""
    tree = mixed_bush(np.random.default_rng(seed))
    first = [i for i in range(tree.n_leaves) if tree.parent[tree.leaf_nodes[i]] == tree.action_nodes[0]]
    alone = bush([tree.mean[first].tolist()], [tree.var[first].tolist()], float(tree.noise_var[0]))
    priced = price(alone, horizon)
    if horizon == math.inf:
        assert priced.voc.tolist() == [0] * len(first)
    assert np.all(priced.voc[alone.var == 0] == 0)


@LAW
@given(SEEDS, st.sampled_from([0.0, 2.0, math.inf]), st.integers(1, 30))
def test_a_rate_is_no_less_than_any_batch_within_reach(seed, horizon, remaining):
    tree = mixed_bush(np.random.default_rng(seed))
    rate = voc.price(tree, Query(horizon, None, remaining))
    for k in {1, max(1, remaining // 2), remaining}:
        one = price(tree, horizon, k)
        assert np.all(rate.voc >= (one.voc - one.error) / k - rate.error - RELATIVE_TAIL * rate.voc)
    again = np.array([price(tree, horizon, int(k)).voc[i] / k for i, k in enumerate(rate.batch)])
    assert np.max(np.abs(again - rate.voc)) <= CLOSED_FORM * scale_of(tree)
