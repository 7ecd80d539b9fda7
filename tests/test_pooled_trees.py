"""Trees made one: valid by every rule of a record, worth what their parts are, of the size asked for."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from chance_trees import build, leaf
from ladder import CLOSED_FORM, EXACT, RELATIVE_TAIL

from distill import schema
from distill.errors import InputError
from distill.family import draw, load_family
from distill.pooled_trees import first_leaves, in_units_of_scale, joined, pooled
from distill.query import Query, scale_of
from distill.record import from_record, to_record
from distill.voc import price

FAMILIES = Path(__file__).parents[1] / "datasets" / "families"


def trees_of(name: str, n: int = 12) -> list:
    family = load_family(FAMILIES / f"{name}.toml")
    return [draw(family, 3, i) for i in range(n)]


@pytest.mark.parametrize("name", ["cold-store", "crossing-traffic", "shared-aisles", "on-time"])
@pytest.mark.parametrize("n_leaves", [1, 7, 64])
def test_pooled_trees_keep_every_rule_and_have_the_size_asked_for(name: str, n_leaves: int) -> None:
    trees = trees_of(name)
    for seed in range(5):
        whole = pooled(trees, n_leaves, np.random.default_rng(seed))
        assert whole.n_leaves == n_leaves
        checked = from_record(to_record(whole))
        assert checked.n_nodes == whole.n_nodes
        assert whole.remaining >= 1
        assert whole.belief == trees[0].belief
        assert np.all(whole.count >= 0)


def test_joined_actions_stand_at_their_place_and_count_as_before() -> None:
    a = build(leaf(0.0, 1.0), ("mean", [(0.25, leaf(1.0, 1.0)), (0.75, leaf(2.0, 1.0))]))
    b = build(leaf(0.5, 1.0))
    whole = joined([a, b])
    assert len(whole.action_nodes) == 2
    # Action 0 is the better of the first actions, action 1 the second tree's chance node alone.
    first = build(
        ("max", [leaf(0.0, 1.0), leaf(0.5, 1.0)]), ("mean", [(0.25, leaf(1.0, 1.0)), (0.75, leaf(2.0, 1.0))])
    )
    for horizon in (0.0, math.inf):
        query = Query(horizon, 2)
        expected, got = price(first, query), price(whole, query)
        np.testing.assert_allclose(got.value, expected.value, rtol=CLOSED_FORM)
        # Leaves go tree by tree: those of `first` by their means.
        means = [float(m) for m in whole.mean]
        order = [means.index(float(m)) for m in first.mean]
        np.testing.assert_allclose(
            got.voc[order], expected.voc, rtol=RELATIVE_TAIL, atol=2 * float(expected.error.max())
        )


def test_a_tree_alone_keeps_its_values_and_its_unit_becomes_its_scale() -> None:
    for name in ("crossing-traffic", "on-time", "shared-aisles"):
        tree = trees_of(name, 1)[0]
        query = Query(0.0, 3)
        own, scaled = price(tree, query), price(joined([in_units_of_scale(tree)]), query)
        scale = scale_of(tree)
        np.testing.assert_allclose(scaled.voc * scale, own.voc, rtol=RELATIVE_TAIL, atol=EXACT)
        assert scale_of(in_units_of_scale(tree)) == pytest.approx(1.0, rel=CLOSED_FORM)


def test_correlation_stays_within_a_part() -> None:
    a, b = trees_of("shared-aisles", 2)
    whole = joined([a, b])
    n = a.n_leaves
    assert np.array_equal(whole.cov[:n, :n], a.cov)
    assert np.array_equal(whole.cov[n:, n:], b.cov)
    assert not whole.cov[:n, n:].any()
    plain = trees_of("crossing-traffic", 1)[0]
    mixed = joined([a, plain])
    assert mixed.var is None
    assert np.array_equal(np.diag(mixed.cov)[n:], plain.var)


def test_outcomes_left_by_a_cut_share_the_probability() -> None:
    outcomes = [(0.5, leaf(0.0, 1.0)), (0.125, leaf(1.0, 1.0)), (0.375, leaf(2.0, 1.0))]
    tree = build(("mean", outcomes), leaf(9.0, 1.0))
    at = np.flatnonzero(tree.kind == schema.LEAF)
    few = first_leaves(tree, 3)
    kept = few.prob[few.leaf_nodes]
    assert few.n_leaves == 3
    chance = few.kind[few.parent[few.leaf_nodes]] == schema.CHANCE
    assert kept[chance].sum() == pytest.approx(1.0, rel=CLOSED_FORM)
    assert first_leaves(tree, len(at)) is tree
    never = replace(tree, prob=np.where(tree.prob == 0.5, 1.0, np.where(tree.prob < 1, 0.0, tree.prob)))
    alone = [i for i in range(1, 5) if first_leaves(never, i).n_leaves == i]
    assert alone == [1, 2, 3, 4]


def test_no_trees_make_no_tree() -> None:
    with pytest.raises(InputError, match="trees: must hold at least one"):
        pooled([], 3, np.random.default_rng(0))
