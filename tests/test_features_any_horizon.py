"""The feature graph that takes the horizon with each call: its two ends, and what must not change it."""

from __future__ import annotations

import math

import numpy as np
import onnx
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import (
    CLOSED_FORM,
    EXACT,
    FEATURE_FIT,
    FEATURE_ORDER,
    FEATURE_TABLE,
    ONNX_FLOAT,
    RELATIVE_TAIL,
    START_MOST,
    START_TYPICAL,
)
from leaf_tables import table

from distill import features
from distill.closed_form import static_rates
from distill.errors import InputError
from distill.feature_graph import FeatureGraph
from distill.features_any_horizon import FEATURE_NAMES, build_graph
from distill.query import Query
from distill.scorer_inputs import ANY_HORIZON
from distill.timing import tree_of
from distill.voc import price

GRAPH = FeatureGraph(build_graph())
seeds = st.integers(0, 2**32 - 1)
horizons = st.sampled_from([0.0, 1e-3, 1.0, 4.0, 300.0, 1e12, math.inf])


def random_table(seed, most=40):
    rng = np.random.default_rng(seed)
    n = int(rng.integers(1, most))
    return table(rng, n, int(rng.integers(1, n + 1)), int(rng.integers(1, 400)))


@pytest.mark.parametrize("batch", [None, 1, 6])
def test_horizon_0_starts_as_the_static_graph_does(batch):
    ours, static = (
        FeatureGraph(b) for b in (build_graph(batch=batch), features.build_graph(horizon=0.0, batch=batch))
    )
    for seed in range(60):
        t = random_table(seed)
        a, b = ours.matrix({**t, "horizon": 0.0}), static.matrix(t)
        np.testing.assert_allclose(a.first_order, b.first_order, rtol=CLOSED_FORM, atol=EXACT)
        worth = b.first_order > 1e-290
        np.testing.assert_allclose(a.unit[worth], b.unit[worth], rtol=CLOSED_FORM)
        np.testing.assert_array_equal(a.batch[worth], b.batch[worth])


def test_horizon_0_with_ties_starts_at_the_static_rate():
    rng = np.random.default_rng(2)
    for n, actions in ((2, 1), (9, 3), (40, 5)):
        for same in (0.0, 3.0, -1e8):
            t = table(rng, n, actions, 10**6)
            t["noise_var"] *= 30
            t["gain"], t["offset"] = np.ones(n), np.full(n, same)
            t["mean"][-1] = t["mean"][0] = t["mean"].max()
            place = {k: t[k] for k in ("mean", "var", "noise_var", "gain", "offset")}
            exact = static_rates(**place, remaining=t["remaining"])[0]
            got = GRAPH.matrix({**t, "horizon": 0.0}).first_order
            near = exact > 1e-30
            assert near.sum() >= 2
            np.testing.assert_allclose(got[near], exact[near], rtol=FEATURE_FIT)


@pytest.mark.parametrize("batch", [None, 4])
def test_a_far_horizon_starts_as_infinity(batch):
    graph = FeatureGraph(build_graph(batch=batch))
    for seed in range(60):
        t = random_table(seed)
        at_end, far = (graph.matrix({**t, "horizon": h}) for h in (math.inf, 1e12))
        near = at_end.first_order > 1e-12
        for name in ("first_order", "unit"):
            np.testing.assert_allclose(
                getattr(far, name)[near], getattr(at_end, name)[near], rtol=FEATURE_TABLE
            )
        np.testing.assert_array_equal(at_end.x[:, FEATURE_NAMES.index("known")], 1)


def test_infinity_starts_as_the_dynamic_graph_of_as_many_cells():
    ours, dynamic = (
        FeatureGraph(b) for b in (build_graph(batch=4), features.build_graph(points=16, batch=4))
    )
    for seed in range(60):
        t = random_table(seed)
        a, b = ours.matrix({**t, "horizon": math.inf}).first_order, dynamic.matrix(t).first_order
        np.testing.assert_allclose(a, b, rtol=FEATURE_FIT, atol=CLOSED_FORM)


def test_horizons_above_0_start_near_the_exact_rate():
    """The start of the best candidate: typically within 5 %, nine in ten within a quarter."""
    for h in (0.5, 4.0, 50.0, math.inf):
        logs = []
        for seed in range(40):
            t = random_table(seed, most=12)
            exact = price(tree_of(t), Query(h, None, t["remaining"])).voc
            start = GRAPH.matrix({**t, "horizon": h}).first_order
            at = int(np.argmax(exact))
            if exact[at] > 1e-9:
                logs.append(math.log(start[at] / exact[at]))
        assert len(logs) >= 30
        assert abs(np.median(logs)) < math.log1p(START_TYPICAL)
        assert np.quantile(np.abs(logs), 0.9) < math.log1p(START_MOST)


@pytest.mark.parametrize("horizon", [1.0, 4.0, 20.0])
@pytest.mark.parametrize("sd", [3.0, 4.0])
def test_a_leader_beside_an_uncertain_sibling_starts_near_the_exact_value(sd, horizon):
    """A normal of the siblings' moments has no tail at the leader: it gave from a 12th to a 20,000th."""
    t = {
        "mean": np.array([10.0, 1.0, 0.0, -3.0]),
        "var": np.array([1.0, sd * sd, 1.0, 1.0]),
        "noise_var": np.full(4, 4.0),
        "gain": np.ones(4),
        "cost": np.zeros(4),
        "offset": np.zeros(4),
        "action": np.array([0, 0, 0, 1]),
        "remaining": 1,
    }
    exact = price(tree_of(t), Query(horizon, None, 1)).voc[0]
    got = GRAPH.matrix({**t, "horizon": horizon})
    assert abs(math.log(got.first_order[0] / exact)) < math.log1p(START_MOST)
    # The column tells what the start stands for: phi(z) = start / unit.
    z = got.x[0, FEATURE_NAMES.index("threshold")]
    density = math.exp(-z * z / 2) / math.sqrt(2 * math.pi)
    np.testing.assert_allclose(density, got.first_order[0] / got.unit[0], rtol=ONNX_FLOAT)


