"""What must hold for exact VOC of independent Gaussian leaves, by any method: properties and extremes."""

from __future__ import annotations

import dataclasses
import itertools
import math

import numpy as np
import pytest
from builders import bush, random_bush
from flat_trees import deep_tree, scaled, shifted
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, PUBLISHED, QUADRATURE, RELATIVE_TAIL, ROUNDINGS

from distill import voc
from distill.query import Query, scale_of
from distill.record import from_record, to_record

HORIZONS = st.sampled_from([0.0, 0.3, 8.0, 100.0, math.inf])
BATCHES = st.sampled_from([1, 3, 40])
property_test = settings(max_examples=60, deadline=None, derandomize=True)


@st.composite
def bushes(draw):
    """Trees of unit size with ties, sure leaves, far gaps and 8 decades of variances among them."""
    mean = st.one_of(st.floats(-3, 3), st.sampled_from([0.0, 1.0, -50.0]))
    var = st.one_of(st.floats(1e-2, 4), st.sampled_from([0.0, 1e-8, 1.0]))
    shape = draw(st.lists(st.integers(1, 4), min_size=1, max_size=4))
    means = [[draw(mean) for _ in range(n)] for n in shape]
    variances = [[draw(var) for _ in range(n)] for n in shape]
    assume(any(v > 0 for row in variances for v in row))
    return bush(means, variances, draw(st.sampled_from([0.05, 1.0, 30.0])))


# Beside them uneven trees with rewards, discounts and noise of their own.
TREES = st.one_of(bushes(), st.integers(0, 2**32).map(lambda seed: deep_tree(np.random.default_rng(seed))))


def close(a, b, scale):
    """Equal to what the labels promise, or to the quadrature's rung of the scale."""
    np.testing.assert_allclose(a, b, rtol=RELATIVE_TAIL, atol=QUADRATURE * scale)


@property_test
@given(TREES, HORIZONS, BATCHES)
def test_never_negative_and_bounded_by_its_own_error(tree, h, k):
    priced = voc.price(tree, Query(h, k))
    assert np.all(np.isfinite(priced.voc))
    assert np.all(priced.voc >= 0)
    assert np.all(priced.error >= 0)
    assert np.all(priced.error <= QUADRATURE * scale_of(tree))


@property_test
@given(TREES, HORIZONS, BATCHES, st.floats(-1e3, 1e3))
def test_a_constant_on_every_path_changes_nothing(tree, h, k, constant):
    moved, still = (voc.price(t, Query(h, k)) for t in (shifted(tree, constant), tree))
    close(moved.voc, still.voc, scale_of(tree) * (1 + abs(constant)))
    size = abs(constant) + np.abs(still.value).max() + scale_of(tree)
    assert np.max(np.abs(moved.value - constant - still.value)) <= 10 * ROUNDINGS * size


@property_test
@given(TREES, HORIZONS, BATCHES, st.sampled_from([1e-12, 1e-3, 7.0, 1e12]))
def test_scaling_utilities_scales_voc(tree, h, k, factor):
    plain = voc.price(tree, Query(h, k)).voc
    close(voc.price(scaled(tree, factor), Query(h, k)).voc / factor, plain, scale_of(tree))
    assert np.array_equal(voc.price(scaled(tree, 1024.0), Query(h, k)).voc, 1024.0 * plain)


@property_test
@given(TREES, HORIZONS, BATCHES, st.randoms(use_true_random=False))
def test_relabelling_siblings_permutes(tree, h, k, random):
    """Depth-first order with every node's children shuffled."""
    record = to_record(tree)
    children = [[c for c, p in enumerate(record["parent"]) if p == node] for node in range(tree.n_nodes)]
    order, stack = [], [0]
    while stack:
        node = stack.pop()
        order.append(node)
        stack.extend(random.sample(children[node], len(children[node])))
    place = {node: i for i, node in enumerate(order)}
    columns = {
        k: [v[node] for node in order] for k, v in record.items() if isinstance(v, list) and k != "parent"
    }
    parent = [-1] + [place[record["parent"][node]] for node in order[1:]]
    turned = from_record({**record, **columns, "parent": parent})
    leaf_of = {int(node): i for i, node in enumerate(tree.leaf_nodes)}
    moved = [leaf_of[order[node]] for node in turned.leaf_nodes]
    query = Query(h, k)
    close(voc.price(turned, query).voc, voc.price(tree, query).voc[moved], scale_of(tree))


@property_test
@given(TREES, HORIZONS, st.integers(1, 30), st.integers(1, 10**6))
def test_non_decreasing_in_the_batch_and_below_an_endless_one(tree, h, k, more):
    priced = [voc.price(tree, Query(h, b)) for b in (k, k + 1, k + 1 + more, 2**53)]
    for few, many in itertools.pairwise(priced):
        assert np.all(few.voc <= many.voc + few.error + many.error + few.voc * RELATIVE_TAIL)
    assert np.all(priced[-1].voc <= scale_of(tree))


@property_test
@given(TREES, st.sampled_from([0.0, math.inf]))
def test_nothing_to_learn_is_worth_nothing_and_noise_drowns_the_rest(tree, h):
    priced = voc.price(tree, Query(h))
    assert np.all(priced.voc[tree.var == 0] == 0)
    noisy = dataclasses.replace(tree, noise_var=np.full(tree.n_leaves, 1e20 * tree.var.max()))
    assert np.all(voc.price(noisy, Query(h)).voc <= QUADRATURE * scale_of(tree))


