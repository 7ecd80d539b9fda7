"""Plans of trees: a family, recorded trees, and a mix; the same trees however they are cut into shards."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from distill import shards
from distill.close_calls import at_stake, stratum
from distill.errors import InputError
from distill.family import draw, load_family
from distill.generate import Asked, Mix, Traces, generate
from distill.record import to_record
from distill.sources import plan_trees, tree_key
from distill.traces import write_trees

FAMILIES = Path(__file__).parents[1] / "datasets" / "families"
COLD = load_family(FAMILIES / "cold-store.toml")
ONE = Asked(horizon=0, batch=1)
RECORDED = [draw(COLD, 77, i) for i in range(12)]


def _trees(plan, size):
    """(source, draw, weight, record) of every tree of a plan."""
    parts = range(-(-plan.total // size))
    found = [(b.first, b.trees()) for _, b in plan.batches(parts, size)]
    assert [first for first, _ in found] == [size * p for p in parts]
    return [(d.source, d.draw, d.weight, json.dumps(to_record(d.tree))) for _, ds in found for d in ds]


@settings(max_examples=20, deadline=None, derandomize=True)
@given(st.integers(1, 12), st.integers(0, 20), st.integers(1, 9))
def test_a_mix_is_the_same_however_it_is_cut(n, more, size):
    mix = Mix(COLD, Traces("agent", RECORDED[:n]))
    plan = plan_trees(mix, n + more, 3)
    whole = _trees(plan, n + more)
    assert _trees(plan, size) == whole
    recorded = [(k, d) for k, (source, d, _, _) in enumerate(whole) if source == "agent"]
    assert [d for _, d in recorded] == list(range(n))
    assert [d for source, d, _, _ in whole if source == "cold-store"] == list(range(more))
    for source, number, weight, record in whole:
        tree = RECORDED[number] if source == "agent" else draw(COLD, 3, number)
        assert record == json.dumps(to_record(tree))
        assert weight == 1
    # Spread evenly: any stretch from the start holds its share to within one tree.
    for j, (k, _) in enumerate(recorded):
        assert abs((k + 1) * n / (n + more) - (j + 1)) < 1


@pytest.mark.parametrize(
    ("share", "trees", "expected"),
    [(None, 20, (12, 20)), (0.5, None, (12, 24)), (0.3, 20, (6, 20)), (0.25, 40, (10, 40))],
)
def test_share_and_number_of_a_mix(share, trees, expected):
    plan = plan_trees(Mix(COLD, Traces("agent", RECORDED), share), trees, 0)
    assert (len(plan.rows), plan.total) == expected
    assert len(set(plan.rows.tolist())) == expected[0]
    assert plan.about["recorded"] == expected[0]


@pytest.mark.parametrize(
    ("share", "trees", "message"),
    [
        (0.9, 20, "share: must take at most the 12 recorded trees there are; got 18"),
        (1.5, 20, "share: must be above 0 and below 1; got 1.5"),
        (None, 5, "trees: must be at least 12, the number of recorded trees; got 5"),
        (None, None, "trees: must be given for a family, or the share of recorded trees"),
    ],
)
def test_a_mix_that_cannot_be_is_named(share, trees, message):
    with pytest.raises(InputError, match=message):
        plan_trees(Mix(COLD, Traces("agent", RECORDED), share), trees, 0)


def test_a_mixed_dataset_says_where_each_tree_is_from(tmp_path):
    mix = Mix(COLD, Traces("agent", RECORDED), 0.25)
    manifest = generate(mix, tmp_path / "d", trees=40, asked=ONE, shard_trees=7)
    assert manifest["source"]["recorded"] == 10
    rows = [r for p in sorted((tmp_path / "d").glob("trees-*")) for r in shards.pq.read_table(p).to_pylist()]
    assert [r["tree"] for r in rows] == list(range(40))
    assert sum(r["source"] == "agent" for r in rows) == 10
    page = (tmp_path / "d" / "README.md").read_text()
    assert "10 of 40 recorded: `agent`" in page
    assert "the family `cold-store`" in page
    assert (tmp_path / "d" / "family.toml").read_text() == COLD.text
    with pytest.raises(
        InputError, match=r"source.kind: must be 'mix', as it began, to go on; .*; got 'family'"
    ):
        generate(COLD, tmp_path / "d", trees=40, asked=ONE, shard_trees=7)
    with pytest.raises(InputError, match=r"source.sha256: must be .*, to go on"):
        generate(replace(mix, share=0.2), tmp_path / "d", trees=40, asked=ONE, shard_trees=7)


def test_close_calls_are_preferred_among_recorded_trees_too(tmp_path):
    path = tmp_path / "many.jsonl"
    many = [draw(COLD, 5, i) for i in range(300)]
    write_trees(path, many)
    source = Traces.read([path])
    plan = plan_trees(source, 60, 1, factor=5)
    assert len(set(plan.rows.tolist())) == 60
    high = stratum(at_stake(many)) == 3
    assert high[plan.rows].mean() > 1.3 * high.mean()
    assert abs(np.sum(plan.weights * high[plan.rows]) / 60 - high.mean()) < 0.05
    manifest = generate(source, tmp_path / "d", trees=60, seed=1, asked=ONE, close_calls=5)
    assert manifest["sampling"]["close_calls"] == 5
    rows = shards.pq.read_table(tmp_path / "d" / "trees-00000.parquet").to_pylist()
    assert [r["draw"] for r in rows] == plan.rows[: len(rows)].tolist()
    assert [r["weight"] for r in rows] == plan.weights[: len(rows)].tolist()
    assert "of 5 trees looked at one was labelled" in (tmp_path / "d" / "README.md").read_text()


def test_another_sampling_is_refused(tmp_path):
    generate(COLD, tmp_path, trees=6, asked=ONE, close_calls=2)
    with pytest.raises(
        InputError, match=r"sampling.close_calls: must be 2, as it began, to go on; .*; got 3"
    ):
        generate(COLD, tmp_path, trees=6, asked=ONE, close_calls=3)


# --- recorded trees as a stream --------------------------------------------------------------------


def test_files_and_memory_give_the_same_source(tmp_path):
    paths = [tmp_path / "a.jsonl", tmp_path / "b.jsonl.gz"]
    write_trees(paths[0], RECORDED[:5])
    write_trees(paths[1], RECORDED[5:])
    read, held = Traces.read(paths), Traces("a.jsonl, b.jsonl.gz", RECORDED)
    assert (read.name, read.sha256, len(read)) == (held.name, held.sha256, 12)
    assert np.array_equal(read.keys, held.keys)
    assert [to_record(t) for t in read.trees] == [to_record(t) for t in RECORDED]
    rows = np.array([0, 3, 4, 5, 11])
    assert [i for i, _ in read.pick(rows)] == rows.tolist()
    assert list(read.pick(rows[:0])) == []


@pytest.mark.parametrize("change", ["shorter", "another"])
def test_files_that_change_while_they_are_read_are_named(tmp_path, change):
    path = tmp_path / "a.jsonl"
    write_trees(path, RECORDED)
    source = Traces.read([path])
    write_trees(path, RECORDED[:4] if change == "shorter" else [*RECORDED[:4], *RECORDED[:8]])
    with pytest.raises(InputError, match=r"a.jsonl: must not change while it is read; tree 4 is another now"):
        generate(source, tmp_path / "d", asked=ONE)
    write_trees(path, RECORDED)
    assert generate(source, tmp_path / "d", asked=ONE)["complete"]


def test_keys_see_all_that_prices_a_tree_and_no_name():
    tree = RECORDED[0]
    named = replace(tree, id="x", extra={"a": 1}, count=None)
    assert tree_key(named) == tree_key(tree)
    zero = replace(tree, reward=np.where(tree.reward == 0, -0.0, tree.reward))
    assert tree_key(zero) == tree_key(tree)
    changes = [
        {"mean": tree.mean + 1e-12}, {"var": tree.var * 2}, {"noise_var": tree.noise_var * 2},
        {"cost": tree.cost + 1}, {"remaining": tree.remaining + 1}, {"horizon": 3.0}, {"batch": 2},
        {"reward": tree.reward + 1}, {"discount": tree.discount / 2}, {"prob": tree.prob / 2},
    ]  # fmt: skip
    keys = {tree_key(replace(tree, **change)) for change in changes}
    assert len(keys | {tree_key(tree)}) == len(changes) + 1


@pytest.mark.parametrize("name", ["cold-store", "shared-aisles", "crossing-traffic", "on-time"])
def test_keys_outlive_files(tmp_path, name):
    family = load_family(FAMILIES / f"{name}.toml")
    trees = [draw(family, 0, i) for i in range(8)]
    write_trees(tmp_path / "t.jsonl", trees)
    keys = [tree_key(t) for t in trees]
    assert Traces.read([tmp_path / "t.jsonl"]).keys.tolist() == keys
    generate(Traces("t", trees), tmp_path / "d", asked=Asked(horizon=0, batch=1))
    back = {
        n: tree_key(t) for aside in (True, False) for n, t in shards.read_trees(tmp_path / "d", aside=aside)
    }
    assert [back[i] for i in range(8)] == keys
