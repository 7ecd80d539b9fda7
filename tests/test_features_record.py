"""The features of record rows: the start value, and what must not move them."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import onnx
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import BACKUP_START, CLOSED_FORM, FEATURE_FIT, ONNX_FLOAT, RELATIVE_TAIL

from distill.backup import backup_of
from distill.fallback import closed_form_values
from distill.family import draw, load_family
from distill.feature_graph import FeatureGraph
from distill.features import build_graph as gaussian_graph
from distill.features_record import FEATURE_NAMES, build_graph
from distill.query import Query
from distill.scorer_inputs import LEAF_TABLE, RECORD
from distill.tree import leaf_table
from distill.voc import price

FAMILIES = Path(__file__).parents[1] / "datasets" / "families"
GRAPH = FeatureGraph(build_graph())
seeds = st.integers(0, 2**32 - 1)


def drawn(family, index):
    return draw(load_family(FAMILIES / f"{family}.toml"), 6, index)


@pytest.mark.parametrize("family", ["crossing-traffic", "shared-aisles"])
@pytest.mark.parametrize("batch", [None, 3])
def test_the_start_is_the_first_order_value(family, batch):
    graph = FeatureGraph(build_graph(batch=batch))
    for i in range(4):
        tree = drawn(family, i)
        rows = {**backup_of(tree).rows(), "noise_ratio": backup_of(tree).rows()["noise_ratio"] + 50}
        got = graph.matrix({**rows, "remaining": 10**5})
        want, k = closed_form_values(RECORD, rows, 1e5, batch)
        near = (want > 1e-30) & (rows["other_slope"] == 0)
        np.testing.assert_allclose(got.first_order[near], want[near], rtol=FEATURE_FIT)
        assert np.all(np.abs(got.batch - k)[near] <= 1 + 0.01 * k[near])


def test_the_start_is_close_to_the_exact_rate_where_chance_decides():
    lost = best = 0.0
    for i in range(25):
        tree = drawn("crossing-traffic", 100 + i)
        exact = price(tree, Query(math.inf, None, tree.remaining)).voc
        start = GRAPH.matrix({**backup_of(tree).rows(), "remaining": tree.remaining}).first_order
        best += exact.max()
        lost += exact.max() - exact[int(np.argmax(start))]
    assert lost < 0.02 * best


def test_flat_trees_start_where_the_leaf_table_does():
    graph = FeatureGraph(gaussian_graph())
    for i in range(6):
        tree = drawn("cold-store", i)
        found = leaf_table(tree)
        columns = {k: getattr(found, k) for k in LEAF_TABLE.columns}
        a = graph.matrix({**columns, "remaining": tree.remaining})
        b = GRAPH.matrix({**backup_of(tree).rows(), "remaining": tree.remaining})
        near = a.first_order > 1e-3 * a.first_order.max()
        if a.first_order.max() > 1e-8:
            np.testing.assert_allclose(b.first_order[near], a.first_order[near], rtol=BACKUP_START)


@settings(deadline=None, max_examples=25, derandomize=True)
@given(seeds, st.sampled_from([1e-8, 7.0, 1e6]))
def test_the_unit_of_utility_changes_no_feature(seed, scale):
    rng = np.random.default_rng(seed)
    rows = random_rows(rng, int(rng.integers(1, 40)))
    moved = {k: x * scale if k in ("slope", "other_slope", "spread", "cost") else x for k, x in rows.items()}
    a, b = GRAPH.matrix(rows), GRAPH.matrix(moved)
    normal = np.minimum(a.first_order, b.first_order) > 1e-290  # doubles lose digits below
    np.testing.assert_allclose(b.x[normal], a.x[normal], rtol=ONNX_FLOAT, atol=RELATIVE_TAIL)
    np.testing.assert_allclose(b.first_order[normal], a.first_order[normal] * scale, rtol=CLOSED_FORM)
    assert np.all(np.maximum(a.first_order, b.first_order)[~normal] < 1e-280)


def random_rows(rng, n):
    size = 10.0 ** rng.uniform(-12, 12, n)
    rows = {name: rng.normal(0, 5, n) for name in ("crossing", "other_crossing", "bend", "now")}
    slope = rng.gamma(1, 1, n) * size * (rng.random(n) < 0.8)
    return {
        **rows,
        "slope": slope,
        "other_slope": slope * rng.random(n) * (rng.random(n) < 0.3),
        "spread": slope * 1.5,
        "noise_ratio": 10.0 ** rng.uniform(-8, 8, n),
        "cost": np.zeros(n),
        "remaining": int(10 ** rng.uniform(0, 12)),
    }


@pytest.mark.parametrize("batch", [None, 1, 2**40])
def test_extremes_give_finite_numbers(batch):
    graph = FeatureGraph(build_graph(batch=batch))
    assert graph.names == FEATURE_NAMES
    for seed in range(20):
        rng = np.random.default_rng(seed)
        rows = random_rows(rng, int(rng.integers(1, 300)))
        rows["crossing"] = rows["crossing"] * 10.0 ** rng.uniform(-12, 8)
        rows["noise_ratio"][0] = 1e18
        got = graph.matrix(rows)
        assert all(np.all(np.isfinite(part)) for part in got)
        assert np.all(got.first_order >= 0)
        assert np.all(got.unit[rows["slope"] == 0] == 0)


def test_nothing_left_is_worth_nothing():
    got = GRAPH.matrix({**random_rows(np.random.default_rng(0), 9), "remaining": 0})
    assert np.all(got.first_order == 0)
    assert np.all(got.unit == 0)
    assert np.all(got.batch == 0)


def test_the_graph_is_clean_and_the_same_every_time():
    model = build_graph()
    onnx.checker.check_model(model, full_check=True)
    assert model.SerializeToString(deterministic=True) == build_graph().SerializeToString(deterministic=True)
