"""A shipped scorer held to its sheet on recorded trees."""

from __future__ import annotations

import json
import xml.etree.ElementTree as ET
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from builders import chance_record, win_loss_record
from ladder import DRIFTED_MEDIAN, QUADRATURE, STANDARD_ERRORS

from distill import voc
from distill.audit import WORTH_ADDING, audit, sample_trees
from distill.cli import run
from distill.errors import InputError
from distill.family import Family, draw, load_family, parse_family
from distill.generate import generate
from distill.metrics import Groups, picks
from distill.query import Query
from distill.record import from_record, to_record
from distill.report import audit_page as page_of
from distill.report.audit_page import audit_page
from distill.runtime import Scorer
from distill.sample_data import FAMILIES
from distill.shards import read_manifest
from distill.ship import ship
from distill.traces import read_trees, write_trees
from distill.train import train
from distill.tree import BeliefTree, leaf_table

NARROW = b"""
format = "tree-family/1"
name = "narrow"
belief = "gaussian"
shape = { actions = [2, 4], leaves = [1, 4] }
prior = { sd = 1, mean = { normal = [0, 0.5] } }
noise = { sd = 1 }
budget = { rollouts = [8, 24], used = [0, 1] }
search = { thompson = 1 }
"""


@pytest.fixture(scope="module", autouse=True)
def _few_trees_stand_for_training() -> Iterator[None]:
    """Drawing them is most of an audit's time here."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("distill.drift._REFERENCE", 300)
        yield


@pytest.fixture(scope="module")
def family() -> Family:
    return parse_family(NARROW)


@pytest.fixture(scope="module")
def shipped(tmp_path_factory: pytest.TempPathFactory, family: Family) -> Path:
    """A real scorer of a narrow family, trained and shipped as users do, with its dataset beside it."""
    folder = tmp_path_factory.mktemp("shipped")
    generate(family, folder / "data", trees=300, seed=1)
    train(folder / "data", folder / "trained", recipes=["boosting 25x8"], n_boot=100)
    ship(folder / "trained", folder / "scorer.onnx")
    return folder / "scorer.onnx"


def recorded(family: Family, n: int, seed: int = 77) -> list[BeliefTree]:
    return [draw(family, seed, i) for i in range(n)]


@pytest.fixture(scope="module")
def matching(tmp_path_factory: pytest.TempPathFactory, family: Family) -> Path:
    path = tmp_path_factory.mktemp("traces") / "matching.jsonl.gz"
    write_trees(path, recorded(family, 120))
    return path


@pytest.fixture(scope="module")
def noisy(tmp_path_factory: pytest.TempPathFactory, family: Family) -> Path:
    """Trees whose rollouts have sixteen times the sd that training saw; 120 leave the verdict to chance."""
    path = tmp_path_factory.mktemp("traces") / "noisy.jsonl.gz"
    trees = recorded(family, 400)
    write_trees(path, [replace(t, noise_var=256 * t.noise_var) for t in trees if t.noise_var is not None])
    return path


def call(*argv: Any) -> int:
    return run(["audit", *map(str, argv)])


# --- the verdict ------------------------------------------------------------------------------------


def test_a_matching_agent_is_as_promised(shipped: Path, matching: Path, capsys) -> None:
    assert call(shipped, matching, "--trees", 100) == 0
    out = capsys.readouterr().out
    assert ": as promised: forgone share " in out
    assert "100 of 120 recorded trees judged" in out


def test_noise_beyond_training_is_worse(shipped: Path, noisy: Path, tmp_path: Path, capsys) -> None:
    out = tmp_path / "audit"
    assert call(shipped, noisy, "--out", out) == 3
    assert "worse than promised in " in capsys.readouterr().out
    figures = json.loads((out / "audit.json").read_text())
    assert figures["worse"]
    worst = [j for j in figures["judged"].values() if j["worse"]]
    assert worst
    for j in worst:
        assert j["now"]["low"] > j["promised"]["high"] + figures["margin"]
    assert figures["out_of_range_percent"] > 5
    assert call(shipped, noisy, "--margin", 99) == 0


@pytest.mark.slow
def test_a_scorer_of_another_family_is_worse(shipped: Path, tmp_path: Path) -> None:
    """Noise, spread and budgets over decades, met by a scorer that knows neither."""
    wide = load_family(FAMILIES / "wide-gaussian.toml")
    write_trees(tmp_path / "wide.jsonl.gz", recorded(wide, 600))
    assert call(shipped, tmp_path / "wide.jsonl.gz", "--trees", 600) == 3


@pytest.mark.slow
def test_chance_alone_is_not_called_worse(shipped: Path, family: Family, tmp_path: Path) -> None:
    for seed in range(3):
        path = tmp_path / f"{seed}.jsonl.gz"
        write_trees(path, recorded(family, 60, 500 + seed))
        assert not audit(shipped, [path], n_boot=200).worse


def test_losses_are_those_of_the_picks(shipped: Path, matching: Path) -> None:
    """The forgone share once more, tree by tree, from the engine and the scorer alone."""
    found = audit(shipped, [matching], trees=40, n_boot=50)
    total = lost = 0.0
    scorer = Scorer.load(shipped)
    sampled = {json.dumps(to_record(t)) for t in _sampled(matching, 40)}
    for _, tree in read_trees(matching):
        if json.dumps(to_record(tree)) in sampled:
            exact = voc.price(tree, Query(batch=None, remaining=tree.remaining)).voc
            table = vars(leaf_table(tree))
            row = {k: table[k] for k in ("mean", "var", "noise_var", "gain", "offset", "action", "cost")}
            score = scorer.score(**row, remaining=tree.remaining).voc
            total += exact.max()
            lost += exact.max() - exact[picks(Groups.of([0] * len(exact)), score)[0]]
    assert found.figures["now"]["forgone_percent"]["value"] == pytest.approx(
        100 * lost / total, abs=QUADRATURE
    )


def _sampled(path: Path, n: int) -> list[BeliefTree]:
    return sample_trees(read_trees(path), n, 0)[0]


def test_the_sample_is_seeded_and_fair(family: Family) -> None:
    trees = [("", t) for t in recorded(family, 30)]
    assert [t.id for t in sample_trees(trees, 99, 0)[0]] == list(range(30))
    times = np.zeros(30)
    for seed in range(600):
        kept, total = sample_trees(trees, 10, seed)
        assert total == 30
        ids = [int(t.id or 0) for t in kept]
        assert ids == sorted(ids)
        times[ids] += 1
    # Each of 30 is kept with probability 1/3: sd of a count 11.5.
    assert np.all(np.abs(times - 200) < STANDARD_ERRORS * np.sqrt(600 * 2 / 9))


def test_the_same_files_and_seed_give_the_same_figures(shipped: Path, matching: Path) -> None:
    a, b = (audit(shipped, [matching], trees=30, n_boot=50).figures for _ in range(2))
    assert json.dumps(a) == json.dumps(b)
    assert audit(shipped, [matching], trees=30, seed=1, n_boot=50).figures["now"] != a["now"]


# --- drift and what to add --------------------------------------------------------------------------


@pytest.fixture(scope="module")
def drifted(shipped: Path, noisy: Path, family: Family) -> dict[str, Any]:
    return audit(shipped, [noisy], family=family, n_boot=50).figures


def test_drift_names_the_columns_that_moved(
    shipped: Path, matching: Path, drifted: dict[str, Any], family: Family
) -> None:
    same = audit(shipped, [matching], family=family, n_boot=50).figures["drift"]
    assert [k for k, c in same["columns"].items() if c["drifted"]] == []
    moved = drifted["drift"]["columns"]
    assert moved["noise"]["drifted"]
    assert moved["noise"]["now"][2] - moved["noise"]["training"][2] == pytest.approx(
        np.log10(16), abs=DRIFTED_MEDIAN
    )
    assert not moved["actions"]["drifted"]
    assert not moved["mean spread"]["drifted"]


def test_without_the_family_drift_is_not_told(shipped: Path, matching: Path) -> None:
    found = audit(shipped, [matching], n_boot=50).figures
    assert found["drift"]["reference"] is None
    assert all("distance" not in c for c in found["drift"]["columns"].values())
    assert "not at hand" in audit_page(found)


def test_generate_adds_what_is_worth_adding(shipped: Path, noisy: Path, tmp_path: Path, capsys) -> None:
    out = tmp_path / "audit"
    call(shipped, noisy, "--out", out)
    worth = [t for _, t in read_trees(out / WORTH_ADDING)]
    figures = json.loads((out / "audit.json").read_text())
    assert 0 < len(worth) == figures["trees"]["worth adding"] < 400
    known = {json.dumps(to_record(t)) for _, t in read_trees(noisy)}
    assert all(json.dumps(to_record(t)) in known for t in worth)
    data = tmp_path / "data"
    generate(parse_family(NARROW), data, trees=60, seed=9)
    assert run(["generate", "--add", str(out / WORTH_ADDING), "--out", str(data), "--workers", "1"]) == 0
    assert read_manifest(data)["totals"]["trees"] == 60 + len(worth)
    capsys.readouterr()
    # Of the trees worth adding, those that the dataset holds by now are not offered again.
    code = call(shipped, noisy, "--out", tmp_path / "again", "--dataset", data)
    told = capsys.readouterr().out
    assert f"worth adding 0, beside {len(worth)} that the dataset holds already" in told
    assert not (tmp_path / "again" / WORTH_ADDING).exists()
    again = json.loads((tmp_path / "again" / "audit.json").read_text())
    assert again["trees"] | {"worth adding": len(worth), "in the dataset already": None} == figures["trees"]
    assert code == call(shipped, noisy)  # the verdict is the same
    assert "training's own among them if there are any" in capsys.readouterr().out
    assert "the dataset of training holds already" in audit_page(again)
    assert "its dataset was not given" in audit_page(figures)


# --- refusals ---------------------------------------------------------------------------------------


def test_trees_that_the_scorer_cannot_read_are_aside_and_counted(
    shipped: Path, family: Family, tmp_path: Path
) -> None:
    path = tmp_path / "mixed.jsonl"
    others = [from_record(r) for r in (chance_record(remaining=5), win_loss_record(remaining=5))]
    trees = recorded(family, 30)
    write_trees(path, [*trees, *others, replace(trees[0], remaining=None)])
    found = audit(shipped, [path], n_boot=50).figures["trees"]
    assert found["judged"] == 30
    assert sum(found["aside"].values()) == 3
    text = " ".join(found["aside"])
    assert all(word in text for word in ("chance", "win/loss", "remaining"))


def test_refusals_exit_with_2(shipped: Path, family: Family, tmp_path: Path, capsys) -> None:
    few = tmp_path / "few.jsonl"
    write_trees(few, recorded(family, 5))
    lone = tmp_path / "lone.onnx"
    lone.write_bytes(shipped.read_bytes())
    other = tmp_path / "other.onnx"
    other.write_bytes(shipped.read_bytes() + b" ")
    other.with_suffix(".json").write_bytes(shipped.with_suffix(".json").read_bytes())
    broken = tmp_path / "broken.onnx"
    broken.write_bytes(shipped.read_bytes())
    for argv, says in (
        ([shipped, few], "at least 20 decisions"),
        ([lone, few], "sheet, readable"),
        ([other, few], "another SHA-256"),
        ([shipped, tmp_path / "none.jsonl"], "readable file"),
    ):
        assert call(*argv, "--out", tmp_path / "out") == 2
        err = capsys.readouterr().err
        assert says in err
        assert err.count("\n") == 1
    for text in ("{", "[]", '{"format": "voc-sheet/1"}', '{"format": "voc-sheet/1", "accuracy": 3}'):
        broken.with_suffix(".json").write_text(text)
        with pytest.raises(InputError, match=r"broken\.json"):
            audit(broken, [few])
    assert not (tmp_path / "out").exists()


def test_bad_records_are_counted_or_stop_it(shipped: Path, family: Family, tmp_path: Path, capsys) -> None:
    path = tmp_path / "t.jsonl"
    write_trees(path, recorded(family, 30))
    path.write_text("nonsense\n" + path.read_text())
    assert call(shipped, path) == 0
    assert "1 bad record passed over" in capsys.readouterr().err
    assert call(shipped, path, "--strict") == 2
    assert "line 1" in capsys.readouterr().err


# --- the page ---------------------------------------------------------------------------------------


def test_the_page_shows_what_the_figures_say(
    drifted: dict[str, Any], monkeypatch: pytest.MonkeyPatch
) -> None:
    drawn: dict[str, Any] = {}
    draw_svg = page_of.svg

    def caught(figure: Any, name: str, meaning: str) -> ET.Element:
        drawn[name] = figure
        return draw_svg(figure, name, meaning)

    monkeypatch.setattr(page_of, "svg", caught)
    figures = drifted
    text = audit_page(figures)
    root = ET.fromstring(text.partition("\n")[2])
    assert "http" not in text.replace("http-equiv", "")
    assert len(root.findall(".//figure")) == 3
    for ax, j in zip(drawn["judged"].axes, figures["judged"].values(), strict=True):
        ends = [line.get_xdata().tolist() for line in ax.lines if line.get_gid() == "interval"]
        assert ends == [[j[k]["low"], j[k]["high"]] for k in ("now", "promised")]
        limit = next(line for line in ax.lines if line.get_gid() == "limit")
        assert limit.get_xdata()[0] == j["promised"]["high"] + figures["margin"]
    hostile = {**figures, "scorer": {**figures["scorer"], "name": "<script>\x00"}}
    assert "<script" not in audit_page(hostile)