@property_test
@given(TREES, BATCHES)
def test_horizons_meet_at_both_ends(tree, k):
    static, dynamic = voc.price(tree, Query(0.0, k)), voc.price(tree, Query(math.inf, k))
    # What h rollouts resolve has the standard deviation v sqrt(h / n): 1e-11 and less here.
    close(voc.price(tree, Query(1e-26, k)).voc, static.voc, scale_of(tree))
    endless = voc.price(tree, Query(1e20, k))
    close(endless.voc, dynamic.voc, scale_of(tree))
    assert np.max(np.abs(endless.value - dynamic.value)) <= QUADRATURE * scale_of(tree)


@property_test
@given(TREES, HORIZONS, st.integers(0, 60))
def test_rate_is_the_best_batch_of_all(tree, h, remaining):
    priced = voc.price(tree, Query(h, None, remaining))
    if remaining == 0:
        assert not priced.voc.any()
        assert not priced.batch.any()
        return
    every = np.array([voc.price(tree, Query(h, k)).voc / k for k in range(1, remaining + 1)])
    slack = 1e-15 * scale_of(tree)
    np.testing.assert_allclose(priced.voc, every.max(axis=0), rtol=RELATIVE_TAIL, atol=slack)
    at = every[np.maximum(priced.batch, 1) - 1, np.arange(tree.n_leaves)]
    np.testing.assert_allclose(at, priced.voc, rtol=RELATIVE_TAIL, atol=slack)


def test_several_peaks_at_a_finite_horizon_are_told_apart():
    """Worked example: 1.095e-4 at k = 1, 1.043e-4 at 5, 1.370e-4 at 24 for h = 30, noise variance 7.95."""
    t = bush([[0.0, -1.9504], [-1.7740]], [[1.0, 0.0], [0.0]], 7.95)
    for k, value in ((1, 1.095e-4), (5, 1.043e-4), (24, 1.370e-4)):
        assert voc.price(t, Query(30.0, k)).voc[0] / k == pytest.approx(value, abs=PUBLISHED * 1e-7)
    assert voc.price(t, Query(30.0, None, 60)).batch[0] > 5
    assert voc.price(t, Query(30.0, None, 5)).batch[0] == 1


def test_one_root_action_needs_no_look_ahead():
    t = bush([[0.0, 0.3, -1.0]], [[1.0, 2.0, 0.5]])
    assert not voc.price(t, Query()).voc.any()
    assert not voc.price(t, Query(batch=None, remaining=50)).voc.any()
    assert np.all(voc.price(t, Query(4.0)).voc > 0)  # but later choices still gain from it


def test_one_leaf_and_no_uncertainty():
    assert voc.price(bush([[0.3]], [[1.0]]), Query()).voc.tolist() == [0.0]
    sure = bush([[0.3, 1.0], [0.2]], [[0.0, 0.0], [0.0]])
    for h in (0.0, 3.0, math.inf):
        priced = voc.price(sure, Query(h, None, 9))
        assert priced.voc.tolist() == [0.0] * 3
        assert priced.batch.tolist() == [1] * 3
        assert priced.value == pytest.approx([1.0, 0.2], rel=CLOSED_FORM)


@pytest.mark.parametrize("h", [0.0, 8.0, math.inf])
@pytest.mark.parametrize("size", [1e-6, 1.0, 1e6, 1e12])
def test_values_far_from_zero_keep_their_differences(h, size):
    """Totals at 1e12 with unit spreads: representable differences, so the labels must not suffer."""
    near = bush([[0.0, 0.5], [0.25]], [[1.0, 2.0], [1.0]])
    far = bush([[size, size + 0.5], [size + 0.25]], [[1.0, 2.0], [1.0]])
    slack = np.spacing(size) * 4
    np.testing.assert_allclose(
        voc.price(far, Query(h)).voc, voc.price(near, Query(h)).voc, rtol=QUADRATURE, atol=slack
    )


@pytest.mark.parametrize("h", [0.0, 8.0, math.inf])
def test_4096_leaves(h):
    t = random_bush(np.random.default_rng(0), 4, 1024)
    priced = voc.price(t, Query(h))
    assert np.all(np.isfinite(priced.voc))
    assert np.all(priced.voc >= 0)
    assert priced.voc.max() > 0
    assert priced.error.max() <= QUADRATURE * scale_of(t)


def test_single_leaves_are_static_whatever_the_horizon():
    """One leaf an action leaves nothing to choose later: dynamic and static agree in closed form."""
    t = bush([[0.0], [0.2], [-0.4]], [[1.0], [0.3], [2.0]])
    np.testing.assert_allclose(voc.price(t, Query()).voc, voc.price(t, Query(0.0)).voc, rtol=CLOSED_FORM)


def test_equal_values_and_drowning_noise_end_soon():
    """Values equal to rounding put the crossing nowhere near the outcomes; this once took forever."""
    t = bush([[1.0], [1.0, -50.0]], [[0.0], [2.37, 2.855]], 1e20)
    priced = voc.price(t, Query())
    # The closed form: -50 never matters.
    assert priced.voc[1] == pytest.approx(9.45492836e-11, abs=PUBLISHED * 1e-19)
    assert priced.voc[1] == pytest.approx(voc.price(t, Query(0.0)).voc[1], rel=RELATIVE_TAIL)
    assert priced.voc[2] <= 1e-15
