"""Trees where more is at stake are taken more often, and weights take that back."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, EXACT, RELATIVE_TAIL, STANDARD_ERRORS

from distill import close_calls, metrics, shards, voc
from distill import train as training
from distill.candidates import Candidates, split_by_tree
from distill.close_calls import STRATA, at_stake, choose, stratum
from distill.family import draw, load_family
from distill.generate import Asked, generate
from distill.learners import LinearLearner
from distill.query import Query, scale_of
from distill.record import from_record
from distill.runtime import Scorer

FAMILIES = Path(__file__).parents[1] / "datasets" / "families"
COLD = load_family(FAMILIES / "cold-store.toml")

_stakes = st.lists(st.sampled_from([0.0, 1e-5, 1e-4, 3e-3, 0.02, 0.1, 0.3]), min_size=1, max_size=60)


@settings(max_examples=200, deadline=None, derandomize=True)
@given(_stakes, st.data())
def test_as_many_as_asked_none_twice_each_stratum_its_share(stakes, data):
    x = np.array(stakes)
    n = data.draw(st.integers(1, len(x)))
    rows, weight = choose(x, n, np.random.default_rng(data.draw(st.integers(0, 99))))
    assert len(rows) == n == len(set(rows.tolist()))
    assert np.array_equal(rows, np.sort(rows))
    chance = n / len(x) / weight
    assert np.all((chance > 0) & (chance <= 1 + CLOSED_FORM))
    for s in range(len(STRATA)):
        inside = stratum(x) == s
        if np.any(inside):
            one = np.unique(chance[stratum(x[rows]) == s])
            assert len(one) <= 1
            if len(one):
                assert abs(len(rows[inside[rows]]) - one[0] * inside.sum()) <= 1 + CLOSED_FORM
    if n == len(x):
        assert np.allclose(weight, 1, rtol=CLOSED_FORM, atol=0)


def test_weighted_sums_are_right_on_average():
    """Horvitz-Thompson: whatever is summed, and however few are drawn."""
    rng = np.random.default_rng(0)
    x = rng.choice([0.0, 1e-3, 0.05, 0.2], 40, p=[0.4, 0.3, 0.2, 0.1])
    y = rng.normal(size=40) + 5 * x
    sums = []
    for seed in range(2000):
        rows, weight = choose(x, 11, np.random.default_rng(seed))
        sums.append(np.sum(weight * y[rows]) / 11)
    error = np.std(sums) / np.sqrt(len(sums))
    assert abs(np.mean(sums) - y.mean()) < STANDARD_ERRORS * error
    unweighted = [np.mean(y[choose(x, 11, np.random.default_rng(s))[0]]) for s in range(2000)]
    assert abs(np.mean(unweighted) - y.mean()) > STANDARD_ERRORS * error


def test_stakes_of_independent_gaussian_trees_are_the_engine_s_static_voc():
    trees = [draw(COLD, 3, i) for i in range(60)]
    for tree, x in zip(trees, at_stake(trees), strict=True):
        best = voc.price(tree, Query(horizon=0, batch=tree.remaining)).voc.max()
        assert math.isclose(x * scale_of(tree), best, rel_tol=CLOSED_FORM)


@pytest.mark.parametrize("name", ["cold-store", "shared-aisles", "crossing-traffic", "on-time"])
def test_every_kind_of_tree_has_stakes_that_scale_does_not_move(name):
    family = load_family(FAMILIES / f"{name}.toml")
    trees = [draw(family, 0, i) for i in range(40)]
    x = at_stake(trees)
    assert np.all((x >= 0) & (x < 0.5))
    assert len(set(stratum(x))) >= 2
    spent = at_stake(trees, remaining=0)
    assert np.all(spent == 0)
    assert np.all(at_stake(trees, remaining=10**6) >= x * (1 - CLOSED_FORM))


def test_nothing_is_at_stake_without_uncertainty_and_all_where_no_budget_is_known():
    tree = draw(COLD, 0, 0)
    sure = replace(tree, var=np.zeros(tree.n_leaves))
    open_end = replace(tree, remaining=None)
    assert at_stake([sure])[0] == 0
    assert at_stake([open_end])[0] >= at_stake([tree])[0]
    coin = from_record(
        {"format": "belief-tree/1", "parent": [-1, 0, 0], "kind": ["decision", "leaf", "leaf"],
         "alpha": [None, 1, 1], "beta": [None, 1, 1], "low": [None, 0, 0], "high": [None, 1, 1]}
    )  # fmt: skip
    assert at_stake([coin])[0] > 0.3


def _figures(c, weighted=True, n_boot=400):
    """Of the pick with the largest standard deviation, which loses much."""
    score = c.columns["gain"] * np.sqrt(c.columns["var"])
    weight = c.tree_weights if weighted else None
    return metrics.measure(c.tree, c.label, score, weight=weight, n_boot=n_boot)


def _distance(a, b):
    """Between two figures, in standard errors that their intervals imply."""
    errors = [(e.high - e.low) / (2 * 1.96) for e in (a, b)]
    return abs(a.value - b.value) / math.hypot(*errors)


def test_weighted_figures_are_those_of_the_trees_as_they_came_and_intervals_cover_them(tmp_path):
    """One finite population, sampled again and again: no bias beyond a ratio's, and coverage as stated."""
    generate(COLD, tmp_path, trees=800, seed=4, asked=Asked(horizon=0))
    everything, _ = Candidates.read(tmp_path)
    stakes = at_stake([tree for _, tree in shards.read_trees(tmp_path)])
    whole, names = _figures(everything, n_boot=1), ("forgone", "relative_forgone", "top1")
    values, covered, ignored = {n: [] for n in names}, dict.fromkeys(names, 0), []
    for seed in range(100):
        rows, weight = choose(stakes, 160, np.random.default_rng(seed))
        keep = np.zeros(800, dtype=bool)
        keep[rows] = True
        part = everything.of_trees(keep)
        part = replace(part, weight=part.groups.spread(weight))
        found = _figures(part, n_boot=200)
        for name in names:
            e = getattr(found, name)
            values[name].append(e.value)
            covered[name] += e.low <= getattr(whole, name).value <= e.high
        ignored.append(_figures(part, weighted=False, n_boot=1).relative_forgone.value)
    for name in names:
        truth, spread = getattr(whole, name).value, np.std(values[name])
        # A ratio of two estimates is off by some 1/n of itself: less than a fifth of its spread here.
        assert abs(np.mean(values[name]) - truth) < 0.2 * spread + STANDARD_ERRORS * spread / np.sqrt(100)
        assert covered[name] >= 0.9 * 100, name
    assert abs(np.mean(ignored) - whole.relative_forgone.value) > np.std(ignored)


