"""The feature graph: what its numbers mean, and what must not change them."""

from __future__ import annotations

import numpy as np
import onnx
import onnxruntime
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import (
    CLOSED_FORM,
    FEATURE_FIT,
    FEATURE_ORDER,
    FEATURE_TABLE,
    ONNX_FLOAT,
    RELATIVE_TAIL,
    ROUGH_BATCH,
)
from leaf_tables import rows, table
from scipy import integrate, optimize, stats

from distill import voc
from distill.closed_form import static_rates
from distill.errors import InputError
from distill.feature_graph import FeatureGraph
from distill.features import build_graph
from distill.onnx_nodes import typed
from distill.query import Query
from distill.sample_data import TRACES
from distill.timing import tree_of
from distill.traces import read_trees
from distill.tree import leaf_table

GRAPH, LEAN = FeatureGraph(), FeatureGraph(build_graph(lean=True))
both = pytest.mark.parametrize("graph", [GRAPH, LEAN], ids=["rich", "lean"])
seeds = st.integers(0, 2**32 - 1)


def slow_moments(t):
    """Expected maximum of each leaf's action, and mean and variance of its siblings' maximum."""
    m = t["gain"] * t["mean"] + t["offset"]
    s = t["gain"] * np.sqrt(t["var"])
    n = len(m)
    value, others, spread2 = np.zeros(n), np.zeros(n), np.zeros(n)

    def moments(at):
        low, high = np.max(m[at] - 9 * s[at]), np.max(m[at] + 9 * s[at])

        def tail(x, power):
            upper = -np.expm1(np.sum(stats.norm.logcdf((x - m[at]) / s[at])))
            return upper * (2 * (x - low)) ** power

        options = {"epsabs": 1e-11, "limit": 400, "points": np.clip(m[at], low, high)}
        first, second = (integrate.quad(tail, low, high, (power,), **options)[0] for power in (0, 1))
        return low + first, second - first**2

    for i in range(n):
        mine = np.flatnonzero(t["action"] == t["action"][i])
        rest = mine[mine != i]
        value[i] = moments(mine)[0]
        if len(rest):
            others[i], spread2[i] = moments(rest)
    return s, value, others, spread2


def inner(t, *names):
    """Values inside the graph, by name."""
    model = build_graph()
    model.graph.output.extend(typed(name, onnx.TensorProto.DOUBLE, [1, "n"]) for name in names)
    session = onnxruntime.InferenceSession(model.SerializeToString(), providers=["CPUExecutionProvider"])
    return [x.ravel() for x in session.run(list(names), GRAPH.table(t)[0])]


@pytest.mark.parametrize("seed", range(3))
def test_moments_agree_with_adaptive_quadrature(seed):
    rng = np.random.default_rng(seed)
    t = table(rng, 14, 2)
    t["var"] = rng.uniform(0.5, 2, 14)
    s, value, others, spread2 = slow_moments(t)
    got_value, got_others, got_spread2 = inner(t, "value", "others", "spread2")
    np.testing.assert_allclose(got_value, value, rtol=0, atol=FEATURE_TABLE * s.max())
    np.testing.assert_allclose(got_others, others, rtol=0, atol=FEATURE_TABLE * s.max())
    np.testing.assert_allclose(got_spread2, spread2, rtol=0, atol=4 * FEATURE_TABLE * s.max() ** 2)


def test_two_leaf_actions_have_their_threshold_where_the_action_meets_the_rival():
    """One sibling is a normal maximum, so only the fit of the inverse is left between t0 and the truth."""
    rng = np.random.default_rng(7)
    t = table(rng, 12, 6)
    t["action"] = np.repeat(np.arange(6), 2)
    value, (t0,) = inner(t, "value")[0], inner(t, "t0")
    m, s = t["gain"] * t["mean"] + t["offset"], t["gain"] * np.sqrt(t["var"])
    order = np.sort(np.unique(value))
    for i in range(12):
        j = i ^ 1
        rival = order[-1] if value[i] < order[-1] else order[-2]
        theta = np.hypot(s[i], s[j])

        def g(x, i=i, j=j, theta=theta):
            p = (m[i] + x - m[j]) / theta
            return m[j] + theta * (p * stats.norm.cdf(p) + stats.norm.pdf(p))

        if rival - m[j] < 1e-3 * theta:
            continue
        slow = optimize.brentq(lambda x, g=g, rival=rival: g(x) - rival, -40, 40)
        assert abs(t0[i] - slow) <= 0.01 * theta


