"""Reading candidates and splitting them by tree: no tree, and no twin of one, on both sides."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from leaf_tables import rows
from small_dataset import labelled

from distill.backup import backup_of
from distill.candidates import LEAF_COLUMNS, PARTS, Candidates, split_by_tree
from distill.errors import InputError
from distill.family import draw, load_family, parse_family
from distill.generate import Asked, Traces, generate
from distill.scorer_inputs import RECORD, WIN_LOSS_TABLE
from distill.shards import read_trees
from distill.tree import leaf_table

FAMILIES = Path(__file__).parents[1] / "datasets" / "families"


def candidates(seed: int, trees: int) -> Candidates:
    rng = np.random.default_rng(seed)
    table = rows(rng, trees)
    n = len(table["mean"])
    columns = {name: table[name] for name in LEAF_COLUMNS}
    return Candidates(columns, table["tree"], rng.exponential(size=n), np.ones(n), np.zeros(n))


def joined(*parts: Candidates) -> Candidates:
    offsets = 1000 * np.arange(len(parts))
    return Candidates(
        {name: np.concatenate([p.columns[name] for p in parts]) for name in LEAF_COLUMNS},
        np.concatenate([p.tree + k for p, k in zip(parts, offsets, strict=True)]),
        *(np.concatenate([getattr(p, name) for p in parts]) for name in ("label", "batch", "error")),
    )


def belief_rows(c: Candidates) -> set[tuple[float, ...]]:
    return set(zip(*(c.columns[n].tolist() for n in ("mean", "var", "noise_var")), strict=True))


@settings(max_examples=30, deadline=None, derandomize=True)
@given(st.integers(0, 10**6), st.integers(0, 10**6))
def test_every_tree_stands_whole_in_one_part(seed: int, split_seed: int) -> None:
    whole = candidates(seed, 60)
    split = split_by_tree(whole, split_seed)
    parts = list(vars(split).values())
    ids = [set(p.tree.tolist()) for p in parts]
    assert sum(map(len, ids)) == len(set.union(*ids)) == 60
    assert sum(len(p.tree) for p in parts) == len(whole.tree)
    for p in parts:
        for a, n in zip(p.groups.starts, p.groups.sizes, strict=True):
            of_tree = whole.tree == p.tree[a]
            assert np.array_equal(p.label[a : a + n], whole.label[of_tree])
            for name in LEAF_COLUMNS:
                assert np.array_equal(p.columns[name][a : a + n], whole.columns[name][of_tree])


def test_trees_of_equal_beliefs_never_stand_on_both_sides() -> None:
    one = candidates(1, 200)
    twin = candidates(1, 200)
    # The same beliefs met with another budget and cost are the same tree to a learner.
    twin.columns["remaining"][:] += 7
    twin.columns["cost"][:] *= 2
    twin.columns["offset"][twin.columns["offset"] == 0] = -0.0
    split = split_by_tree(joined(one, twin), seed=3)
    a, b, c = (belief_rows(p) for p in vars(split).values())
    assert not a & b
    assert not a & c
    assert not b & c
    assert all(len(p.groups.sizes) % 2 == 0 for p in vars(split).values())


def test_a_tree_keeps_its_part_when_others_are_added() -> None:
    first = candidates(1, 100)
    alone, together = split_by_tree(first, 9), split_by_tree(joined(first, candidates(2, 300)), 9)
    for name in PARTS:
        before = set(getattr(alone, name).tree.tolist())
        after = {t for t in getattr(together, name).tree.tolist() if t < 1000}
        assert before == after


def test_shares_are_as_stated_and_another_seed_splits_anew() -> None:
    whole = candidates(4, 4000)
    one, other = split_by_tree(whole, 0), split_by_tree(whole, 1)
    for name, share in PARTS.items():
        n = len(getattr(one, name).groups.sizes)
        assert abs(n - 4000 * share) < 4 * np.sqrt(4000 * share * (1 - share))
    overlap = len(set(one.held_out.tree) & set(other.held_out.tree)) / len(set(one.held_out.tree))
    # Independent splits share the held-out share of trees.
    assert abs(overlap - PARTS["held_out"]) < 4 * np.sqrt(PARTS["held_out"] / 600)


def test_part_without_trees_or_without_worth_is_named() -> None:
    with pytest.raises(InputError, match="trees enough for the part"):
        split_by_tree(candidates(0, 1), 0)
    worthless = candidates(0, 100)
    worthless.label[:] = 0
    with pytest.raises(InputError, match="a value above 0 in the part 'fit'"):
        split_by_tree(worthless, 0)


def test_read_gives_the_leaf_tables_and_labels_of_the_trees(tmp_path: Path) -> None:
    folder = labelled(tmp_path / "data", trees=40)
    got, about = Candidates.read(folder)
    assert about["value"] == {"horizon": "inf", "batch": None}
    assert about["data"]["trees"] == 40
    assert len(about["data"]["dataset_sha256"]) == 64
    assert got.is_rate
    for a, n, (number, tree) in zip(got.groups.starts, got.groups.sizes, read_trees(folder), strict=True):
        table = leaf_table(tree)
        assert got.tree[a] == number
        assert got.columns["remaining"][a] == tree.remaining
        for name in LEAF_COLUMNS[:-1]:
            assert np.array_equal(got.columns[name][a : a + n], getattr(table, name))


def test_one_rollout_is_no_rate(tmp_path: Path) -> None:
    got, about = Candidates.read(labelled(tmp_path / "data", trees=20, batch=3, horizon=2.5))
    assert about["value"] == {"horizon": 2.5, "batch": 3}
    assert not got.is_rate
    assert np.all(got.batch == 3)


def test_stages_of_one_recorded_decision_stay_together(tmp_path: Path) -> None:
    trees = [tree for _, tree in read_trees(labelled(tmp_path / "family", trees=120))]
    recorded = [replace(t, extra={"decision": i // 4, "rule": "even"}) for i, t in enumerate(trees[:80])]
    generate(Traces("agent", [*recorded, *trees[80:]]), tmp_path / "traces")
    whole, _ = Candidates.read(tmp_path / "traces")
    assert whole.clusters is not None
    assert len(np.unique(whole.clusters)) == 20 + 40
    split = split_by_tree(whole, 1)
    decisions = [{t // 4 for t in p.tree.tolist() if t < 80} for p in vars(split).values()]
    assert sum(map(len, decisions)) == len(set.union(*decisions)) == 20
    assert all(len(p.clusters) == len(p.groups.sizes) for p in vars(split).values())
    assert Candidates.read(tmp_path / "family")[0].clusters is None


CHANCE = b"""
format = "tree-family/1"
name = "two doors"
belief = "gaussian"
shape = { actions = 2, leaves = [2, 4] }
chance = { share = 1 }
prior = { sd = 1 }
noise = { sd = 2 }
budget = { rollouts = 16, used = 0.5 }
search = { even = 1 }
"""


def test_trees_that_a_leaf_table_cannot_hold_become_records(tmp_path: Path) -> None:
    generate(parse_family(CHANCE), tmp_path / "data", trees=10, asked=Asked(horizon=3.0))
    got, about = Candidates.read(tmp_path / "data")
    assert got.kind is RECORD
    assert about["input"] == "record"
    trees = [tree for _, tree in read_trees(tmp_path / "data")]
    for name in RECORD.columns:
        rows = np.concatenate([backup_of(tree, 3.0).rows()[name] for tree in trees])
        np.testing.assert_array_equal(got.columns[name], rows)
    some = got.of_trees(np.arange(10) % 3 == 0)
    assert [t.id for t in some.trees()] == [trees[i].id for i in (0, 3, 6, 9)]


def test_win_loss_leaves_have_their_own_table_and_mixed_trees_are_records(tmp_path: Path) -> None:
    flat = [draw(load_family(FAMILIES / "on-time.toml"), 2, i) for i in range(4)]
    generate(Traces("wins", flat), tmp_path / "wins")
    got, about = Candidates.read(tmp_path / "wins")
    assert got.kind is WIN_LOSS_TABLE
    assert about["input"] == "win/loss leaf table"
    np.testing.assert_array_equal(got.columns["alpha"], np.concatenate([t.alpha for t in flat]))
    chance = draw(parse_family(CHANCE), 0, 0)
    generate(Traces("both", [*flat, chance]), tmp_path / "both")
    assert Candidates.read(tmp_path / "both")[0].kind is RECORD


def test_a_folder_without_dataset_is_named(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"manifest\.json"):
        Candidates.read(tmp_path)
