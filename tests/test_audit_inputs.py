"""Audits of scorers that read win/loss leaf tables and records, trained and shipped as users do."""

from __future__ import annotations

import json
import xml.etree.ElementTree as ET
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from builders import chance_record, flat_record
from ladder import DRIFTED_MEDIAN, QUADRATURE

from distill import voc
from distill.audit import WORTH_ADDING, Audit, audit, sample_trees, write_audit
from distill.backup import Backup
from distill.cli import run
from distill.errors import InputError
from distill.family import Family, draw, load_family, parse_family
from distill.generate import generate
from distill.metrics import Groups, picks
from distill.query import Query
from distill.record import from_record, to_record
from distill.report.audit_page import audit_page
from distill.runtime import Scorer
from distill.sample_data import FAMILIES
from distill.shards import read_manifest
from distill.ship import ship
from distill.traces import read_trees, write_trees
from distill.train import train
from distill.tree import BeliefTree, leaf_table

COINS = b"""
format = "tree-family/1"
name = "coins"
belief = "win_loss"
shape = { actions = [2, 4], leaves = [1, 4] }
prior = { strength = 2, win_rate = { uniform = [0.3, 0.7] }, low = 0, span = 1 }
cost = { tree = { log_uniform = [0.001, 0.1] } }
budget = { rollouts = [8, 24], used = [0, 1] }
search = { thompson = 1 }
"""
CROSSINGS = b"""
format = "tree-family/1"
name = "crossings"
belief = "gaussian"
shape = { actions = [2, 4], leaves = [2, 4], depth = [2, 3], branching = 2 }
chance = { share = 0.4 }
prior = { sd = 1, mean = { normal = [0, 0.5] } }
noise = { sd = 1 }
cost = { tree = { log_uniform = [0.001, 0.1] } }
budget = { rollouts = [8, 24], used = [0, 1] }
search = { thompson = 1 }
"""


def mostly_lost(tree: BeliefTree) -> BeliefTree:
    """The same leaves where hardly anything was ever won: wins a fiftieth as likely as training saw them."""
    assert tree.alpha is not None
    return replace(tree, alpha=0.02 * tree.alpha)


def all_or_nothing(tree: BeliefTree) -> BeliefTree:
    """The same tree over win/loss leaves of nearly no belief yet, which are far from normal."""
    return replace(tree, **beliefs_of_coins(tree))


def beliefs_of_coins(tree: BeliefTree) -> dict[str, Any]:
    m = tree.mean
    assert m is not None
    beta = np.where(m > 0, 0.05, 0.5)
    beliefs = {"alpha": np.full(len(m), 0.05), "beta": beta, "low": m - 1, "high": m + 3}
    return dict.fromkeys(("mean", "var", "noise_var")) | beliefs


@dataclass(frozen=True)
class Case:
    """A scorer with its family, recorded trees of that family, and the same trees gone other ways."""

    input: str
    family: Family
    scorer: Path
    matching: Path
    moved: Path
    as_promised: Audit


def made(folder: Path, text: bytes, name: str, move: Callable[[BeliefTree], BeliefTree]) -> Case:
    family = parse_family(text)
    generate(family, folder / "data", trees=120, seed=1)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("distill.train._EXACT_SECONDS", 0.5)  # three calls of dear methods are enough here
        train(folder / "data", folder / "trained", recipes=["boosting 25x8"], n_boot=100)
    ship(folder / "trained", folder / "scorer.onnx")
    trees = [draw(family, 77, i) for i in range(100)]
    write_trees(folder / "matching.jsonl.gz", trees)
    write_trees(folder / "moved.jsonl.gz", [move(t) for t in trees])
    found = audit(folder / "scorer.onnx", [folder / "matching.jsonl.gz"], trees=80, n_boot=100, family=family)
    paths = (folder / "scorer.onnx", folder / "matching.jsonl.gz", folder / "moved.jsonl.gz")
    return Case(name, family, *paths, found)


@pytest.fixture(scope="module", autouse=True)
def _few_trees_stand_for_training() -> Iterator[None]:
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("distill.drift._REFERENCE", 200)
        yield