def test_single_leaf_actions_start_at_the_static_rate():
    rng = np.random.default_rng(1)
    for n in (2, 5, 40):
        t = table(rng, n, n)
        t["noise_var"] *= 30  # large best batches, so that rounding them is nothing
        t["remaining"] = 10**6
        columns = {k: t[k] for k in ("mean", "var", "noise_var", "gain", "offset")}
        rate, batch = static_rates(**columns, remaining=t["remaining"])
        got = GRAPH.matrix(t)
        near = rate > 1e-30
        share = got.first_order[near] / rate[near]
        assert np.all(share >= (1 - ROUGH_BATCH) * (1 - FEATURE_FIT))
        assert np.all(share <= 1 + FEATURE_FIT)
        assert np.all(np.abs(got.batch - batch) <= 1 + 0.01 * batch)


@pytest.mark.parametrize("batch", [None, 1, 6])
def test_static_values_start_exact_but_for_the_fit(batch):
    rng = np.random.default_rng(2)
    graph = FeatureGraph(build_graph(horizon=0.0, batch=batch))
    assert graph.names == ("threshold", "step")
    for n, actions in ((1, 1), (2, 1), (9, 3), (40, 5)):
        t = table(rng, n, actions)
        t["noise_var"] *= 30
        t["remaining"] = 10**6
        t["mean"][-1] = t["mean"].max()  # near ties and, for n > 1, a leaf that equals the best
        columns = {k: t[k] for k in ("mean", "var", "noise_var", "gain", "offset")}
        exact, batches = static_rates(**columns, remaining=t["remaining"], batch=batch)
        got = graph.matrix(t)
        near = exact > 1e-30
        assert np.any(near) or n == 1
        np.testing.assert_allclose(got.first_order[near], exact[near], rtol=FEATURE_FIT)
        assert np.all(got.first_order[exact == 0] < 1e-290)
        if batch is None:
            assert np.all(np.abs(got.batch - batches)[near] <= 1 + 0.01 * batches[near])
        else:
            assert np.all(got.batch == batch)


def test_two_leaves_that_tie_for_the_best_are_each_others_static_rival():
    t = table(np.random.default_rng(3), 3, 1)
    t.update(mean=np.array([2.0, 2.0, 0.0]), gain=np.ones(3), offset=np.zeros(3))
    x = FeatureGraph(build_graph(horizon=0.0)).matrix(t).x
    assert x[0, 0] == x[1, 0] == 0 < x[2, 0]


def test_a_fixed_batch_is_the_same_whatever_remains():
    graph = FeatureGraph(build_graph(batch=5))
    t = table(np.random.default_rng(4), 12, 3)
    first, last = (graph.matrix({**t, "remaining": left}) for left in (1, 10**6))
    for a, b in zip(first, last, strict=True):
        np.testing.assert_array_equal(a, b)
    assert np.all(first.batch == 5)
    v, n = t["gain"] ** 2 * t["var"], t["gain"] ** 2 * t["noise_var"]
    np.testing.assert_allclose(first.unit, v / np.sqrt(v + n / 5), rtol=CLOSED_FORM)


@pytest.mark.parametrize("batch", [None, 4])
def test_a_far_horizon_starts_like_the_infinite_one(batch):
    t = table(np.random.default_rng(5), 20, 5)
    starts = {
        h: FeatureGraph(build_graph(horizon=h, batch=batch)).matrix(t).first_order for h in (1e9, np.inf)
    }
    near = starts[np.inf] > 1e-12
    share = starts[np.inf][near] / starts[1e9][near]
    if batch is None:  # the infinite one starts from a rough batch
        assert np.all(share >= (1 - ROUGH_BATCH) * (1 - FEATURE_FIT))
        assert np.all(share <= 1 + FEATURE_FIT)
    else:
        np.testing.assert_allclose(share, 1.0, rtol=FEATURE_TABLE)


