"""Recorded trees added to a finished dataset: none twice, resumed to the same bytes, told in the manifest."""

from __future__ import annotations

import errno
import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from distill import generate as module
from distill import shards, voc
from distill.candidates import Candidates, split_by_tree
from distill.cli import run
from distill.errors import InputError
from distill.family import draw, load_family
from distill.generate import Asked, Traces, add, generate
from distill.query import Query
from distill.record import to_record
from distill.traces import write_trees

FAMILIES = Path(__file__).parents[1] / "datasets" / "families"
COLD = load_family(FAMILIES / "cold-store.toml")
STATIC = Asked(horizon=0)
NEW = [draw(COLD, 50, i) for i in range(70)]


def _bytes(folder):
    return {path.name: path.read_bytes() for path in Path(folder).iterdir()}


@pytest.fixture
def dataset(tmp_path):
    generate(COLD, tmp_path / "d", trees=30, seed=1, asked=STATIC, shard_trees=10)
    return tmp_path / "d"


def test_added_trees_follow_and_are_labelled_as_the_dataset_asks(dataset):
    before = _bytes(dataset)
    manifest = add(Traces("audit", NEW), dataset)
    trees = dict(shards.read_trees(dataset))
    assert sorted(trees) == list(range(100))
    assert [to_record(trees[30 + i]) for i in range(70)] == [to_record(t) for t in NEW]
    found = shards.read_candidates(dataset)
    for i in (30, 64, 99):
        priced = voc.price(trees[i], Query(horizon=0, batch=None, remaining=trees[i].remaining))
        assert np.array_equal(found["label"][found["tree"] == i], priced.voc)
    assert set(found["weight"]) == {1.0}
    assert manifest["totals"]["trees"] == 100
    assert [e["trees"] for e in manifest["shards"]] == [10, 10, 10, 50, 20]
    (added,) = manifest["added"]
    assert (added["name"], added["trees"], added["known"], added["first_tree"]) == ("audit", 70, 0, 30)
    after = _bytes(dataset)
    assert {n: d for n, d in after.items() if n in before and n.endswith(".parquet")} == {
        n: d for n, d in before.items() if n.endswith(".parquet")
    }
    assert "70 recorded trees of `audit`, from number 30 on" in after["README.md"].decode()


def test_no_tree_is_added_twice(dataset):
    old = [draw(COLD, 1, i) for i in range(5)]
    again = [replace(NEW[0], id="other", extra={"verdict": "worse"})]
    manifest = add(Traces("a", [*old, *NEW[:3], *again]), dataset)
    assert (manifest["added"][0]["trees"], manifest["added"][0]["known"]) == (3, 6)
    whole = _bytes(dataset)
    assert add(Traces("a", [*old, *NEW[:3]]), dataset)["totals"]["trees"] == 33
    assert _bytes(dataset) == whole
    manifest = add(Traces("b", NEW[:5]), dataset)
    assert [a["trees"] for a in manifest["added"]] == [3, 2]
    assert manifest["added"][1]["first_tree"] == 33
    keys = [json.dumps({**to_record(t), "id": 0, "extra": {}}) for _, t in shards.read_trees(dataset)]
    assert len(keys) == len(set(keys)) == 35


def test_trees_kept_aside_are_not_added_again(tmp_path):
    strict = Asked(horizon=0, batch=1, tolerance=1e-17)
    manifest = generate(Traces("t", NEW[:30]), tmp_path, asked=strict)
    assert manifest["totals"]["aside"] > 0
    assert add(Traces("again", NEW[:30]), tmp_path)["added"] == []


def test_the_plan_of_a_dataset_with_additions_is_still_its_own(dataset):
    add(Traces("audit", NEW), dataset)
    whole = _bytes(dataset)
    generate(COLD, dataset, trees=30, seed=1, asked=STATIC, shard_trees=10)
    assert _bytes(dataset) == whole


def test_a_tree_of_before_keeps_its_part_of_the_split(tmp_path):
    generate(COLD, tmp_path, trees=60, seed=1, asked=STATIC)
    before = split_by_tree(Candidates.read(tmp_path)[0], 0)
    add(Traces("audit", NEW), tmp_path)
    after = split_by_tree(Candidates.read(tmp_path)[0], 0)
    for name, part in vars(before).items():
        assert {t for t in getattr(after, name).tree.tolist() if t < 60} == set(part.tree.tolist())


