"""What must hold of dynamic VOC on any tree with chance nodes, on trees that Hypothesis draws."""

from __future__ import annotations

import dataclasses
import math
from typing import Any

import numpy as np
from chance_trees import build, leaf
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, QUADRATURE

from distill.exact.dynamic_chance import price
from distill.exact.max_sum import path_weights
from distill.query import Query, scale_of
from distill.tree import BeliefTree

PROPERTIES = settings(deadline=None, max_examples=25, derandomize=True)

means = st.floats(-3, 3)
variances = st.one_of(st.just(0.0), st.floats(1e-8, 10))
leaves = st.builds(leaf, means, variances, st.floats(1e-3, 1e3))
horizons = st.sampled_from([math.inf, 3.0, 0.1])


@st.composite
def chances(draw: Any, below: Any) -> Any:
    children = draw(st.lists(below, min_size=1, max_size=3))
    share = np.array([draw(st.sampled_from([0.0, 1e-12, 0.1, 1.0])) for _ in children])
    share = share / share.sum() if share.sum() > 0 else np.full(len(children), 1 / len(children))
    return ("mean", list(zip(share.tolist(), children, strict=True)))


def decisions(below: Any) -> Any:
    return st.builds(lambda c: ("max", c), st.lists(below, min_size=1, max_size=3))


def edges(below: Any) -> Any:
    return st.builds(
        lambda r, g, c: ("edge", r, g, c) if c[0] != "edge" else c, st.floats(-1, 1), st.floats(0.5, 1), below
    )


nodes = st.recursive(leaves, lambda below: edges(st.one_of(chances(below), decisions(below))), max_leaves=10)
actions = st.lists(nodes, min_size=1, max_size=3)
trees = actions.map(lambda a: build(*a))


def allowed(tree: BeliefTree, *priced: Any) -> Any:
    return sum(p.error for p in priced) + 1e-12 * priced[0].voc + 1e-14 * scale_of(tree)


@PROPERTIES
@given(trees, horizons, st.integers(1, 100))
def test_never_negative_and_never_falling_in_the_batch(tree: BeliefTree, h: float, k: int) -> None:
    one, more, most = (price(tree, Query(horizon=h, batch=b)) for b in (k, 2 * k, 2**53))
    for p in (one, more, most):
        assert np.all(np.isfinite(p.voc))
        assert np.all(p.voc >= 0)
        assert np.all(p.voc[tree.var == 0] == 0)
    assert np.all(one.voc <= more.voc + allowed(tree, one, more))
    assert np.all(more.voc <= most.voc + allowed(tree, more, most))


@PROPERTIES
@given(trees, horizons, st.floats(-100, 100))
def test_a_constant_on_every_path_changes_nothing(tree: BeliefTree, h: float, c: float) -> None:
    """Under chance nodes the constant goes on the root edges, which every path has."""
    reward = np.array(tree.reward)
    reward[tree.action_nodes] += c
    a, b = price(tree, Query(horizon=h)), price(dataclasses.replace(tree, reward=reward), Query(horizon=h))
    rounding = 1e-13 * (abs(c) + np.abs(a.value).max())
    assert np.all(np.abs(a.voc - b.voc) <= allowed(tree, a, b) + rounding)
    assert np.all(np.abs(a.value + c - b.value) <= QUADRATURE * scale_of(tree) + rounding)


@PROPERTIES
@given(trees, horizons, st.floats(1e-6, 1e6))
def test_scaling_utilities_scales_voc(tree: BeliefTree, h: float, unit: float) -> None:
    scaled = dataclasses.replace(
        tree,
        mean=tree.mean * unit,
        var=tree.var * unit**2,
        noise_var=tree.noise_var * unit**2,
        reward=tree.reward * unit,
    )
    a, b = price(tree, Query(horizon=h)), price(scaled, Query(horizon=h))
    assert np.all(np.abs(b.voc / unit - a.voc) <= allowed(tree, a) + b.error / unit)


@PROPERTIES
@given(actions, horizons, st.randoms(use_true_random=False))
def test_relabelling_siblings_permutes(sketches: list[Any], h: float, random: Any) -> None:
    def shuffled(sketch: Any) -> Any:
        if sketch[0] == "leaf":
            return sketch
        if sketch[0] == "edge":
            return (*sketch[:3], shuffled(sketch[3]))
        children = list(sketch[1])
        random.shuffle(children)
        if sketch[0] == "max":
            return ("max", [shuffled(c) for c in children])
        return ("mean", [(p, shuffled(c)) for p, c in children])

    tree, other = build(*sketches), build(*(shuffled(s) for s in sketches))
    a, b = price(tree, Query(horizon=h)), price(other, Query(horizon=h))
    slack = 2 * (a.error.max() + b.error.max()) + CLOSED_FORM * scale_of(tree)
    assert np.all(np.abs(np.sort(a.voc) - np.sort(b.voc)) <= slack)
    assert np.all(np.abs(a.value - b.value) <= QUADRATURE * scale_of(tree))


@PROPERTIES
@given(nodes, horizons)
def test_one_action_has_no_choice_to_improve(sketch: Any, h: float) -> None:
    tree = build(sketch)
    assert np.all(price(tree, Query()).voc == 0)
    assert np.all(price(tree, Query(horizon=h)).voc >= 0)


@PROPERTIES
@given(trees, horizons)
def test_leaves_that_no_path_reaches_are_worth_nothing(tree: BeliefTree, h: float) -> None:
    weight = path_weights(tree)[0][tree.leaf_nodes]
    assert np.all(price(tree, Query(horizon=h)).voc[weight == 0] == 0)


@PROPERTIES
@given(trees, st.integers(1, 50))
def test_noise_without_end_takes_the_value_away(tree: BeliefTree, k: int) -> None:
    deaf = dataclasses.replace(tree, noise_var=np.full(tree.n_leaves, 1e30))
    assert np.all(price(deaf, Query(batch=k)).voc <= 100 * QUADRATURE * (1 + np.abs(tree.mean).max()))


@PROPERTIES
@given(trees, horizons)
def test_voc_is_at_most_the_weighted_standard_deviation(tree: BeliefTree, h: float) -> None:
    """An action's value moves by no more than W |dx|, so the gain is at most W sd, whatever the batch."""
    bound = path_weights(tree)[0][tree.leaf_nodes] * np.sqrt(tree.var)
    priced = price(tree, Query(horizon=h, batch=10))
    assert np.all(priced.voc <= bound + allowed(tree, priced))
