"""Peers: equal to exact values where they must be, picks as their rules say, each with its own time."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
from ladder import CLOSED_FORM_RATE
from leaf_tables import table
from small_dataset import labelled

from distill import voc
from distill.candidates import Candidates
from distill.peers import measure_peers, peers
from distill.query import Query
from distill.timing import decisions, tree_of

RATE = {"horizon": "inf", "batch": None}
NAMES = {
    "first-order closed form",
    "static VOC of one rollout",
    "static closed form",
    "moment matching with quadrature",
    "Monte Carlo in equal time",
    "UCT",
    "Thompson sampling",
}


def one_leaf_each(seed: int = 0, n: int = 4):
    """A tree of single-leaf actions, whose maxima are normal, and best batches of 1."""
    t = table(np.random.default_rng(seed), n, n)
    t["var"] += 1.0
    t["mean"] *= 0.2
    t["offset"] *= 0.2
    t["noise_var"] = 0.05 * t["var"]
    return t


def test_static_peers_are_exact() -> None:
    t = table(np.random.default_rng(1), 20, 4)
    for name, batch in (("static VOC of one rollout", 1), ("static closed form", None)):
        exact = voc.price(tree_of(t), Query(horizon=0, batch=batch, remaining=t["remaining"])).voc
        got = peers(RATE, 4)[name](t, t["remaining"])
        large = exact > 1e-30
        np.testing.assert_allclose(got[large], exact[large], rtol=CLOSED_FORM_RATE)


@pytest.mark.parametrize("batch", [1, pytest.param(3, marks=pytest.mark.slow)])
def test_moments_and_samples_come_close_where_maxima_are_normal(batch: int) -> None:
    value = {"horizon": "inf", "batch": batch}
    t = one_leaf_each(batch)
    exact = voc.price(tree_of(t), Query(horizon=math.inf, batch=batch)).voc
    large = exact > 0.05 * exact.max()
    assert large.sum() > 1
    ours = peers(value, 64)
    matched = ours["moment matching with quadrature"](t, 50)
    np.testing.assert_allclose(matched[large], exact[large], rtol=0.2)  # nine points beside one kink
    draws = [ours["Monte Carlo in equal time"](t, 50) for _ in range(100)]
    spread = np.std(draws, axis=0) / math.sqrt(100)
    assert np.all(np.abs(np.mean(draws, axis=0) - exact) < 5 * spread + 0.1 * exact)


def test_moments_follow_the_siblings() -> None:
    """Two leaves an action: the larger of two normals has the moments of Clark exactly, once."""
    t = table(np.random.default_rng(4), 8, 4)
    t["action"] = np.repeat(np.arange(4), 2)
    t["mean"] *= 0.3
    value = {"horizon": "inf", "batch": 2}
    exact = voc.price(tree_of(t), Query(horizon=math.inf, batch=2)).voc
    matched = peers(value, 4)["moment matching with quadrature"](t, 50)
    assert int(np.argmax(matched)) == int(np.argmax(exact))
    large = exact > 0.2 * exact.max()
    np.testing.assert_allclose(matched[large], exact[large], rtol=0.35)


def test_a_single_action_and_sure_leaves_are_worth_nothing_to_peers_that_value() -> None:
    t = table(np.random.default_rng(2), 6, 1)
    ours = peers(RATE, 8)
    for name in ("moment matching with quadrature", "Monte Carlo in equal time"):
        assert not np.any(ours[name](t, 50))
    sure = {**table(np.random.default_rng(3), 6, 2), "var": np.zeros(6)}
    assert not np.any(ours["moment matching with quadrature"](sure, 50))


def test_thompson_picks_as_often_as_a_leaf_is_drawn_best() -> None:
    t = one_leaf_each(5, n=2)
    m, v = t["gain"] * t["mean"] + t["offset"], t["gain"] ** 2 * t["var"]
    thompson = peers(RATE, 4)["Thompson sampling"]
    share = np.mean([np.argmax(thompson(t, 9)) == 0 for _ in range(2000)])
    z = (m[0] - m[1]) / math.sqrt(v.sum())
    expected = 0.5 * (1 + math.erf(z / math.sqrt(2)))
    assert abs(share - expected) < 4 * math.sqrt(expected * (1 - expected) / 2000)


def test_uct_prefers_the_less_visited_of_equals() -> None:
    t = one_leaf_each(6)
    t.update(mean=np.zeros(4), offset=np.zeros(4), gain=np.ones(4), var=np.ones(4))
    t["noise_var"] = np.array([9.0, 2.0, 5.0, 7.0])  # as if so many rollouts were behind each
    assert int(np.argmax(peers(RATE, 4)["UCT"](t, 9))) == 1


def test_all_are_judged_on_the_same_trees_with_their_own_time(tmp_path) -> None:
    whole, about = Candidates.read(labelled(tmp_path / "data", trees=60))
    cases = decisions({**whole.columns, "tree": whole.tree}, 16, 5, 0)
    found = measure_peers(whole, cases, about["value"], equal_us=50.0, n_boot=20)
    json.dumps(found, allow_nan=False)
    assert set(found) == NAMES
    share = {name: m["forgone_percent"]["value"] for name, m in found.items()}
    assert share["first-order closed form"] < share["static closed form"] < share["Thompson sampling"]
    assert all(0 < m["latency"]["p50_us"] <= m["latency"]["p99_us"] for m in found.values())
    assert found["Monte Carlo in equal time"]["samples"] in (4, 6, 8, 12, 16, 24, 32, 48, 64)
    assert measure_peers(whole, cases, {"horizon": 0.0, "batch": None}, equal_us=50.0) == {}
