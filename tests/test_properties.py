"""What must hold for exact VOC of independent Gaussian leaves, by any method: properties and extremes."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest
from builders import bush, chance_record, flat_record, random_bush
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, QUADRATURE, RELATIVE_TAIL

from distill import voc
from distill.errors import InputError, ToleranceError
from distill.query import Query, scale_of
from distill.record import from_record

HORIZONS = st.sampled_from([0.0, 0.5, 8.0, math.inf])
BATCHES = st.sampled_from([1, 3, 40])
property_test = settings(max_examples=60, deadline=None, derandomize=True)


@st.composite
def bushes(draw, least_actions=1):
    """Trees of unit size with ties, sure leaves, far gaps and 8 decades of variances among them."""
    mean = st.one_of(st.floats(-3, 3), st.sampled_from([0.0, 1.0, -50.0]))
    var = st.one_of(st.floats(1e-2, 4), st.sampled_from([0.0, 1e-8, 1.0]))
    shape = draw(st.lists(st.integers(1, 4), min_size=least_actions, max_size=4))
    means = [[draw(mean) for _ in range(n)] for n in shape]
    variances = [[draw(var) for _ in range(n)] for n in shape]
    assume(any(v > 0 for row in variances for v in row))
    return means, variances, draw(st.sampled_from([0.05, 1.0, 30.0]))


def close(a, b, scale, rel=RELATIVE_TAIL):
    """Equal to `rel`, or to the quadrature's rung of the scale."""
    np.testing.assert_allclose(a, b, rtol=rel, atol=QUADRATURE * scale)


@property_test
@given(bushes(), HORIZONS, BATCHES)
def test_never_negative_and_bounded_by_its_own_error(tree, h, k):
    t = bush(*tree)
    priced = voc.price(t, Query(h, k))
    assert np.all(np.isfinite(priced.voc))
    assert np.all(priced.voc >= 0)
    assert np.all(priced.error >= 0)
    assert np.all(priced.error <= QUADRATURE * scale_of(t))


@property_test
@given(bushes(), HORIZONS, BATCHES, st.floats(-1e3, 1e3))
def test_a_constant_on_every_path_changes_nothing(tree, h, k, constant):
    t = bush(*tree)
    reward = t.reward.copy()
    reward[t.action_nodes] += constant
    moved = dataclasses.replace(t, reward=reward)
    close(voc.price(moved, Query(h, k)).voc, voc.price(t, Query(h, k)).voc, scale_of(t) * (1 + abs(constant)))


@property_test
@given(bushes(), HORIZONS, BATCHES, st.sampled_from([1e-12, 1e-3, 7.0, 1e12]))
def test_scaling_utilities_scales_voc(tree, h, k, factor):
    mean, var, noise = tree
    scaled = bush(
        [[factor * m for m in row] for row in mean],
        [[factor**2 * v for v in row] for row in var],
        factor**2 * noise,
    )
    t = bush(*tree)
    close(voc.price(scaled, Query(h, k)).voc / factor, voc.price(t, Query(h, k)).voc, scale_of(t))


@property_test
@given(bushes(), HORIZONS, BATCHES, st.randoms(use_true_random=False))
def test_relabelling_permutes(tree, h, k, random):
    mean, var, noise = tree
    order = [(a, i) for a in range(len(mean)) for i in range(len(mean[a]))]
    actions = list(range(len(mean)))
    random.shuffle(actions)
    inner = [random.sample(range(len(mean[a])), len(mean[a])) for a in actions]
    t = bush(mean, var, noise)
    moved = bush(
        [[mean[a][i] for i in idx] for a, idx in zip(actions, inner, strict=True)],
        [[var[a][i] for i in idx] for a, idx in zip(actions, inner, strict=True)],
        noise,
    )
    new_order = [(a, i) for a, idx in zip(actions, inner, strict=True) for i in idx]
    back = [new_order.index(x) for x in order]
    close(voc.price(moved, Query(h, k)).voc[back], voc.price(t, Query(h, k)).voc, scale_of(t))


@property_test
@given(bushes(), HORIZONS, st.integers(1, 30), st.integers(1, 300))
def test_non_decreasing_in_the_batch_and_below_an_endless_one(tree, h, k, more):
    t = bush(*tree)
    few, many, endless = (voc.price(t, Query(h, b)) for b in (k, k + more, 2**53))
    slack = few.error + many.error + endless.error + few.voc * RELATIVE_TAIL
    assert np.all(few.voc <= many.voc + slack)
    assert np.all(many.voc <= endless.voc + slack)


