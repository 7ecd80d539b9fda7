"""Peers: equal to exact values where they must be, picks as their rules say, each with its own time."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
from ladder import (
    CLOSED_FORM,
    CLOSED_FORM_RATE,
    EXACT,
    KINK_OF_NINE,
    KINK_OF_SIBLINGS,
    SAMPLED_BEST,
    STANDARD_ERRORS,
)
from leaf_tables import table
from small_dataset import FAMILY, labelled

from distill import voc
from distill.candidates import Candidates
from distill.family import load_family
from distill.generate import Asked, generate
from distill.metrics import measure
from distill.peers import left_out, measure_peers, peers, timed_cases
from distill.query import Query
from distill.scorer_inputs import LEAF_TABLE, RECORD, WIN_LOSS_TABLE, InputKind
from distill.timing import decisions, tree_of
from distill.validate import static_values

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


AS_NORMALS = "static closed form, leaves as normals"


def coins(rng: np.random.Generator, n: int, n_actions: int):
    """A win/loss leaf table."""
    low = rng.normal(0, 0.1, n)
    return {
        "alpha": rng.integers(1, 6, n).astype(float),
        "beta": rng.integers(1, 6, n).astype(float),
        "low": low,
        "high": low + rng.uniform(0.5, 1.5, n),
        "gain": rng.uniform(0.9, 1, n),
        "offset": rng.normal(0, 0.1, n),
        "cost": np.zeros(n),
        "action": np.arange(n) % n_actions,
    }


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
    np.testing.assert_allclose(matched[large], exact[large], rtol=KINK_OF_NINE)
    draws = [ours["Monte Carlo in equal time"](t, 50) for _ in range(100)]
    spread = np.std(draws, axis=0) / math.sqrt(100)
    slack = STANDARD_ERRORS * spread + 2 * SAMPLED_BEST * exact  # of 64 samples
    assert np.all(np.abs(np.mean(draws, axis=0) - exact) <= slack)


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
    np.testing.assert_allclose(matched[large], exact[large], rtol=KINK_OF_SIBLINGS)


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
    assert abs(share - expected) < STANDARD_ERRORS * math.sqrt(expected * (1 - expected) / 2000)


def test_uct_prefers_the_less_visited_of_equals() -> None:
    t = one_leaf_each(6)
    t.update(mean=np.zeros(4), offset=np.zeros(4), gain=np.ones(4), var=np.ones(4))
    t["noise_var"] = np.array([9.0, 2.0, 5.0, 7.0])  # as if so many rollouts were behind each
    assert int(np.argmax(peers(RATE, 4)["UCT"](t, 9))) == 1


def test_one_trial_is_valued_exactly_and_wins_are_sampled_as_wins() -> None:
    rng = np.random.default_rng(3)
    t = coins(rng, 24, 5)
    exact = voc.price(tree_of(t), Query(horizon=0, batch=1)).voc
    ours = peers(RATE, 64, kind=WIN_LOSS_TABLE)
    got = ours["static VOC of one rollout"](t, 50)
    np.testing.assert_allclose(got, exact, rtol=CLOSED_FORM, atol=EXACT)
    assert np.count_nonzero(exact) > 0
    few = coins(np.random.default_rng(0), 8, 4)  # two an action: later choices count
    value = {"horizon": "inf", "batch": 2}
    exact = voc.price(tree_of(few), Query(horizon=math.inf, batch=2)).voc
    assert exact.max() > 1e-2
    sampled = peers(value, 400, kind=WIN_LOSS_TABLE)["Monte Carlo in equal time"]
    draws = [sampled(few, 50) for _ in range(20)]
    spread = np.std(draws, axis=0) / math.sqrt(20)
    slack = STANDARD_ERRORS * spread + SAMPLED_BEST * exact + CLOSED_FORM
    assert np.all(np.abs(np.mean(draws, axis=0) - exact) <= slack)


def test_win_loss_leaves_go_as_normals_of_their_moments_where_it_is_said() -> None:
    t = coins(np.random.default_rng(5), 12, 3)
    total = t["alpha"] + t["beta"]
    share, span = t["alpha"] / total, t["high"] - t["low"]
    var = span**2 * share * (1 - share) / (total + 1)
    same = {name: t[name] for name in ("gain", "offset", "cost", "action")}
    normal = {**same, "mean": t["low"] + span * share, "var": var, "noise_var": var * total}
    wins, normals = peers(RATE, 4, kind=WIN_LOSS_TABLE), peers(RATE, 4)
    same_names = {name: name for name in ("moment matching with quadrature", "UCT")}
    for name, other in {**same_names, AS_NORMALS: "static closed form"}.items():
        np.testing.assert_allclose(wins[name](t, 40), normals[other](normal, 40), rtol=CLOSED_FORM_RATE)


def test_thompson_draws_win_rates() -> None:
    t = coins(np.random.default_rng(6), 2, 2)
    t |= {"alpha": np.array([3.0, 1.0]), "beta": np.array([1.0, 1.0]), "low": np.zeros(2), "high": np.ones(2)}
    t |= {"gain": np.ones(2), "offset": np.zeros(2)}
    thompson = peers(RATE, 4, kind=WIN_LOSS_TABLE)["Thompson sampling"]
    share = np.mean([np.argmax(thompson(t, 9)) == 0 for _ in range(2000)])
    # P(X > U) = E X = 3/4 for U uniform.
    assert abs(share - 0.75) < STANDARD_ERRORS * math.sqrt(0.75 * 0.25 / 2000)


def test_what_is_not_defined_is_left_out_with_its_reason() -> None:
    static = {"horizon": 0.0, "batch": None}
    assert left_out(LEAF_TABLE, RATE) == left_out(WIN_LOSS_TABLE, RATE) == left_out(RECORD, RATE) == {}
    assert set(left_out(RECORD, RATE, with_cov=True)) == {"moment matching with quadrature"}
    gone = left_out(RECORD, static, with_cov=True)
    assert set(gone) == {"moment matching with quadrature", "Monte Carlo in equal time", "static closed form"}
    assert all(len(reason) > 10 for reason in gone.values())
    assert "static closed form" in left_out(WIN_LOSS_TABLE, static)
    assert AS_NORMALS not in left_out(WIN_LOSS_TABLE, static)
    assert "static VOC of one rollout" in left_out(LEAF_TABLE, {"horizon": 0.0, "batch": 1})
    other = InputKind("wish list", ("mean",), True)
    assert set(left_out(other, {"horizon": "varies", "batch": None})) == NAMES | {AS_NORMALS}


def test_all_are_judged_on_the_same_trees_with_their_own_time(tmp_path) -> None:
    whole, about = Candidates.read(labelled(tmp_path / "data", trees=60))
    cases = decisions({**whole.columns, "tree": whole.tree}, 16, 5, 0)
    found, gone = measure_peers(whole, cases, about["value"], equal_us=50.0, n_boot=20)
    json.dumps(found, allow_nan=False)
    assert set(found) == NAMES
    assert gone == {}
    share = {name: m["forgone_percent"]["value"] for name, m in found.items()}
    assert share["first-order closed form"] < share["static closed form"] < share["Thompson sampling"]
    assert all(0 < m["latency"]["p50_us"] <= m["latency"]["p99_us"] for m in found.values())
    assert found["Monte Carlo in equal time"]["samples"] in (4, 6, 8, 12, 16, 24, 32, 48, 64)


@pytest.mark.parametrize("family", ["on-time", "crossing-traffic", "shared-aisles"])
def test_every_input_has_its_peers_on_its_own_trees(tmp_path, family: str) -> None:
    asked = {"horizon": 0.0} if family == "shared-aisles" else {}
    source = load_family(FAMILY.parent / f"{family}.toml")
    generate(source, tmp_path / "data", trees=40, seed=3, asked=Asked(**asked))
    whole, about = Candidates.read(tmp_path / "data")
    cases = timed_cases(whole, about["value"], 10, 0)[:4]
    found, gone = measure_peers(whole, cases, about["value"], equal_us=50.0, n_boot=20)
    json.dumps([found, gone], allow_nan=False)
    assert set(found) | set(gone) == (NAMES | {AS_NORMALS} if family == "on-time" else NAMES)
    assert not set(found) & set(gone)
    assert bool(gone) == (family == "shared-aisles")
    share = {name: m["forgone_percent"]["value"] for name, m in found.items()}
    if "static closed form" in found:  # the very values that stand beside every scorer
        static = measure(whole.tree, whole.label, static_values(whole), n_boot=2)
        assert share["static closed form"] == static.to_json()["forgone_percent"]["value"]
    assert share["first-order closed form"] < share["UCT"]
    assert share["first-order closed form"] < share["Thompson sampling"]
    assert all(0 < m["latency"]["p50_us"] <= m["latency"]["p99_us"] for m in found.values())
