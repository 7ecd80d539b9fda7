"""Dynamic VOC with chance nodes: published values, the oracle, other exact methods, extremes."""

from __future__ import annotations

import dataclasses
import json
import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from chance_trees import build, leaf, nested_effects, random_tree
from ladder import CHANCE_LABEL, CLOSED_FORM, QUADRATURE, RELATIVE_TAIL, STANDARD_ERRORS

from distill import voc
from distill.errors import RefusedError
from distill.exact import dynamic_flat, panels, static_independent, sums
from distill.exact.dynamic_chance import METHOD, price
from distill.oracle import chance as oracle
from distill.query import Query, scale_of
from distill.record import from_record
from distill.tree import BeliefTree

PUBLISHED = json.loads((Path(__file__).parents[1] / "data" / "published_chance.json").read_text())["entries"]
DERIVED = [e for e in PUBLISHED if e["group"] == "dynamic_voc"]


def to_come(tree: BeliefTree, horizon: float) -> Any:
    """Variance of M_h per leaf, written out once more."""
    v = np.array(tree.var)
    return np.where(v > 0, v * v / (np.where(v > 0, v, 1.0) + np.array(tree.noise_var) / horizon), 0.0)


# ---------------------------------------------------------------- published and derived values


def binary_tree(depth: int) -> Any:
    below = binary_tree(depth - 1) if depth > 1 else ["leaf"]
    return ["node", [[0.0, 1.0, below]] * 2]


def effects_of(inputs: dict[str, Any]) -> Any:
    if "tree" in inputs:
        return inputs["tree"]
    if "depth" in inputs:
        return binary_tree(inputs["depth"])
    between, within = float(inputs["sg"]), float(inputs["sl"])
    groups = [["node", [[0.0, within, ["leaf"]]] * size] for size in inputs["groups"]]
    return ["node", [[0.0, between, group] for group in groups]]


@pytest.mark.parametrize("entry", [e for e in PUBLISHED if e["group"] == "tree_prior"], ids=lambda e: e["id"])
def test_expected_maximum_of_nested_effects(entry: dict[str, Any]) -> None:
    """Chance nodes with odds 1/2 turn independent effects along a path into a tree's leaves."""
    depth = entry["inputs"].get("depth", 0)
    priced = price(build(nested_effects(effects_of(entry["inputs"]))), Query())
    digits = entry["verified"].partition(".")[2]
    allowed = max(0.6 * 10.0 ** -len(digits), QUADRATURE * 2**depth)  # leaf scale doubles with depth
    assert priced.value[0] == pytest.approx(float(entry["verified"]), abs=allowed)
    assert np.all(priced.voc == 0)  # one action: nothing to choose


@pytest.mark.parametrize("entry", DERIVED, ids=lambda e: e["id"])
def test_derived_dynamic_values(entry: dict[str, Any]) -> None:
    inputs, verified = entry["inputs"], float(entry["verified"])
    pair = ("max", [leaf(0, 1), leaf(0, 1)])
    if entry["id"].startswith("chance_disc"):
        three = ("max", [leaf(0, 1)] * 3)
        tree = build(("edge", 0.0, float(inputs["discount"]), ("mean", [(0.5, pair), (0.5, three)])))
        assert price(tree, Query()).value[0] == pytest.approx(verified, abs=QUADRATURE)
        return
    noise = float(inputs.get("noise_var", 1e-20))  # as good as observed exactly
    pair = ("max", [leaf(0, 1, noise), leaf(0, 1)])
    action = pair
    if "discount" in inputs:
        action = ("edge", 0.0, float(inputs["discount"]), ("mean", [(0.5, pair), (0.5, leaf(0, 1))]))
    tree = build(action, leaf(float(inputs["c"]), 0.0))
    observed = next(i for i in range(tree.n_leaves) if tree.noise_var[i] == noise and tree.var[i] == 1)
    assert price(tree, Query()).voc[observed] == pytest.approx(verified, rel=RELATIVE_TAIL, abs=QUADRATURE)


