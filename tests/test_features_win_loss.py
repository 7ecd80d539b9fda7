"""The features of win/loss leaves: tables of betas, all outcomes of few rollouts, invariances."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import numpy as np
import onnx
import onnxruntime
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import BETA_ORDER, BETA_TABLE, CLOSED_FORM, FEATURE_TABLE, RELATIVE_TAIL, START_FORGONE
from scipy import special, stats

from distill.family import draw, load_family
from distill.feature_graph import FeatureGraph
from distill.features_win_loss import FEATURE_NAMES, FEW, build_graph
from distill.onnx_nodes import typed
from distill.query import Query
from distill.scorer_inputs import WIN_LOSS_TABLE
from distill.timing import tree_of
from distill.voc import price

FAMILY = load_family(Path(__file__).parents[1] / "datasets" / "families" / "on-time.toml")
GRAPH = FeatureGraph(build_graph())
seeds = st.integers(0, 2**32 - 1)


def table(rng: np.random.Generator, n: int, n_actions: int, remaining: int = 60) -> dict[str, Any]:
    """One tree: n leaves under n_actions actions, each with at least one."""
    action = np.concatenate([np.arange(n_actions), rng.integers(0, n_actions, n - n_actions)])
    low = rng.normal(0, 0.2, n)
    return {
        "alpha": rng.gamma(2, 2, n) + 0.3,
        "beta": rng.gamma(2, 2, n) + 0.3,
        "low": low,
        "high": low + rng.uniform(0.5, 1.5, n),
        "gain": rng.uniform(0.6, 1, n),
        "offset": rng.normal(0, 0.1, n),
        "cost": np.zeros(n),
        "action": rng.permutation(action).astype(np.int64),
        "remaining": remaining,
    }


def inner(t: dict[str, Any], *names: str, **options: Any) -> list[np.ndarray]:
    """Values inside the graph, by name."""
    model = build_graph(**options)
    model.graph.output.extend(typed(name, onnx.TensorProto.DOUBLE, [1, "n"]) for name in names)
    session = onnxruntime.InferenceSession(model.SerializeToString(), providers=["CPUExecutionProvider"])
    return [x.ravel() for x in session.run(list(names), GRAPH.table(t)[0])]


def test_expected_maxima_agree_with_beta_distribution_functions():
    rng = np.random.default_rng(0)
    t = table(rng, 15, 3)
    t["alpha"][:4], t["beta"][:4] = [0.6, 1, 60, 0.5], [1.4, 1, 20, 9.5]
    value, others, spread2 = inner(t, "value", "others", "spread2")
    base, span = t["low"] * t["gain"] + t["offset"], (t["high"] - t["low"]) * t["gain"]
    for i in range(15):
        mine = np.flatnonzero(t["action"] == t["action"][i])
        for at, mean, second in ((mine, value[i], None), (mine[mine != i], others[i], spread2[i])):
            if len(at) == 0:
                continue
            x = np.linspace(np.max(base[at]), np.max(base[at] + span[at]), 20_001)
            cdf = np.prod(
                [
                    special.betainc(t["alpha"][j], t["beta"][j], np.clip((x - base[j]) / span[j], 0, 1))
                    for j in at
                ],
                axis=0,
            )
            slow = x[-1] - np.trapezoid(cdf, x)
            assert abs(mean - slow) <= BETA_TABLE
            if second is not None:
                square = 2 * np.trapezoid((x - x[0]) * (1 - cdf), x) - (slow - x[0]) ** 2
                assert abs(second - square) <= BETA_TABLE


def test_single_leaf_actions_start_at_the_exact_static_rate():
    """No siblings and no rollouts to come: with at most 8 left every outcome is looked at."""
    graph = FeatureGraph(build_graph(horizon=0.0))
    for seed in range(4):
        t = table(np.random.default_rng(seed), 6, 6, remaining=8)
        exact = price(tree_of({k: t[k] for k in WIN_LOSS_TABLE.columns}), Query(0.0, None, 8))
        got = graph.matrix(t)
        np.testing.assert_allclose(got.first_order, exact.voc, rtol=CLOSED_FORM, atol=CLOSED_FORM)
        np.testing.assert_array_equal(got.batch[exact.voc > 1e-9], exact.batch[exact.voc > 1e-9])


@pytest.mark.parametrize("batch", [1, 5])
def test_a_fixed_batch_starts_at_its_own_static_value(batch):
    graph = FeatureGraph(build_graph(horizon=0.0, batch=batch))
    t = table(np.random.default_rng(9), 12, 4, remaining=100)
    exact = price(tree_of({k: t[k] for k in WIN_LOSS_TABLE.columns}), Query(0.0, batch, 100)).voc
    got = graph.matrix(t)
    np.testing.assert_allclose(got.first_order, exact, rtol=CLOSED_FORM, atol=CLOSED_FORM)
    assert np.all(got.batch == batch)


def test_two_leaf_actions_start_near_the_dynamic_rate():
    rng = np.random.default_rng(3)
    total = worst = 0.0
    for _ in range(20):
        tree = draw(FAMILY, 8, int(rng.integers(10**6)))
        from distill.tree import leaf_table

        found = leaf_table(tree)
        columns = {k: getattr(found, k) for k in WIN_LOSS_TABLE.columns}
        exact = price(tree, Query(math.inf, None, tree.remaining)).voc
        start = GRAPH.matrix({**columns, "remaining": tree.remaining}).first_order
        best = exact.max()
        if best > 1e-6:
            total += 1
            worst += 1 - exact[int(np.argmax(start))] / best
    assert total >= 10
    assert worst / total < START_FORGONE


@settings(deadline=None, max_examples=25, derandomize=True)
@given(seeds, st.sampled_from([1e-8, 1.0, 1e6]), st.sampled_from([0.0, 5.0, -1e4]))
def test_scale_and_shift_of_utilities_change_no_feature(seed, scale, shift):
    rng = np.random.default_rng(seed)
    n = int(rng.integers(1, 40))
    t = table(rng, n, int(rng.integers(1, n + 1)))
    moved = {**t, "low": t["low"] * scale, "high": t["high"] * scale, "offset": (t["offset"] + shift) * scale}
    a, b = GRAPH.matrix(t), GRAPH.matrix(moved)
    live = a.first_order > 1e-9
    np.testing.assert_allclose(b.unit, a.unit * scale, rtol=RELATIVE_TAIL)
    np.testing.assert_allclose(b.first_order[live], a.first_order[live] * scale, rtol=RELATIVE_TAIL)


@settings(deadline=None, max_examples=20, derandomize=True)
@given(seeds)
def test_relabelling_leaves_and_actions_permutes_the_rows(seed):
    rng = np.random.default_rng(seed)
    n = int(rng.integers(2, 40))
    n_actions = int(rng.integers(1, min(n, 8) + 1))
    t = table(rng, n, n_actions)
    order, name = rng.permutation(n), rng.permutation(n_actions)
    moved = {k: v[order] if isinstance(v, np.ndarray) else v for k, v in t.items()}
    moved["action"] = name[moved["action"]]
    a, b = GRAPH.matrix(t), GRAPH.matrix(moved)
    live = a.first_order[order] > 1e-9
    np.testing.assert_allclose(b.first_order[live], a.first_order[order][live], rtol=BETA_ORDER)


@pytest.mark.parametrize("horizon", [math.inf, 0.0, 4.0])
@pytest.mark.parametrize("batch", [None, 1, 30])
def test_extremes_give_finite_numbers(horizon, batch):
    graph = FeatureGraph(build_graph(horizon=horizon, batch=batch))
    assert graph.names[: len(FEATURE_NAMES)] == FEATURE_NAMES
    looked_at = 0 if batch is not None else 8 if horizon == 0 else len(FEW)
    assert len(graph.names) == len(FEATURE_NAMES) + looked_at
    rng = np.random.default_rng(1)
    for n, actions in ((1, 1), (7, 1), (9, 9), (4096, 64)):
        t = table(rng, n, actions, int(10 ** rng.uniform(0, 9)))
        t["alpha"] = 10.0 ** rng.uniform(-8, 8, n)
        t["beta"] = 10.0 ** rng.uniform(-8, 8, n)
        size = 10.0 ** rng.uniform(-12, 12, n)
        t["low"], t["high"] = t["low"] * size, t["high"] * size
        got = graph.matrix(t)
        assert all(np.all(np.isfinite(part)) for part in got)
        assert np.all(got.first_order >= 0)
        assert np.all(got.batch >= 1)
        if actions == 1 and horizon == math.inf:
            assert np.all(got.first_order < 1e-200)


def test_values_far_from_zero_change_no_feature():
    t = table(np.random.default_rng(3), 30, 5)
    moved = {**t, "offset": t["offset"] + 1e8}
    a, b = GRAPH.matrix(t), GRAPH.matrix(moved)
    live = a.first_order > 1e-6
    assert np.count_nonzero(live) >= 5
    np.testing.assert_allclose(b.first_order[live], a.first_order[live], rtol=BETA_ORDER)


@pytest.mark.parametrize("trials", [1e6, 1e9])
def test_leaves_known_almost_surely_give_finite_numbers(trials):
    """Means an even step apart, and one leaf of an unknown value among them."""
    t = table(np.random.default_rng(4), 20, 4, 10**6)
    share = np.linspace(0.2, 0.8, 20)
    t["alpha"], t["beta"] = share * trials, (1 - share) * trials
    t["alpha"][3], t["beta"][3] = 1.0, 1.0
    got = GRAPH.matrix(t)
    assert all(np.all(np.isfinite(part)) for part in got)
    assert int(np.argmax(got.first_order)) == 3


def test_nothing_left_is_worth_nothing():
    got = GRAPH.matrix(table(np.random.default_rng(2), 9, 3, remaining=0))
    assert np.all(got.first_order == 0)
    assert np.all(got.unit == 0)


def test_outcome_odds_are_beta_binomial():
    """Against SciPy, through the static value beside a rival that is as good as sure."""
    t = {
        "alpha": np.array([2.5, 1e7]), "beta": np.array([3.5, 1e7]),
        "low": np.zeros(2), "high": np.ones(2), "gain": np.ones(2), "offset": np.array([0.0, 0.15]),
        "cost": np.zeros(2), "action": np.array([0, 1]), "remaining": 3,
    }  # fmt: skip
    got = FeatureGraph(build_graph(horizon=0.0, batch=3)).matrix(t).first_order[0]
    means = (2.5 + np.arange(4)) / 9
    want = np.sum(stats.betabinom.pmf(np.arange(4), 3, 2.5, 3.5) * np.maximum(means - 0.65, 0))
    assert abs(got - want) <= RELATIVE_TAIL * want


def test_the_graph_is_clean_and_the_same_every_time():
    model = build_graph()
    onnx.checker.check_model(model, full_check=True)
    assert model.SerializeToString(deterministic=True) == build_graph().SerializeToString(deterministic=True)
    assert FEATURE_TABLE < BETA_TABLE