def test_a_leaf_whose_siblings_alone_beat_the_rival_starts_at_0_where_all_will_be_known():
    t = {
        "mean": np.array([2.0, 1.9, -3.0]),
        "var": np.array([1.0, 1.0, 1.0]),
        "noise_var": np.full(3, 4.0),
        "gain": np.ones(3),
        "cost": np.zeros(3),
        "offset": np.zeros(3),
        "action": np.array([0, 0, 1]),
        "remaining": 1,
    }
    got = GRAPH.matrix({**t, "horizon": math.inf})
    assert np.all(got.first_order[:2] == 0)
    assert got.first_order[2] > 0
    assert np.all(GRAPH.matrix({**t, "horizon": 4.0}).first_order > 0)


@settings(deadline=None, max_examples=30, derandomize=True)
@given(seeds, horizons, st.sampled_from([1e-8, 7.0, 1e6, 1e100]), st.sampled_from([0.0, 5.0, -1e4]))
def test_scale_and_shift_of_utilities_change_no_feature(seed, h, scale, shift):
    t = random_table(seed)
    moved = {
        **t,
        "mean": t["mean"] * scale,
        "var": t["var"] * scale**2,
        "noise_var": t["noise_var"] * scale**2,
        "offset": (t["offset"] + shift) * scale,
    }
    a, b = (GRAPH.matrix({**x, "horizon": h}) for x in (t, moved))
    np.testing.assert_allclose(b.x, a.x, rtol=ONNX_FLOAT, atol=ONNX_FLOAT)
    np.testing.assert_allclose(b.unit, a.unit * scale, rtol=RELATIVE_TAIL)


@settings(deadline=None, max_examples=30, derandomize=True)
@given(seeds, horizons)
def test_relabelling_leaves_and_actions_permutes_the_rows(seed, h):
    rng = np.random.default_rng(seed)
    t = {**random_table(seed), "horizon": h}
    n = len(t["mean"])
    order, name = rng.permutation(n), rng.permutation(n)
    moved = {k: v[order] if isinstance(v, np.ndarray) else v for k, v in t.items()}
    moved["action"] = name[moved["action"]]
    a, b = GRAPH.matrix(t), GRAPH.matrix(moved)
    np.testing.assert_allclose(b.x, a.x[order], rtol=FEATURE_ORDER, atol=FEATURE_ORDER)


@settings(deadline=None, max_examples=60, derandomize=True)
@given(seeds, horizons, st.floats(-12, 12), st.floats(-8, 8), st.floats(-8, 8))
def test_decades_of_scale_and_variance_give_finite_numbers(seed, h, scale, spread, noise):
    rng = np.random.default_rng(seed)
    t = random_table(seed, most=60)
    n = len(t["mean"])
    t["var"] = t["var"] * 10.0 ** (scale + spread * rng.random(n)) * (rng.random(n) < 0.8)
    t["noise_var"] = t["noise_var"] * 10.0 ** (scale + noise * rng.random(n))
    t["mean"] = t["mean"] * 10.0 ** (scale / 2 + rng.uniform(-3, 3))
    got = GRAPH.matrix({**t, "horizon": h})
    assert all(np.all(np.isfinite(part)) for part in got)
    assert np.all(got.first_order >= 0)
    assert np.all(got.unit[t["var"] == 0] == 0)
    assert np.all((got.batch >= 1) & (got.batch <= t["remaining"]))


def test_extreme_inputs_give_finite_numbers_at_every_horizon():
    for h in (0.0, 5e-324, 1.0, 1e300, math.inf):
        for mean in (-1e100, 0.0, 1e100):
            for var in (0.0, 1e-300, 1e200):
                for noise in (1e-300, 1.0, 1e200):
                    t = table(np.random.default_rng(2), 6, 3)
                    t["mean"][2], t["var"][2], t["noise_var"][2] = mean, var, noise
                    got = GRAPH.matrix({**t, "horizon": h})
                    assert all(np.all(np.isfinite(part)) for part in got), (h, mean, var, noise)


def test_no_rollout_left_is_worth_nothing_at_any_horizon():
    for h in (0.0, 3.0, math.inf):
        got = GRAPH.matrix({**table(np.random.default_rng(3), 9, 4, remaining=0), "horizon": h})
        assert np.all(got.unit == 0)
        assert np.all(got.batch == 0)


def test_each_tree_has_its_own_horizon():
    t = random_table(4)
    n = len(t["mean"])
    pair = {name: np.concatenate([t[name], t[name]]) for name in ANY_HORIZON.columns}
    pair |= {
        "remaining": t["remaining"],
        "horizon": np.repeat([0.0, math.inf], n),
        "tree": np.repeat([0, 1], n),
    }
    both = GRAPH.matrix(pair)
    for part, h in ((slice(n), 0.0), (slice(n, None), math.inf)):
        np.testing.assert_array_equal(both.x[part], GRAPH.matrix({**t, "horizon": h}).x)
    with pytest.raises(InputError, match="horizon: is missing"):
        GRAPH.matrix(t)


def test_the_graph_is_clean_and_the_same_every_time():
    model = build_graph()
    onnx.checker.check_model(model, full_check=True)
    assert model.SerializeToString(deterministic=True) == build_graph().SerializeToString(deterministic=True)