# ---------------------------------------------------------------- against the oracle

MIXED = (
    "max",
    [("mean", [(0.4, ("max", [leaf(0, 1), leaf(0.2, 2, 3)])), (0.6, leaf(0.1, 0.5))]), leaf(0.3, 0.8)],
)
SURE = ("max", [leaf(0.2, 0), leaf(0, 1)])
ATOMS = ("max", [("mean", [(0.4, SURE), (0.6, ("max", [leaf(0.1, 0.5), leaf(0, 0)]))]), leaf(0.3, 0.8)])
PREFIX = ("mean", [(0.3, ("edge", 0.1, 0.9, ("max", [leaf(0, 1), leaf(0.2, 2, 3)]))), (0.7, leaf(0.1, 0.5))])


@pytest.mark.parametrize("horizon", [math.inf, 2.0])
@pytest.mark.parametrize(
    ("action", "rival"),
    [(MIXED, 0.5), (ATOMS, 0.5), (ATOMS, 1.2), (PREFIX, 0.5)],
    ids=["mixed", "sure", "behind", "prefix"],
)
def test_voc_agrees_with_the_oracle(action: Any, rival: float, horizon: float) -> None:
    tree = build(action, leaf(rival, 0.3))
    priced = price(tree, Query(horizon=horizon, batch=3))
    for i in (int(np.flatnonzero(tree.var)[0]), int(np.flatnonzero(tree.var)[-1])):
        slow = oracle.voc(tree, i, 3, horizon, panels=8, outcomes=1)
        assert priced.voc[i] == pytest.approx(slow, abs=QUADRATURE * scale_of(tree))


@pytest.mark.parametrize("seed", range(24))
def test_action_values_agree_with_the_oracle(seed: int) -> None:
    tree = random_tree(seed, depth=2 + seed % 3, width=2, actions=2, sure=0.3)
    horizon = [math.inf, 2.0, 0.05, 300.0][seed % 4]
    slow = oracle.action_values(tree, tree.mean, to_come(tree, horizon), panels=10)
    assert price(tree, Query(horizon=horizon)).value == pytest.approx(slow, abs=QUADRATURE * scale_of(tree))


@pytest.mark.parametrize("seed", [100, 101, 102])
def test_action_values_of_large_trees_agree_with_sampling(seed: int) -> None:
    tree = random_tree(seed, depth=6, width=4, actions=3)
    mean, error = oracle.monte_carlo_values(tree, tree.mean, to_come(tree, 3.0), 100_000, seed)
    values = price(tree, Query(horizon=3.0)).value
    assert tree.n_leaves > 40
    assert np.all(np.abs(values - mean) <= STANDARD_ERRORS * error + QUADRATURE)


# ---------------------------------------------------------------- against other exact methods


@pytest.mark.parametrize("seed", range(12))
def test_agrees_with_the_flat_method_without_chance_nodes(seed: int) -> None:
    rng = np.random.default_rng(seed)
    spread = [0.0, 1e-6, 1, 1, 1]

    def action() -> Any:
        n = int(rng.integers(1, 8))
        draws = zip(
            rng.normal(size=n),
            rng.choice(spread, n) * rng.lognormal(size=n),
            rng.lognormal(size=n),
            strict=True,
        )
        return ("max", [leaf(*map(float, draw)) for draw in draws])

    tree = build(*(action() for _ in range(rng.integers(1, 6))))
    query = Query(horizon=[math.inf, 2.0, 0.01][seed % 3], batch=int(rng.integers(1, 50)))
    mine, flat = price(tree, query), dynamic_flat.price(tree, query)
    assert mine.value == pytest.approx(flat.value, abs=QUADRATURE * scale_of(tree))
    assert mine.voc == pytest.approx(flat.voc, abs=QUADRATURE * scale_of(tree))
    assert np.all(np.abs(mine.voc - flat.voc) <= mine.error + flat.error)
    if query.horizon == math.inf:
        clear = flat.voc > 1e-6 * scale_of(tree)
        assert mine.voc[clear] == pytest.approx(flat.voc[clear], rel=RELATIVE_TAIL)


