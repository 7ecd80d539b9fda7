"""Recorded traces: the same bytes again, valid, worth pricing, and equal to the committed sample."""

from __future__ import annotations

import gzip
import json
from pathlib import Path

import numpy as np
import pytest

from distill.errors import InputError
from distill.rehearse.record import POINTS, record_traces, recorded_trees
from distill.traces import read_trees

TRACES = Path(__file__).parents[2] / "datasets" / "traces"
COMMANDS = [("taxi", 1), ("cliff_walking", 2)]  # as datasets/traces/README.md says


@pytest.mark.parametrize(("name", "seed"), COMMANDS)
def test_the_committed_sample_is_what_its_command_makes(name, seed, tmp_path):
    record_traces(name, tmp_path / "again.jsonl.gz", decisions=50, seed=seed)
    again = gzip.decompress((tmp_path / "again.jsonl.gz").read_bytes())
    assert again == gzip.decompress((TRACES / f"{name}.jsonl.gz").read_bytes())


def test_same_seed_same_bytes(tmp_path):
    for file, seed in (("a", 3), ("b", 3), ("c", 4)):
        record_traces("taxi", tmp_path / f"{file}.jsonl.gz", decisions=3, rollouts=16, seed=seed)
    a, b, c = ((tmp_path / f"{file}.jsonl.gz").read_bytes() for file in "abc")
    assert a == b
    assert a != c


@pytest.mark.parametrize(("name", "actions"), [("taxi", 6), ("cliff_walking", 4)])
def test_the_sample_holds_what_it_says(name, actions):
    trees = [tree for _, tree in read_trees(TRACES / f"{name}.jsonl.gz")]
    assert len(trees) == 50 * len(POINTS)
    assert len({tree.id for tree in trees}) == len(trees)
    assert len({tree.n_leaves for tree in trees}) >= 5
    row = next(
        line for line in (TRACES / "README.md").read_text().splitlines() if f"`{name}.jsonl.gz`" in line
    )
    fewest, most = (f([tree.n_leaves for tree in trees]) for f in (min, max))
    assert row.endswith(f"| {len(trees)} | {row.split('|')[4].strip()} | {fewest} to {most} |")
    assert {tree.extra["rule"] for tree in trees} == {"even", "uct", "thompson", "static_rate"}
    for tree in trees:
        assert tree.belief == "gaussian"
        assert not tree.has_chance
        assert len(tree.action_nodes) == actions
        assert tree.count.sum() + tree.remaining == 128
        assert tree.extra["environment"] == name


def test_beliefs_follow_the_conjugate_formula():
    """From one decision's prior tree, variance after c rollouts is v n / (n + c v) at every leaf."""
    trees = [tree for _, tree in recorded_trees("taxi", decisions=1, rollouts=64, seed=9)]
    prior = trees[0]
    assert prior.count.sum() == 0
    for tree in trees[1:]:
        expected = prior.var * prior.noise_var / (prior.noise_var + tree.count * prior.var)
        assert tree.var == pytest.approx(expected, rel=1e-8)  # nine digits are written
        untouched = tree.count == 0
        assert np.array_equal(tree.mean[untouched], prior.mean[untouched])
        assert np.any(tree.mean[~untouched] != prior.mean[~untouched])


def test_any_rule_can_give_out_rollouts(tmp_path):
    def last_leaf(tree, _rng):
        return tree.n_leaves - 1

    made = record_traces("taxi", tmp_path / "t.jsonl", decisions=2, rollouts=8, rule=last_leaf)
    lines = [json.loads(line) for line in (tmp_path / "t.jsonl").read_text().splitlines()]
    assert made.trees == len(lines) == 2 * len({int(p * 8) for p in POINTS})
    for line in lines:
        counts = [c for c in line["count"] if c is not None]
        assert counts[-1] == 8 - line["remaining"]
        assert sum(counts[:-1]) == 0
        assert line["extra"]["rule"] == "last_leaf"


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"simulator": "blackjack"}, "simulator: must be one of taxi"),
        ({"decisions": 0}, "decisions: must be at least 1; got 0"),
        ({"rollouts": 0}, "rollouts: must be at least 1; got 0"),
        ({"rule": "best"}, "rule: must be one of even"),
        ({"rule": lambda *_: 10_000}, "rule: must pick a leaf from 0 to"),
        ({"out": "traces.json"}, "must end in .jsonl or .jsonl.gz"),
    ],
)
def test_bad_arguments_name_the_rule(arguments, message, tmp_path):
    given = {"simulator": "taxi", "out": tmp_path / "t.jsonl", "decisions": 1, "rollouts": 4} | arguments
    with pytest.raises(InputError, match=message):
        record_traces(given.pop("simulator"), given.pop("out"), **given)
    assert not (tmp_path / "t.jsonl").exists()