@pytest.mark.slow
def test_a_close_call_dataset_agrees_with_a_plain_one_of_other_trees(tmp_path):
    static = Asked(horizon=0)
    generate(COLD, tmp_path / "close", trees=1000, seed=1, asked=static, close_calls=4)
    generate(COLD, tmp_path / "plain", trees=4000, seed=2, asked=static)
    c, p = (Candidates.read(tmp_path / name)[0] for name in ("close", "plain"))
    close, plain = _figures(c), _figures(p)
    for name in ("forgone", "relative_forgone", "top1"):
        assert _distance(getattr(close, name), getattr(plain, name)) < STANDARD_ERRORS, name


def test_weights_reach_candidates_and_their_parts(tmp_path):
    generate(COLD, tmp_path / "close", trees=200, seed=1, asked=Asked(horizon=0), close_calls=3)
    generate(COLD, tmp_path / "plain", trees=20, seed=1, asked=Asked(horizon=0))
    close, _ = Candidates.read(tmp_path / "close")
    plain, _ = Candidates.read(tmp_path / "plain")
    assert plain.weight is None
    assert plain.tree_weights is None
    assert len(close.tree_weights) == 200
    assert abs(close.tree_weights.mean() - 1) < 0.1
    keep = close.tree_weights > 1
    assert 0 < np.count_nonzero(keep) < 200
    assert np.array_equal(close.of_trees(keep).tree_weights, close.tree_weights[keep])
    # A tree of high stakes is common in the sample, and counts for less.
    weight_of = dict(zip(close.groups.ids, close.tree_weights, strict=True))
    trees = list(shards.read_trees(tmp_path / "close"))
    weights = np.array([weight_of[number] for number, _ in trees])
    low = stratum(at_stake([tree for _, tree in trees])) <= 1
    assert weights[low].min() > weights[~low].max()


def test_training_and_its_figures_use_the_weights(tmp_path, monkeypatch):
    seen = []

    class Spy(LinearLearner):
        def fit(self, x, y, sample_weight=None, **more):
            seen.append(sample_weight)
            return super().fit(x, y, sample_weight=sample_weight, **more)

    spy = training.Recipe("linear", lambda seed: Spy(target="log_ratio", random_state=seed))
    monkeypatch.setitem(training.RECIPES, "linear", spy)
    generate(COLD, tmp_path / "d", trees=250, seed=1, close_calls=2)
    front = training.train(tmp_path / "d", tmp_path / "out", recipes=["linear"], n_boot=20)
    split = split_by_tree(Candidates.read(tmp_path / "d")[0], 0)
    given = training.row_weights(split.fit.groups, split.fit.label) * split.fit.weight
    used = seen[0] > 0
    assert used.mean() > 0.9
    assert np.array_equal(seen[0][used], given[used])

    held_out = split.held_out
    scorer = Scorer.load(tmp_path / "out" / "linear.onnx")
    score = scorer.score(**held_out.columns, tree=held_out.tree).voc
    shares = {}
    for name, weight in (("with", held_out.tree_weights), ("without", None)):
        found = metrics.measure(held_out.tree, held_out.label, score, weight=weight, n_boot=1)
        by_chance = metrics.random_forgone(held_out.tree, held_out.label, weight=weight)[0]
        shares[name] = (found.forgone.value, found.top1.value, by_chance)
    kept = front["scorers"][0]["held_out"]
    told = (
        kept["forgone_percent"]["value"],
        kept["top1_percent"]["value"],
        front["beside"]["random pick"]["forgone_percent"]["value"],
    )
    assert np.allclose(told, shares["with"], rtol=CLOSED_FORM, atol=EXACT)
    assert not np.any(np.isclose(told, shares["without"], rtol=RELATIVE_TAIL))


def test_counts_go_by_stratum():
    assert close_calls.count(stratum(np.array([0, 0.2, 0.3, 0.02]))) == [1, 0, 1, 2]