def test_late_search_keeps_relative_accuracy() -> None:
    """Where it is the outcome that is unlikely, tiny values keep their digits and so their order."""
    spread = 0.02
    near = ("max", [leaf(0.0, spread**2), leaf(-0.01, spread**2)])
    tree = build(near, leaf(0.25, spread**2))
    query = Query(batch=1000)
    mine, flat = price(tree, query).voc, dynamic_flat.price(tree, query).voc
    assert flat[:2].max() < 1e-20 * spread
    assert mine == pytest.approx(flat, rel=RELATIVE_TAIL, abs=0.0)


def test_a_chance_node_with_one_child_is_that_child() -> None:
    pair = ("max", [leaf(0, 1), leaf(0.3, 2)])
    plain = build(pair, leaf(0.5, 1))
    wrapped = build(("mean", [(1.0, ("max", [("mean", [(1.0, leaf(0, 1))]), leaf(0.3, 2)]))]), leaf(0.5, 1))
    for h in (math.inf, 3.0):
        a, b = price(plain, Query(horizon=h)), price(wrapped, Query(horizon=h))
        assert sorted(b.voc) == pytest.approx(sorted(a.voc), rel=RELATIVE_TAIL)


def test_an_action_of_chance_nodes_only_has_the_static_value_at_an_infinite_horizon() -> None:
    """Expectations pass through chance nodes, so nothing is left to decide later."""
    tree = build(("mean", [(0.3, leaf(0, 1)), (0.7, leaf(1, 2, 4.0))]), leaf(0.8, 1.5))
    dynamic = price(tree, Query(batch=2))
    static = static_independent.price(tree, Query(horizon=0, batch=2))
    assert dynamic.voc == pytest.approx(static.voc, rel=CLOSED_FORM)


def test_a_vanishing_horizon_is_the_static_value() -> None:
    tree = random_tree(3, depth=4, actions=3)
    static = static_independent.price(tree, Query(horizon=0, batch=4))
    for h in (1e-20, 1e-30, 1e-300):  # standard deviations to come of 1e-10 and less
        near = price(tree, Query(horizon=h, batch=4))
        assert near.voc == pytest.approx(static.voc, abs=QUADRATURE * scale_of(tree))
        assert near.value == pytest.approx(static.value, abs=QUADRATURE * scale_of(tree))


def test_a_huge_horizon_is_the_infinite_one() -> None:
    tree = random_tree(5, depth=4, actions=3)
    far, infinite = price(tree, Query(horizon=1e14, batch=4)), price(tree, Query(batch=4))
    assert far.voc == pytest.approx(infinite.voc, abs=QUADRATURE * scale_of(tree))


@pytest.mark.parametrize("horizon", [math.inf, 3.0])
def test_the_rate_is_the_best_of_every_batch(horizon: float) -> None:
    tree = build(MIXED, PREFIX, leaf(0.6, 0.2))
    rate = price(tree, Query(horizon=horizon, batch=None, remaining=60))
    each = np.array([price(tree, Query(horizon=horizon, batch=k)).voc / k for k in range(1, 61)])
    assert rate.voc == pytest.approx(each.max(axis=0), rel=RELATIVE_TAIL)
    picked = each[rate.batch - 1, np.arange(tree.n_leaves)]
    assert picked == pytest.approx(each.max(axis=0), rel=RELATIVE_TAIL)
    assert np.all(np.abs(rate.voc - each.max(axis=0)) <= rate.error + CLOSED_FORM * rate.voc)


# ---------------------------------------------------------------- bounds, extremes, refusals


@pytest.mark.parametrize("seed", range(200, 212))
def test_error_bounds_cover_what_a_finer_run_finds(seed: int, monkeypatch: pytest.MonkeyPatch) -> None:
    tree = random_tree(seed, depth=5, actions=3)
    query = Query(horizon=[math.inf, 2.0][seed % 2], batch=3)
    usual = price(tree, query)
    monkeypatch.setattr(panels, "TOLERANCE", 1e-14)
    monkeypatch.setattr(sums, "FADED", 1e-16)
    fine = price(tree, query)
    assert np.all(np.abs(usual.voc - fine.voc) <= usual.error + fine.error)
    assert usual.error.max() <= 0.01 * CHANCE_LABEL * scale_of(tree)


