"""Trees met under a scorer: what is recorded, and that rounds train on it."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from distill.cli import run as command_line
from distill.errors import InputError
from distill.family import load_family
from distill.generate import generate
from distill.rehearse.met_trees import FIRST_SEED, met_trees
from distill.rehearse.policies import ByRule
from distill.rehearse.problems import TreeProblem
from distill.sample_data import FAMILIES
from distill.traces import read_trees

FAST = Path(__file__).parents[2] / "models" / "cold-store-fast.onnx"
PROBLEM = TreeProblem(3, 2, 2)


def test_trees_are_those_of_the_policys_own_search():
    met = list(met_trees([PROBLEM], ByRule("even"), decisions=3, rollouts=16))
    assert [t.remaining for t in met] == 3 * [16, 14, 12, 8, 4]
    assert [float(t.count.sum()) for t in met] == [16 - t.remaining for t in met]
    assert all(np.ptp(t.count) <= 1 for t in met)  # spread evenly
    assert met[0].extra == {"problem": PROBLEM.name, "seed": FIRST_SEED, "policy": "even"}
    assert len({t.id for t in met}) == len(met)
    again = list(met_trees([PROBLEM], ByRule("even"), decisions=3, rollouts=16))
    assert all(np.array_equal(a.mean, b.mean) for a, b in zip(met, again, strict=True))


def test_the_command_records_what_a_scorer_meets(tmp_path, capsys):
    out = tmp_path / "met.jsonl.gz"
    flags = ["--problem", PROBLEM.name, "--policy", f"scorer:{FAST}", "--decisions", "2", "--rollouts", "8"]
    assert command_line(["record", *flags, "--out", str(out)]) == 0
    assert "10 trees of 2 decisions" in capsys.readouterr().out
    assert [t.extra["policy"] for _, t in read_trees(out)] == 10 * ["cold-store-fast"]
    spare = str(tmp_path / "even.jsonl")
    flags = ["--problem", PROBLEM.name, "--decisions", "1", "--rollouts", "8", "--out", spare]
    assert command_line(["record", *flags]) == 0
    assert [t.extra["policy"] for _, t in read_trees(spare)] == 5 * ["even"]
    flags = [
        "--simulator",
        "taxi",
        "--policy",
        "even",
        "--decisions",
        "1",
        "--out",
        str(tmp_path / "t.jsonl"),
    ]
    assert command_line(["record", *flags]) == 2
    assert "--policy: goes with --problem" in capsys.readouterr().err


def test_no_decisions_are_refused():
    with pytest.raises(InputError, match="decisions: must be at least 1"):
        list(met_trees([PROBLEM], ByRule("even"), decisions=0))


@pytest.mark.slow
def test_rounds_train_on_what_was_met(tmp_path):
    from distill.rehearse.on_policy import aggregate

    base = tmp_path / "base"
    generate(load_family(FAMILIES / "cold-store.toml"), base, trees=400, seed=1)
    told = []
    found = aggregate(
        base, [PROBLEM], tmp_path / "rounds", rounds=1, decisions=20, rollouts=32, tell=told.append
    )
    assert [replace(r, pooled=0.0) for r in found] == [replace(r, pooled=0.0) for r in told]
    assert all(0 <= r.pooled < 100 for r in found)
    assert [r.number for r in found] == [0, 1]
    assert found[0].added == 0
    assert 60 <= found[1].added <= 100
    assert all(r.scorer.is_file() and 0 <= r.forgone < 100 for r in found)
    with pytest.raises(InputError, match="must not exist yet"):
        aggregate(base, [PROBLEM], tmp_path / "rounds")