# --- stopped and refused ---------------------------------------------------------------------------


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    folder = tmp_path_factory.mktemp("added") / "d"
    generate(COLD, folder, trees=30, seed=1, asked=STATIC, shard_trees=10)
    add(Traces("audit", NEW), folder)
    return _bytes(folder)


@pytest.mark.parametrize("good", [0, 1, 3, 6])
def test_an_addition_that_was_stopped_goes_on_to_the_same_bytes(dataset, whole, monkeypatch, good):
    writes, real = iter(range(100)), module.write_atomic

    def full(path, data):
        if next(writes) >= good:
            raise OSError(errno.ENOSPC, "No space left on device", str(path))
        real(path, data)

    for place in (module, module.shards):
        monkeypatch.setattr(place, "write_atomic", full)
    with pytest.raises(OSError, match="No space left on device: finished shards are kept"):
        add(Traces("audit", NEW), dataset)
    monkeypatch.undo()
    if good > 0:
        with pytest.raises(InputError, match="must be complete"):
            shards.read_candidates(dataset)
        with pytest.raises(InputError, match=r"must have its addition finished first: run generate --add"):
            generate(COLD, dataset, trees=30, seed=1, asked=STATIC, shard_trees=10)
        with pytest.raises(
            InputError, match=r"added: name: must be 'audit', as it began, to go on; .*; got 'other'"
        ):
            add(Traces("other", NEW[:9]), dataset)
    add(Traces("audit", NEW), dataset)
    assert _bytes(dataset) == whole


def test_what_cannot_be_added_to_is_named(tmp_path, dataset):
    with pytest.raises(InputError, match=r"nowhere: must be a dataset to add trees to; it holds no manifest"):
        add(Traces("a", NEW), tmp_path / "nowhere")
    manifest = json.loads((dataset / "manifest.json").read_text())
    (dataset / "manifest.json").write_text(json.dumps({**manifest, "complete": False}))
    with pytest.raises(InputError, match="must be finished before trees are added: run generate again"):
        add(Traces("a", NEW), dataset)


def test_a_flipped_bit_is_named_before_anything_is_added(dataset):
    path = dataset / "candidates-00001.parquet"
    data = bytearray(path.read_bytes())
    data[50] ^= 8
    path.write_bytes(data)
    before = _bytes(dataset)
    with pytest.raises(InputError, match=r"candidates-00001.parquet: must have the manifest's SHA-256"):
        add(Traces("a", NEW), dataset)
    assert _bytes(dataset) == before


def test_the_command_adds(tmp_path, dataset, capsys):
    path = tmp_path / "worth.jsonl.gz"
    write_trees(path, NEW[:6])
    command = ["generate", "--add", str(path), "--out", str(dataset), "--workers", "1"]
    assert run(command) == 0
    assert "36 trees" in capsys.readouterr().out
    assert run([*command, "--seed", "3"]) == 2
    assert "--seed: must not be given with --add: the dataset says it" in capsys.readouterr().err


def test_the_command_mixes(tmp_path, capsys):
    path = tmp_path / "shift.jsonl"
    write_trees(path, NEW[:6])
    command = [
        "generate",
        "--family",
        "cold-store",
        "--traces",
        str(path),
        "--workers",
        "1",
        "--value",
        "static",
    ]
    assert run([*command, "--share", "0.5", "--close-calls", "2", "--out", str(tmp_path / "m")]) == 0
    manifest = shards.read_manifest(tmp_path / "m")
    assert (manifest["trees"], manifest["source"]["recorded"], manifest["sampling"]["close_calls"]) == (
        12,
        6,
        2,
    )
    assert run([*command[:3], "--share", "0.5", "--out", str(tmp_path / "n")]) == 2
    assert "--share: must come with --family and --traces" in capsys.readouterr().err
    assert run(["generate", "--out", str(tmp_path / "n")]) == 2
    assert "needs --family, --traces, both, or --add" in capsys.readouterr().err


def test_files_without_a_good_record_are_told_alike(tmp_path, capsys):
    path = tmp_path / "bad.jsonl"
    path.write_text('{"format": "belief-tree/1"}\n{"format": "belief-tree/2"}\n')
    told = []
    for command in (["generate", "--traces", str(path), "--out", str(tmp_path / "d"), "--workers", "1"],
                    ["infer", str(path), "--out", str(tmp_path / "f.toml")]):  # fmt: skip
        assert run(command) == 2
        told.append(capsys.readouterr().err)
    assert told[0] == told[1]
    assert f"{path}: must hold at least one valid record; all 2 are bad; got" in told[0]
    assert not (tmp_path / "d").exists()