@pytest.mark.slow
def test_error_bounds_cover_19000_labels(monkeypatch: pytest.MonkeyPatch) -> None:
    """At least 99.9 % are covered by their bound, against a run with a thousandth of the tolerance."""
    missed = total = 0
    for seed in range(1000, 1600):
        tree = random_tree(seed, depth=4, width=4)
        query = Query(horizon=[math.inf, 2.0, 0.05, 50.0][seed % 4], batch=[1, 3, 30][seed % 3])
        usual = price(tree, query)
        with monkeypatch.context() as finer:
            finer.setattr(panels, "TOLERANCE", 1e-14)
            finer.setattr(sums, "FADED", 1e-16)
            fine = price(tree, query)
        missed += int(np.count_nonzero(np.abs(usual.voc - fine.voc) > usual.error + 1e-16 * usual.voc))
        total += tree.n_leaves
    assert total > 19_000
    assert missed <= 0.001 * total


def test_dispatch_names_the_method_and_holds_the_tolerance() -> None:
    priced = voc.price(build(MIXED, leaf(0.5, 0.3)), Query(tolerance=CHANCE_LABEL))
    assert priced.method == METHOD


def test_refuses_what_it_does_not_cover() -> None:
    tree = build(MIXED, leaf(0.5, 0.3))
    with pytest.raises(RefusedError, match="horizon above 0"):
        price(tree, Query(horizon=0))
    record = {"format": "belief-tree/1", "parent": [-1, 0, 0], "kind": ["decision", "leaf", "leaf"],
              "mean": [None, 0, 0], "noise_var": [None, 1, 1], "cov": [[1, 0.5], [0.5, 1]]}  # fmt: skip
    with pytest.raises(RefusedError, match="independent"):
        price(from_record(record), Query())


@pytest.mark.parametrize("unit", [1e-12, 1e-6, 1e6, 1e12])
def test_units_of_twelve_decades(unit: float) -> None:
    tree = random_tree(7, depth=4)
    scaled = dataclasses.replace(
        tree,
        mean=tree.mean * unit,
        var=tree.var * unit**2,
        noise_var=tree.noise_var * unit**2,
        reward=tree.reward * unit,
    )
    for h in (math.inf, 2.0):
        a, b = price(tree, Query(horizon=h)), price(scaled, Query(horizon=h))
        assert b.voc / unit == pytest.approx(a.voc, abs=QUADRATURE * scale_of(tree))
        assert np.all(b.error <= 0.01 * CHANCE_LABEL * scale_of(scaled))


def test_values_at_a_distance_of_1e12() -> None:
    tree = random_tree(7, depth=4)
    near, far = np.array(tree.reward), np.array(tree.reward)
    near[tree.action_nodes] = np.round(4 * near[tree.action_nodes]) / 4  # so that 1e12 + it is exact
    far[tree.action_nodes] = near[tree.action_nodes] + 1e12
    here = price(dataclasses.replace(tree, reward=near), Query())
    there = price(dataclasses.replace(tree, reward=far), Query())
    assert np.all(np.isfinite(there.voc))
    nothing = 1e-30 * scale_of(tree)
    assert np.all(np.abs(there.voc - here.voc) <= here.error + there.error + nothing)
    assert there.error.max() < 0.01 * scale_of(tree)  # the spacing of doubles there is 1e-4