@property_test
@given(bushes(), st.sampled_from([0.0, math.inf]))
def test_nothing_to_learn_is_worth_nothing_and_noise_drowns_the_rest(tree, h):
    t = bush(*tree)
    priced = voc.price(t, Query(h))
    assert np.all(priced.voc[t.var == 0] == 0)
    noisy = dataclasses.replace(t, noise_var=np.full(t.n_leaves, 1e20))
    assert np.all(voc.price(noisy, Query(h)).voc <= 1e-9 * scale_of(t))


@property_test
@given(bushes(), BATCHES)
def test_horizons_meet_at_both_ends(tree, k):
    t = bush(*tree)
    # What h rollouts resolve has the standard deviation v sqrt(h / n), at most 2e-8 here.
    close(voc.price(t, Query(1e-18, k)).voc, voc.price(t, Query(0.0, k)).voc, 100 * scale_of(t))
    close(voc.price(t, Query(1e13, k)).voc, voc.price(t, Query(math.inf, k)).voc, 1e3 * scale_of(t), rel=1e-4)


@property_test
@given(bushes(), HORIZONS, st.integers(0, 60))
def test_rate_is_the_best_batch_of_all(tree, h, remaining):
    t = bush(*tree)
    priced = voc.price(t, Query(h, None, remaining))
    if remaining == 0:
        assert not priced.voc.any()
        assert not priced.batch.any()
        return
    every = np.array([voc.price(t, Query(h, k)).voc / k for k in range(1, remaining + 1)])
    np.testing.assert_allclose(priced.voc, every.max(axis=0), rtol=RELATIVE_TAIL, atol=1e-15 * scale_of(t))
    at = every[np.maximum(priced.batch, 1) - 1, np.arange(t.n_leaves)]
    np.testing.assert_allclose(at, priced.voc, rtol=RELATIVE_TAIL, atol=1e-15 * scale_of(t))


def test_several_peaks_at_a_finite_horizon_are_told_apart():
    """Worked example: 1.095e-4 at k = 1, 1.043e-4 at 5, 1.370e-4 at 24 for h = 30, noise variance 7.95."""
    t = bush([[0.0, -1.9504], [-1.7740]], [[1.0, 0.0], [0.0]], 7.95)
    for k, value in ((1, 1.095e-4), (5, 1.043e-4), (24, 1.370e-4)):
        assert voc.price(t, Query(30.0, k)).voc[0] / k == pytest.approx(value, abs=0.5e-7)
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
        voc.price(far, Query(h)).voc, voc.price(near, Query(h)).voc, rtol=1e-9, atol=slack
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


def test_many_at_once_are_the_same_bits():
    rng = np.random.default_rng(4)
    trees = [random_bush(rng, 3, 4) for _ in range(5)] + [from_record(chance_record())]
    for query in (Query(0.0, 2), Query(0.0, None, 30)):
        for one, many in zip(trees, voc.price_many(trees, query), strict=True):
            alone = voc.price(one, query)
            np.testing.assert_array_equal(many.voc, alone.voc)
            np.testing.assert_array_equal(many.batch, alone.batch)


def test_tolerance_and_rate_rules():
    t = from_record(flat_record())
    assert voc.price(t, Query(tolerance=1e-9)).voc.max() > 0
    with pytest.raises(ToleranceError, match="exceeds the tolerance 1e-300 of scale"):
        voc.price(t, Query(tolerance=1e-300))
    with pytest.raises(InputError, match="remaining: must be given for a rate"):
        Query(batch=None)


def test_equal_values_and_drowning_noise_end_soon():
    """Values equal to rounding put the crossing nowhere near the outcomes; this once took forever."""
    t = bush([[1.0], [1.0, -50.0]], [[0.0], [2.37, 2.855]], 1e20)
    priced = voc.price(t, Query())
    assert priced.voc[1] == pytest.approx(9.45492836e-11, rel=1e-8)  # the closed form: -50 never matters
    assert priced.voc[1] == pytest.approx(voc.price(t, Query(0.0)).voc[1], rel=RELATIVE_TAIL)
    assert priced.voc[2] <= 1e-15
