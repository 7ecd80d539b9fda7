"""The feature graphs that take the batch with each call: those of a fixed one, what must not change them."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import onnx
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, FEATURE_FIT, ONNX_FLOAT, RELATIVE_TAIL
from leaf_tables import table

from distill.errors import InputError
from distill.feature_graph import FeatureGraph
from distill.features_any_horizon import build_graph
from distill.query import Query
from distill.scorer_inputs import ANY_BATCH, LEAF_TABLE, VARIES
from distill.timing import tree_of
from distill.voc import price

GRAPHS = [FeatureGraph.of_value({"horizon": h, "batch": VARIES}, ANY_BATCH) for h in (0.0, 3.0, math.inf)]


def one(seed: int = 0, batch_size: float = 4) -> dict[str, Any]:
    return {**table(np.random.default_rng(seed), 12, 3), "batch_size": batch_size}


@pytest.mark.parametrize("horizon", [0.0, 3.0, math.inf])
@pytest.mark.parametrize("k", [1, 8, 2**53 - 1])
def test_its_start_is_that_of_a_file_for_this_batch(horizon, k):
    ours = FeatureGraph.of_value({"horizon": horizon, "batch": VARIES}, ANY_BATCH)
    fixed = FeatureGraph.of_value({"horizon": horizon, "batch": k}, LEAF_TABLE)
    assert ours.names == fixed.names
    for seed in range(5):
        t = one(seed, k)
        a, b = ours.matrix(t), fixed.matrix(t)
        for got, want in zip(a[:3], b[:3], strict=True):
            np.testing.assert_array_equal(got, want)
        assert np.all(a.batch == k)


def test_starts_are_near_the_static_value_from_one_rollout_to_knowing_all():
    graph = FeatureGraph.of_value({"horizon": 0.0, "batch": VARIES}, ANY_BATCH)
    for seed in range(10):
        t = one(seed)
        for k in (1, 3, 2**53):
            exact = price(tree_of(t), Query(0.0, k)).voc
            near = exact > CLOSED_FORM
            assert near.sum() >= 2
            start = graph.matrix({**t, "batch_size": k}).first_order
            np.testing.assert_allclose(start[near], exact[near], rtol=FEATURE_FIT)


@settings(deadline=None, max_examples=30, derandomize=True)
@given(
    st.integers(0, 2**32 - 1),
    st.sampled_from([1, 2, 50, 10**6, 2**53]),
    st.sampled_from([1e-8, 7.0, 1e6]),
    st.sampled_from([0.0, 5.0, -1e4]),
)
def test_scale_and_shift_of_utilities_change_no_feature(seed, k, scale, shift):
    t = one(seed, k)
    moved = {
        **t,
        "mean": t["mean"] * scale,
        "var": t["var"] * scale**2,
        "noise_var": t["noise_var"] * scale**2,
        "offset": (t["offset"] + shift) * scale,
    }
    for graph in GRAPHS:
        a, b = graph.matrix(t), graph.matrix(moved)
        np.testing.assert_allclose(b.x, a.x, rtol=ONNX_FLOAT, atol=ONNX_FLOAT)
        np.testing.assert_allclose(b.unit, a.unit * scale, rtol=RELATIVE_TAIL)


@settings(deadline=None, max_examples=30, derandomize=True)
@given(st.integers(0, 2**32 - 1), st.sampled_from([2, 5, 1000]))
def test_k_rollouts_are_one_with_a_kth_of_the_noise(seed, k):
    """A batch decides nothing else; the mean of k rollouts has a k-th of the variance."""
    t = one(seed, k)
    for graph in GRAPHS[::2]:  # with a finite horizon, later rollouts have the noise too
        a, b = graph.matrix(t), graph.matrix({**t, "noise_var": t["noise_var"] / k, "batch_size": 1})
        np.testing.assert_allclose(b.x, a.x, rtol=ONNX_FLOAT, atol=ONNX_FLOAT)
        np.testing.assert_allclose(b.first_order, a.first_order, rtol=CLOSED_FORM)


@settings(deadline=None, max_examples=40, derandomize=True)
@given(st.integers(0, 2**32 - 1), st.floats(0, 53), st.floats(-12, 12), st.floats(-8, 8), st.floats(-8, 8))
def test_decades_of_scale_variance_and_batch_give_finite_numbers(seed, k, scale, spread, noise):
    rng = np.random.default_rng(seed)
    t, n = one(seed, float(int(2**k))), 12
    t["var"] = t["var"] * 10.0 ** (scale + spread * rng.random(n)) * (rng.random(n) < 0.8)
    t["noise_var"] = t["noise_var"] * 10.0 ** (scale + noise * rng.random(n))
    t["mean"] = t["mean"] * 10.0 ** (scale / 2 + rng.uniform(-3, 3))
    for graph in GRAPHS:
        got = graph.matrix(t)
        assert all(np.all(np.isfinite(part)) for part in got)
        assert np.all(got.first_order >= 0)
        assert np.all(got.unit[t["var"] == 0] == 0)
        assert np.all(got.batch == t["batch_size"])


def test_each_tree_has_its_own_batch():
    t = one()
    pair: dict[str, Any] = {name: np.concatenate([t[name], t[name]]) for name in ANY_BATCH.columns}
    pair |= {"remaining": 60, "batch_size": np.repeat([1, 32], 12), "tree": np.repeat([0, 1], 12)}
    for graph in GRAPHS:
        both = graph.matrix(pair)
        for part, k in ((slice(12), 1), (slice(12, None), 32)):
            np.testing.assert_array_equal(both.x[part], graph.matrix({**t, "batch_size": k}).x)
        with pytest.raises(InputError, match="batch_size: is missing"):
            graph.matrix({name: x for name, x in t.items() if name != "batch_size"})


def test_the_graphs_are_clean_and_not_for_any_horizon_too():
    for graph in GRAPHS:
        onnx.checker.check_model(graph.model, full_check=True)
    with pytest.raises(InputError, match="horizon and batch: must not both differ from call to call"):
        build_graph(batch=VARIES)