def wild(seed: int) -> BeliefTree:
    """Eight decades of variance, zero and tiny probabilities, sure leaves, noise from 1e-8 to 1e8."""
    rng = np.random.default_rng(seed)
    tree = random_tree(seed, depth=int(rng.integers(2, 6)), actions=int(rng.integers(1, 4)))
    n = tree.n_leaves
    var = np.where(rng.random(n) < 0.15, 0.0, 10.0 ** rng.uniform(-rng.choice([0, 4, 8]), 0, n))
    prob = np.array(tree.prob)
    for v in np.flatnonzero(tree.kind == 1):
        children = np.flatnonzero(tree.parent == v)
        if len(children) > 1 and rng.random() < 0.4:
            little = rng.choice([0.0, 1e-12, 1e-6])
            prob[children] = little / (len(children) - 1)
            prob[children[0]] = 1.0 - little
    return dataclasses.replace(tree, var=var, prob=prob, noise_var=10.0 ** rng.uniform(-8, 8, n))


@pytest.mark.parametrize("seed", range(500, 530))
def test_wild_trees_are_right_to_their_bound(seed: int) -> None:
    """Finite, never negative, never falling in k beyond the bounds, and the bounds are small."""
    tree = wild(seed)
    horizon = [math.inf, 2.0, 1e-6, 1e9][seed % 4]
    scale = scale_of(tree)
    before = None
    for k in (1, 30, 2**53):
        priced = price(tree, Query(horizon=horizon, batch=k))
        assert np.all(np.isfinite(priced.voc))
        assert np.all(np.isfinite(priced.error))
        assert np.all(priced.voc >= 0)
        assert np.all(priced.voc[tree.var == 0] == 0)
        assert np.all(priced.error <= CHANCE_LABEL * scale)
        if before is not None:
            slack = before.error + priced.error + CLOSED_FORM * priced.voc
            assert np.all(priced.voc >= before.voc - slack)
        before = priced


def test_one_leaf_and_one_action() -> None:
    assert price(build(leaf(1.0, 2.0)), Query()).voc.tolist() == [0.0]
    one = build(("mean", [(0.5, ("max", [leaf(0, 1), leaf(0, 1)])), (0.5, leaf(0, 1))]))
    assert np.all(price(one, Query()).voc == 0)
    later = price(one, Query(horizon=2.0)).voc  # a better informed later choice is worth something
    pair = tuple(i for i in range(3) if later[i] > 0)
    assert len(pair) == 2


def test_4096_leaves() -> None:
    rng = np.random.default_rng(0)

    def bunch() -> Any:
        return (
            "max",
            [
                leaf(float(m), float(v))
                for m, v in zip(rng.normal(size=32), rng.lognormal(size=32), strict=True)
            ],
        )

    actions = [("max", [("mean", [(0.125, bunch()) for _ in range(8)]) for _ in range(8)]) for _ in range(2)]
    tree = build(*actions)
    priced = price(tree, Query())
    assert tree.n_leaves == 4096
    assert priced.error.max() <= CHANCE_LABEL * scale_of(tree)
    assert np.all(priced.voc >= 0)
    assert priced.voc.max() > 0


def test_a_chain_of_thousands_of_nodes_does_not_exhaust_the_stack() -> None:
    sketch: Any = ("max", [leaf(0, 1), leaf(0.3, 2)])
    plain = price(build(sketch, leaf(0.5, 1)), Query())
    for level in range(3000):
        sketch = ("max", [sketch]) if level % 2 else ("mean", [(1.0, sketch)])
    chained = price(build(sketch, leaf(0.5, 1)), Query())
    assert sorted(chained.voc) == pytest.approx(sorted(plain.voc), rel=CLOSED_FORM)


def test_many_alternations() -> None:
    sketch: Any = leaf(0, 1)
    for level in range(80):
        other = leaf(-3.0, 1e-3)
        sketch = ("max", [sketch, other]) if level % 2 else ("mean", [(0.99, sketch), (0.01, other)])
    tree = build(sketch, leaf(0.0, 1))
    priced = price(tree, Query())
    slow, error = oracle.monte_carlo_values(tree, tree.mean, tree.var, 100_000, 1)
    assert np.all(np.abs(priced.value - slow) <= STANDARD_ERRORS * error)
    assert priced.error.max() <= CHANCE_LABEL * scale_of(tree)