@pytest.fixture(scope="module")
def coins(tmp_path_factory: pytest.TempPathFactory, _few_trees_stand_for_training: None) -> Case:
    return made(tmp_path_factory.mktemp("coins"), COINS, "win/loss leaf table", mostly_lost)


@pytest.fixture(scope="module")
def crossings(tmp_path_factory: pytest.TempPathFactory, _few_trees_stand_for_training: None) -> Case:
    return made(tmp_path_factory.mktemp("crossings"), CROSSINGS, "record", all_or_nothing)


@pytest.fixture(params=["coins", "crossings"])
def case(request: pytest.FixtureRequest) -> Case:
    found: Case = request.getfixturevalue(request.param)
    return found


def test_a_matching_agent_is_as_promised(case: Case) -> None:
    figures = case.as_promised.figures
    assert not case.as_promised.worse
    assert figures["scorer"]["input"] == case.input
    assert figures["trees"]["judged"] == 80
    assert figures["trees"]["aside"] == {}
    assert figures["out_of_range_percent"] < 2
    assert figures["now"]["top1_percent"]["value"] > 90
    assert 0 <= figures["label_error_percent"] < 0.01


def test_moved_trees_are_worse_and_worth_adding(
    case: Case, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    out, data = tmp_path / "audit", tmp_path / "data"
    family = tmp_path / "family.toml"
    family.write_text(case.family.text)
    told = ["audit", str(case.scorer), str(case.moved), "--out", str(out), "--family", str(family)]
    assert run(told) == 3
    said = capsys.readouterr().out
    assert "worse than promised in " in said
    assert "drift against" in said
    figures = json.loads((out / "audit.json").read_text())
    assert any(j["now"]["low"] > j["promised"]["high"] + 0.5 for j in figures["judged"].values())
    assert figures["judged"]["relative_forgone_percent"]["worse"]
    assert figures["judged"]["stop_loss_percent"]["now"]["value"] > 0
    page = (out / "audit.html").read_text()
    assert "Worse than promised" in page
    assert case.input in "".join(ET.fromstring(page.partition("\n")[2]).itertext())
    worth = [t for _, t in read_trees(out / WORTH_ADDING)]
    assert 20 < len(worth) == figures["trees"]["worth adding"]
    known = {json.dumps(to_record(t)) for _, t in read_trees(case.moved)}
    assert all(json.dumps(to_record(t)) in known for t in worth)
    generate(case.family, data, trees=20, seed=9)
    assert run(["generate", "--add", str(out / WORTH_ADDING), "--out", str(data), "--workers", "1"]) == 0
    assert read_manifest(data)["totals"]["trees"] == 20 + len(worth)
    drifted = {name for name, c in figures["drift"]["columns"].items() if c.get("drifted")}
    assert {"noise", "win rate", "belief strength"} <= drifted
    assert "actions" not in drifted


def test_trees_of_the_family_have_not_drifted(case: Case) -> None:
    drift = case.as_promised.figures["drift"]
    assert [name for name, c in drift["columns"].items() if c["drifted"]] == []
    features = {name for name in drift["columns"] if "range" in drift["columns"][name]}
    assert features == set(Scorer.load(case.scorer).facts["ranges"])
    assert all("training" in c for c in drift["columns"].values())
    beliefs = {"win rate", "belief strength", "span"}
    if case.input == "record":
        assert beliefs.isdisjoint(drift["columns"])  # its family has Gaussian leaves
    else:
        assert drift["columns"]["win rate"]["now"][2] == pytest.approx(0.5, abs=DRIFTED_MEDIAN)


def test_losses_are_those_of_the_picks(case: Case) -> None:
    """The forgone share once more, tree by tree, from the engine, the backup and the scorer alone."""
    scorer = Scorer.load(case.scorer)
    found = audit(case.scorer, [case.matching], trees=40, n_boot=20).figures
    total = lost = 0.0
    held: list[bool] = []
    for tree in sample_trees(read_trees(case.matching), 40, 0)[0]:
        priced = voc.price(tree, Query(batch=None, remaining=tree.remaining))
        exact = priced.voc
        if case.input == "record":
            row: dict[str, Any] = dict(Backup(tree).rows())
        else:
            table = vars(leaf_table(tree))
            names = ("alpha", "beta", "low", "high", "gain", "offset", "action", "cost")
            row = {name: table[name] for name in names}
        scores = scorer.score(**row, remaining=tree.remaining)
        held += (exact <= scores.voc_high + priced.error)[scores.in_range].tolist()
        total += exact.max()
        lost += exact.max() - exact[picks(Groups.of([0] * len(exact)), scores.voc)[0]]
    assert found["now"]["forgone_percent"]["value"] == pytest.approx(100 * lost / total, abs=QUADRATURE)
    assert found["bound"]["held_percent"] == pytest.approx(100 * float(np.mean(held)), abs=QUADRATURE)


def test_what_an_input_cannot_hold_is_aside_and_counted(coins: Case, tmp_path: Path) -> None:
    trees = [t for _, t in read_trees(coins.matching)][:30]
    gaussian = [from_record(flat_record(remaining=5)), from_record(chance_record(remaining=5))]
    crossing = replace(gaussian[1], **beliefs_of_coins(gaussian[1]))
    write_trees(tmp_path / "mixed.jsonl", [*trees, *gaussian, crossing, replace(trees[0], remaining=None)])
    found = audit(coins.scorer, [tmp_path / "mixed.jsonl"], n_boot=20).figures["trees"]
    assert found["judged"] == 30
    assert found["aside"]["Gaussian leaves, which this scorer does not read"] == 2
    assert found["aside"]["chance nodes, which a win/loss leaf table cannot hold"] == 1
    assert found["aside"]["remaining: is missing"] == 1


def test_a_record_holds_every_tree(crossings: Case, coins: Case, tmp_path: Path) -> None:
    trees = [t for _, t in read_trees(crossings.matching)][:25]
    wins = [t for _, t in read_trees(coins.matching)][:10]
    write_trees(tmp_path / "mixed.jsonl", [*trees, *wins])
    found = audit(crossings.scorer, [tmp_path / "mixed.jsonl"], n_boot=20).figures
    assert found["trees"]["judged"] == 35
    assert found["trees"]["aside"] == {}
    assert found["drift"]["reference"] is None


def test_refusals_exit_with_2(case: Case, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    few = tmp_path / "few.jsonl"
    write_trees(few, [t for _, t in read_trees(case.matching)][:5])
    assert run(["audit", str(case.scorer), str(few), "--out", str(tmp_path / "out")]) == 2
    err = capsys.readouterr().err
    assert "at least 20 decisions" in err
    assert err.count("\n") == 1
    assert not (tmp_path / "out").exists()


def test_a_family_that_the_input_cannot_hold_is_named(coins: Case, crossings: Case) -> None:
    with pytest.raises(
        InputError, match=r"family: must be what .* reads a win/loss leaf table; got 'crossings'"
    ):
        audit(coins.scorer, [coins.matching], family=crossings.family)


@pytest.mark.slow
def test_families_that_come_with_the_tool_are_found_by_name(tmp_path: Path) -> None:
    """Correlated leaves too: their exact values and backups are dear."""
    for name, trees in (("on-time", 120), ("crossing-traffic", 120), ("shared-aisles", 60)):
        family = load_family(FAMILIES / f"{name}.toml")
        folder = tmp_path / name
        generate(family, folder / "data", trees=trees, seed=1)
        train(folder / "data", folder / "trained", recipes=["boosting 25x8"], n_boot=50)
        ship(folder / "trained", folder / "scorer.onnx")
        write_trees(folder / "t.jsonl.gz", [draw(family, 5, i) for i in range(30)])
        found = audit(folder / "scorer.onnx", [folder / "t.jsonl.gz"], n_boot=50)
        assert found.figures["drift"]["reference"] == name
        assert found.figures["trees"]["judged"] + sum(found.figures["trees"]["aside"].values()) == 30
        write_audit(found, folder / "audit")
        assert name in audit_page(found.figures)