def test_a_single_action_of_finite_horizon_is_worth_something():
    t = table(np.random.default_rng(6), 6, 1)
    got = FeatureGraph(build_graph(horizon=3.0, batch=1)).matrix(t)
    exact = voc.price(tree_of(t), Query(horizon=3.0, batch=1)).voc
    # One action has no rival: all that is gained is that its leaves are known better.
    large = exact > 1e-3 * exact.max()
    assert large.sum() > 2
    # The siblings' maximum is no normal one, so only the size is right.
    assert np.all(np.abs(np.log(got.first_order[large] / exact[large])) < np.log(3))


@both
@settings(deadline=None, max_examples=30, derandomize=True)
@given(seeds, st.sampled_from([1e-8, 1e-3, 7.0, 1e6, 1e100]), st.sampled_from([0.0, 1e-3, 5.0, -1e4]))
def test_scale_and_shift_of_utilities_change_no_feature(graph, seed, scale, shift):
    rng = np.random.default_rng(seed)
    n = int(rng.integers(1, 50))
    t = table(rng, n, int(rng.integers(1, n + 1)))
    moved = {
        **t,
        "mean": t["mean"] * scale,
        "var": t["var"] * scale**2,
        "noise_var": t["noise_var"] * scale**2,
        "offset": (t["offset"] + shift) * scale,
    }
    a, b = graph.matrix(t), graph.matrix(moved)
    np.testing.assert_allclose(b.x, a.x, rtol=ONNX_FLOAT, atol=ONNX_FLOAT)
    np.testing.assert_allclose(b.unit, a.unit * scale, rtol=RELATIVE_TAIL)
    assert np.all(np.abs(a.batch - b.batch) <= 1)


@both
@settings(deadline=None, max_examples=30, derandomize=True)
@given(seeds)
def test_relabelling_leaves_and_actions_permutes_the_rows(graph, seed):
    rng = np.random.default_rng(seed)
    n = int(rng.integers(2, 50))
    n_actions = int(rng.integers(1, min(n, 8) + 1))
    t = table(rng, n, n_actions)
    order = rng.permutation(n)
    name = rng.permutation(n_actions)
    moved = {k: v[order] if isinstance(v, np.ndarray) else v for k, v in t.items()}
    moved["action"] = name[moved["action"]]
    a, b = graph.matrix(t), graph.matrix(moved)
    np.testing.assert_allclose(b.x, a.x[order], rtol=FEATURE_ORDER, atol=FEATURE_ORDER)


@both
@settings(deadline=None, max_examples=60, derandomize=True)
@given(seeds, st.floats(-12, 12), st.floats(-8, 8), st.floats(-8, 8))
def test_decades_of_scale_and_variance_give_finite_numbers(graph, seed, scale, spread, noise):
    rng = np.random.default_rng(seed)
    n = int(rng.integers(1, 60))
    t = table(rng, n, int(rng.integers(1, n + 1)), int(10 ** rng.uniform(0, 15)))
    t["var"] = t["var"] * 10.0 ** (scale + spread * rng.random(n)) * (rng.random(n) < 0.8)
    t["noise_var"] = t["noise_var"] * 10.0 ** (scale + noise * rng.random(n))
    t["mean"] = t["mean"] * 10.0 ** (scale / 2 + rng.uniform(-3, 3))
    got = graph.matrix(t)
    assert all(np.all(np.isfinite(part)) for part in got)
    assert np.all(got.first_order >= 0)
    assert np.all(got.unit >= 0)
    assert np.all(got.unit[t["var"] == 0] == 0)
    assert np.all((got.batch >= 1) & (got.batch <= t["remaining"]))


@both
def test_extreme_finite_inputs_give_finite_numbers(graph):
    for mean in (-1e100, 0.0, 1e100):
        for var in (0.0, 1e-300, 1e200):
            for noise in (1e-300, 1.0, 1e200):
                t = table(np.random.default_rng(2), 6, 3)
                t["mean"][2], t["var"][2], t["noise_var"][2] = mean, var, noise
                got = graph.matrix(t)
                assert all(np.all(np.isfinite(part)) for part in got), (mean, var, noise)


