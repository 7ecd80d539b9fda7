"""The slow methods for trees with chance nodes, against closed forms and each other."""

from __future__ import annotations

import math

import numpy as np
import pytest
from chance_trees import build, leaf, random_tree
from ladder import CLOSED_FORM, EXACT, ORACLE_GRID, QUADRATURE, STANDARD_ERRORS

from distill.oracle import chance as oracle
from distill.tree import BeliefTree


def values(tree: BeliefTree, panels: int = 24) -> list[float]:
    return oracle.action_values(tree, tree.mean, tree.var, panels).tolist()


def clark(m1: float, v1: float, m2: float, v2: float) -> float:
    """E max of two independent normals (Clark 1961, equation 2)."""
    a = math.sqrt(v1 + v2)
    z = (m1 - m2) / a
    Phi = 0.5 * math.erfc(-z / math.sqrt(2))
    return m1 * Phi + m2 * (1 - Phi) + a * math.exp(-z * z / 2) / math.sqrt(2 * math.pi)


def test_two_leaves() -> None:
    tree = build(("max", [leaf(0.3, 2.0), leaf(-0.1, 0.5)]))
    assert values(tree) == pytest.approx([clark(0.3, 2.0, -0.1, 0.5)], abs=QUADRATURE)


def test_a_sum_of_leaves_is_one_normal() -> None:
    pair = ("mean", [(0.25, leaf(1.0, 4.0)), (0.75, leaf(0.0, 1.0))])
    tree = build(("max", [pair, leaf(0.1, 0.3)]))
    one = clark(0.25, 0.25**2 * 4 + 0.75**2, 0.1, 0.3)
    assert values(tree) == pytest.approx([one], abs=QUADRATURE)


def test_sure_leaves_make_atoms() -> None:
    """max(0, X) and max(0, Y) added: E max(sum, 0) is the sum of the expectations, as nothing is below 0."""
    half = ("max", [leaf(0, 1), leaf(0, 0)])
    tree = build(("max", [("mean", [(0.5, half), (0.5, half)]), leaf(0, 0)]))
    assert values(tree) == pytest.approx([1 / math.sqrt(2 * math.pi)], abs=QUADRATURE)


def test_rewards_and_discounts() -> None:
    tree = build(
        ("edge", 2.0, 0.5, ("mean", [(0.5, ("edge", 1.0, 0.5, leaf(4.0, 1.0))), (0.5, leaf(2.0, 1.0))]))
    )
    assert values(tree) == pytest.approx([2.0 + 0.5 * (0.5 * (1.0 + 2.0) + 0.5 * 2.0)], rel=CLOSED_FORM)


@pytest.mark.parametrize("seed", range(12))
def test_quadrature_and_sampling_agree(seed: int) -> None:
    tree = random_tree(seed, depth=4, width=2, sure=0.3)
    mean, error = oracle.monte_carlo_values(tree, tree.mean, tree.var, 100_000, seed)
    assert np.all(np.abs(values(tree, panels=6) - mean) <= STANDARD_ERRORS * error + 10 * ORACLE_GRID)


def test_voc_of_one_leaf_against_a_sure_rival() -> None:
    """Static in disguise: an action of one leaf has VOC s f(-gap / s)."""
    tree = build(("mean", [(1.0, leaf(0.0, 2.0, 3.0))]), leaf(0.4, 0.0))
    s = 2.0 / math.sqrt(2.0 + 3.0 / 5)
    z = 0.4 / s
    gain = s * (math.exp(-z * z / 2) / math.sqrt(2 * math.pi) - z * 0.5 * math.erfc(z / math.sqrt(2)))
    unsure = int(np.flatnonzero(tree.var)[0])
    assert oracle.voc(tree, unsure, 5, math.inf) == pytest.approx(gain, abs=QUADRATURE)


def test_a_sure_leaf_is_worth_nothing() -> None:
    assert oracle.voc(build(leaf(0.0, 1.0), leaf(0.4, 0.0)), 1, 5, math.inf) == EXACT