@both
def test_one_action_and_no_rollout_left_are_worth_nothing(graph):
    rng = np.random.default_rng(3)
    for n in (1, 7, 300):
        assert np.all(graph.matrix(table(rng, n, 1)).first_order == 0)
    got = graph.matrix(table(rng, 9, 4, remaining=0))
    assert np.all(got.first_order == 0)
    assert np.all(got.unit == 0)
    assert np.all(got.batch == 0)


@both
def test_thousands_of_leaves(graph):
    rng = np.random.default_rng(4)
    for n_actions in (1, 2, 64, 4096):
        got = graph.matrix(table(rng, 4096, n_actions))
        assert all(np.all(np.isfinite(part)) for part in got)


@both
def test_rows_of_many_trees_equal_each_tree_alone(graph):
    columns = rows(np.random.default_rng(5), 12)
    whole = graph.matrix(columns)
    for i in range(12):
        at = columns["tree"] == i
        alone = graph.matrix({k: v[at] for k, v in columns.items() if k != "tree"})
        for a, b in zip(whole, alone, strict=True):
            np.testing.assert_array_equal(a[at], b)


def test_bad_columns_are_named():
    t = table(np.random.default_rng(6), 6, 2)
    with pytest.raises(InputError, match="var: is missing"):
        GRAPH.matrix({k: v for k, v in t.items() if k != "var"})
    with pytest.raises(InputError, match="var: must have 6 rows"):
        GRAPH.matrix({**t, "var": t["var"][:5]})
    with pytest.raises(InputError, match="side by side"):
        GRAPH.matrix({**t, "tree": np.array([0, 1, 0, 1, 0, 1])})


@pytest.mark.parametrize("lean", [False, True])
def test_the_graph_is_clean_and_the_same_every_time(lean):
    model = build_graph(lean=lean)
    onnx.checker.check_model(model, full_check=True)
    again = build_graph(lean=lean)
    assert model.SerializeToString(deterministic=True) == again.SerializeToString(deterministic=True)


def test_a_leaf_whose_siblings_beat_the_rival_for_sure_starts_below_any_value():
    t = table(np.random.default_rng(8), 4, 2)
    t["mean"], t["var"] = np.array([9.0, 8.0, 0.0, 0.5]), np.full(4, 0.3)
    t["gain"], t["offset"], t["action"] = np.ones(4), np.zeros(4), np.array([0, 0, 1, 1])
    start = GRAPH.matrix(t).first_order
    assert np.all(start[:2] < 1e-290)
    assert np.all(start[2:] > 1e-200)


def test_no_recorded_tree_is_too_sure_for_the_table():
    """Siblings that are next to sure once left a variance below 0."""
    seen = 0
    for path in sorted(TRACES.glob("*.jsonl.gz")):
        for _, tree in read_trees(path):
            if tree.belief != "gaussian" or tree.has_chance or tree.cov is not None:
                continue
            leaves = leaf_table(tree)
            columns = {
                k: getattr(leaves, k) for k in ("mean", "var", "noise_var", "gain", "offset", "action")
            }
            n = len(columns["mean"])
            got = GRAPH.matrix({**columns, "cost": np.zeros(n), "remaining": tree.remaining or 1})
            assert np.all(got.first_order >= 0)
            assert np.all(np.isfinite(got.x))
            seen += 1
    assert seen >= 500


def test_lean_features_are_the_same_columns_from_fewer_nodes():
    columns = rows(np.random.default_rng(12), 30)
    rich, lean = GRAPH.matrix(columns), LEAN.matrix(columns)
    assert LEAN.names == GRAPH.names
    assert len(LEAN.model.graph.node) == len(GRAPH.model.graph.node) - 7
    assert np.all(np.median(np.abs(lean.x - rich.x), axis=0) < FEATURE_TABLE)  # tables of other cells
    z = lean.x[:, 0].astype(float)
    near = np.abs(z) < 5  # farther out, float32 of z shows
    assert near.sum() > 300
    start = lean.unit * np.exp(-(z**2) / 2)
    np.testing.assert_allclose(lean.first_order[near], start[near], rtol=ONNX_FLOAT)


@pytest.mark.parametrize("horizon", [0.0, 4.0])
def test_lean_features_are_of_dynamic_values(horizon):
    with pytest.raises(InputError, match="lean: must be of an infinite horizon; got"):
        build_graph(horizon=horizon, lean=True)
