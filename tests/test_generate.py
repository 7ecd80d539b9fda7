from __future__ import annotations

import errno
import json
import os
import re
import signal
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq
import pytest

from distill import generate as module
from distill import shards, voc
from distill.errors import InputError, RefusedError
from distill.family import draw, load_family, parse_family
from distill.generate import Asked, Traces, generate
from distill.query import Query
from distill.record import to_record
from distill.traces import write_trees

FAMILIES = Path(__file__).parent.parent / "datasets" / "families"
COLD = load_family(FAMILIES / "cold-store.toml")
STATIC = Asked(horizon=0)


def _bytes(folder):
    return {path.name: path.read_bytes() for path in Path(folder).iterdir()}


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    """42 trees in 6 shards, labelled in one go."""
    folder = tmp_path_factory.mktemp("data") / "whole"
    generate(COLD, folder, trees=42, seed=1, asked=STATIC, shard_trees=8)
    return _bytes(folder)


def _again(folder, **changed):
    given = {"trees": 42, "seed": 1, "asked": STATIC, "shard_trees": 8, **changed}
    source = given.pop("source", COLD)
    return generate(source, folder, **given)


def test_labels_are_the_engine_s_answers_to_the_family_s_trees(tmp_path):
    manifest = _again(tmp_path / "d")
    found = shards.read_candidates(tmp_path / "d")
    trees = dict(shards.read_trees(tmp_path / "d"))
    assert sorted(trees) == list(range(42))
    for i, tree in trees.items():
        drawn = draw(COLD, 1, i)
        assert to_record(tree) == to_record(drawn)
        priced = voc.price(drawn, Query(horizon=0, batch=None, remaining=drawn.remaining))
        rows = found["tree"] == i
        assert np.array_equal(found["label"][rows], priced.voc)
        assert np.array_equal(found["label_batch"][rows], priced.batch)
        assert np.array_equal(found["error"][rows], priced.error)
    assert manifest["totals"] == {"trees": 42, "candidates": len(found["label"]), "aside": 0}
    assert len(manifest["shards"]) == 6
    assert np.any(found["label"] > 0)


def test_shards_are_a_hundredth_within_limits(tmp_path):
    manifest = generate(COLD, tmp_path, trees=120, asked=Asked(horizon=0, batch=1))
    assert [entry["trees"] for entry in manifest["shards"]] == [50, 50, 20]
    sizes = {1: 50, 5000: 50, 5300: 53, 99_999: 999, 10**7: 1000}
    assert {n: module._shard_trees(n) for n in sizes} == sizes


@pytest.mark.parametrize("asked", [Asked(horizon=0, batch=3), Asked(horizon=0, remaining=5)])
def test_what_is_asked_is_what_is_answered(tmp_path, asked):
    generate(COLD, tmp_path, trees=5, asked=asked)
    found = shards.read_candidates(tmp_path)
    for i in range(5):
        tree = draw(COLD, 0, i)
        query = Query(0, asked.batch, asked.remaining or tree.remaining)
        assert np.array_equal(found["label"][found["tree"] == i], voc.price(tree, query).voc)
    if asked.batch:
        assert set(found["batch"]) == {3}
        remaining = [draw(COLD, 0, i).remaining for i in range(5)]
        assert np.array_equal(found["remaining"], np.array(remaining)[found["tree"]])
    else:
        assert set(found["remaining"]) == {5}


def test_two_workers_write_the_same_bytes(tmp_path, whole):
    _again(tmp_path / "d", workers=2)
    assert _bytes(tmp_path / "d") == whole


@pytest.mark.slow
@pytest.mark.parametrize("workers", [3, 4])
def test_more_workers_write_the_same_bytes(tmp_path, whole, workers):
    _again(tmp_path / "d", workers=workers)
    assert _bytes(tmp_path / "d") == whole


def test_a_finished_dataset_is_left_alone(tmp_path, monkeypatch):
    _again(tmp_path / "d", trees=8)
    before = _bytes(tmp_path / "d")
    monkeypatch.setattr(module.shards, "write_shard", None)
    assert _again(tmp_path / "d", trees=8)["complete"]
    assert _bytes(tmp_path / "d") == before


# --- stopped and resumed ---------------------------------------------------------------------------


@pytest.mark.parametrize("good", range(0, 16, 3))
def test_a_full_disk_is_one_error_and_the_run_resumes(tmp_path, whole, monkeypatch, good):
    """The n-th write of any kind fails as a full disk does: in shards, or in the manifest."""
    writes = iter(range(10**6))
    real = module.write_atomic

    def full(path, data):
        if next(writes) >= good:
            raise OSError(errno.ENOSPC, "No space left on device", str(path))
        real(path, data)

    for place in (module, module.shards):
        monkeypatch.setattr(place, "write_atomic", full)
    with pytest.raises(OSError, match="No space left"):
        _again(tmp_path / "d")
    monkeypatch.undo()
    _again(tmp_path / "d")
    assert _bytes(tmp_path / "d") == whole


_DRIVER = """
import sys
from distill.family import load_family
from distill.generate import Asked, generate
family = load_family(sys.argv[1])
print("ready", flush=True)
plan = dict(trees=42, seed=1, asked=Asked(horizon=0), shard_trees=8)
generate(family, sys.argv[2], workers=int(sys.argv[3]), **plan)
"""


def _killed_after(folder, seconds, workers=1):
    """Start the run of `whole` in a process of its own, and kill it that long after its imports."""
    command = [sys.executable, "-c", _DRIVER, str(FAMILIES / "cold-store.toml"), str(folder), str(workers)]
    process = subprocess.Popen(command, stdout=subprocess.PIPE, start_new_session=True)
    assert process.stdout.readline() == b"ready\n"
    time.sleep(seconds)
    os.killpg(process.pid, signal.SIGKILL)
    process.wait()
    process.stdout.close()
    return -process.returncode == signal.SIGKILL


def _seconds_of_a_run(folder, workers):
    """From the end of the imports, as `_killed_after` counts."""
    command = [sys.executable, "-c", _DRIVER, str(FAMILIES / "cold-store.toml"), str(folder), str(workers)]
    with subprocess.Popen(command, stdout=subprocess.PIPE) as process:
        assert process.stdout.readline() == b"ready\n"
        start = time.perf_counter()
    return time.perf_counter() - start


def test_a_killed_run_resumes_to_the_same_bytes(tmp_path, whole):
    rng = np.random.default_rng(0)
    killed = 0
    for i in range(3):
        folder = tmp_path / str(i)
        killed += _killed_after(folder, rng.uniform(0.0, 0.15))
        _again(folder)
        assert _bytes(folder) == whole
    assert killed > 0


@pytest.mark.slow
@pytest.mark.parametrize("workers", [1, 2])
def test_runs_killed_at_many_moments_resume_to_the_same_bytes(tmp_path, whole, workers):
    """Moments within the time of a whole run; runs that were through before their moment do not count."""
    rng = np.random.default_rng(1)
    killed, i, seconds = 0, 0, _seconds_of_a_run(tmp_path / "timed", workers)
    while killed < 20:
        assert i < 100, "hardly a run was caught alive"
        folder = tmp_path / str(i)
        killed += _killed_after(folder, rng.uniform(0.0, seconds), workers)
        _again(folder)
        assert _bytes(folder) == whole
        i += 1


def test_leftovers_of_a_killed_writer_are_cleared(tmp_path, whole):
    folder = tmp_path / "d"
    folder.mkdir()
    (folder / ".trees-00000.parquet.abc.part").write_bytes(b"half")
    _again(folder)
    assert _bytes(folder) == whole


# --- another dataset in the folder -----------------------------------------------------------------


@pytest.mark.parametrize(
    ("changed", "place"),
    [
        ({"seed": 2}, r"seed: must be 1, as it began, to go on; .*; got 2"),
        ({"trees": 50}, r"trees: must be .*; got 50"),
        ({"shard_trees": 9}, r"shard_trees: must be .*; got 9"),
        ({"asked": Asked(horizon=0, batch=2)}, r"asked.batch: must be 'rate', .*; got 2"),
        ({"asked": Asked(horizon=0, tolerance=0.5)}, r"asked.tolerance: must be .*; got 0.5"),
        (
            {"source": load_family(FAMILIES / "wide-gaussian.toml")},
            r"source.name: must be 'cold-store', .*; got 'wide-gaussian'",
        ),
        ({"source": parse_family(COLD.text.encode() + b"\n")}, r"source.sha256: must be"),
        (
            {"source": Traces("t", [draw(COLD, 0, 0)]), "trees": None},
            r"source.kind: must be 'family', .*; got 'traces'",
        ),
    ],
)
def test_another_plan_is_refused_by_name(tmp_path, whole, changed, place):
    for name, data in whole.items():
        (tmp_path / name).write_bytes(data)
    with pytest.raises(InputError, match=r"manifest.json: " + place):
        _again(tmp_path, **changed)
    assert _bytes(tmp_path) == whole


def test_another_version_of_the_code_is_refused(tmp_path):
    _again(tmp_path, trees=3)
    path = tmp_path / "manifest.json"
    manifest = json.loads(path.read_text())
    manifest["code"]["numpy"] = "0.9"
    path.write_text(json.dumps(manifest))
    with pytest.raises(InputError, match=r"code.numpy: must be '0.9', as it began, to go on; .*; got"):
        _again(tmp_path, trees=3)


@pytest.mark.parametrize("damage", ["flip", "remove"])
def test_damaged_shards_are_named_before_going_on(tmp_path, whole, damage):
    for name, data in whole.items():
        (tmp_path / name).write_bytes(data)
    path = tmp_path / "trees-00002.parquet"
    if damage == "flip":
        data = bytearray(path.read_bytes())
        data[100] ^= 1
        path.write_bytes(data)
    else:
        path.unlink()
    with pytest.raises(InputError, match=r"trees-00002.parquet: (must have the manifest's|is missing)"):
        _again(tmp_path)


def test_shards_without_a_manifest_are_not_overwritten(tmp_path):
    (tmp_path / "trees-00000.parquet").write_bytes(b"mine")
    with pytest.raises(InputError, match=r"must be empty or hold a manifest.json beside its shards"):
        _again(tmp_path)
    assert _bytes(tmp_path) == {"trees-00000.parquet": b"mine"}


# --- labels that are not good enough ---------------------------------------------------------------


def test_labels_beyond_the_tolerance_are_kept_aside_and_counted(tmp_path):
    strict = Asked(horizon=0, batch=1, tolerance=1e-17)
    manifest = generate(COLD, tmp_path, trees=30, asked=strict)
    totals = manifest["totals"]
    assert totals["trees"] + totals["aside"] == 30
    assert totals["aside"] > 0
    aside = dict(shards.read_trees(tmp_path, aside=True))
    assert len(aside) == totals["aside"]
    assert sorted([*aside, *dict(shards.read_trees(tmp_path))]) == list(range(30))
    rows = pq.read_table(tmp_path / "aside-00000.parquet").to_pylist()
    for row in rows:
        priced = voc.price(draw(COLD, 0, row["tree"]), Query(horizon=0, batch=1))
        assert row["reason"].startswith("tolerance: ")
        assert row["label"] == priced.voc.tolist()
        assert row["error"] == priced.error.tolist()


def test_trees_that_no_method_prices_are_kept_aside(tmp_path, monkeypatch):
    real = voc.price_many

    def some(trees, query):
        if any(len(t.action_nodes) == 3 for t in trees):
            raise RefusedError("three actions are not priced here")
        return real(trees, query)

    monkeypatch.setattr(voc, "price_many", some)
    generate(COLD, tmp_path, trees=30, asked=Asked(horizon=0, batch=1))
    actions = [len(draw(COLD, 0, i).action_nodes) for i in range(30)]
    assert [n for n, _ in shards.read_trees(tmp_path, aside=True)] == [
        i for i, a in enumerate(actions) if a == 3
    ]
    assert [n for n, _ in shards.read_trees(tmp_path)] == [i for i, a in enumerate(actions) if a != 3]


# --- recorded trees --------------------------------------------------------------------------------


@pytest.fixture
def recorded(tmp_path):
    paths = [tmp_path / "a.jsonl", tmp_path / "b.jsonl.gz"]
    write_trees(paths[0], [draw(COLD, 5, i) for i in range(6)])
    write_trees(paths[1], [draw(COLD, 6, i) for i in range(4)])
    return paths


def test_recorded_trees_are_labelled_in_order(tmp_path, recorded):
    manifest = generate(Traces.read(recorded), tmp_path / "d", asked=STATIC)
    assert manifest["source"]["name"] == "a.jsonl, b.jsonl.gz"
    expected = [draw(COLD, 5, i) for i in range(6)] + [draw(COLD, 6, i) for i in range(4)]
    assert [to_record(t) for _, t in shards.read_trees(tmp_path / "d")] == [to_record(t) for t in expected]


def test_fewer_recorded_trees_are_a_seeded_sample(tmp_path, recorded):
    source = Traces.read(recorded)

    def sample(name, seed):
        generate(source, tmp_path / name, trees=5, seed=seed, asked=STATIC)
        return [json.dumps(to_record(t)) for _, t in shards.read_trees(tmp_path / name)]

    first = sample("a", 0)
    assert len(set(first)) == 5
    assert sample("b", 0) == first
    assert sample("c", 1) != first
    with pytest.raises(InputError, match="trees: must be at most 10, the number of recorded trees; got 11"):
        generate(source, tmp_path / "e", trees=11)


def test_the_hash_of_traces_is_of_their_trees(recorded):
    source = Traces.read(recorded)
    assert Traces("other name", source.trees).sha256 == source.sha256
    assert Traces("t", source.trees[::-1]).sha256 != source.sha256


def test_bad_recorded_lines_are_named_or_counted(recorded):
    with recorded[0].open("ab") as f:
        f.write(b"{}\n")
    with pytest.raises(InputError, match=r"a.jsonl line 7: format: is missing"):
        Traces.read(recorded)
    errors = []
    assert len(Traces.read(recorded, on_error=errors.append).trees) == 10
    assert len(errors) == 1


def test_a_rate_needs_remaining(tmp_path):
    source = Traces("t", [draw(COLD, 0, 0), replace(draw(COLD, 0, 1), remaining=None)])
    with pytest.raises(InputError, match="tree 1: remaining: must be given for a rate"):
        generate(source, tmp_path / "d", asked=STATIC)


# --- the rest --------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("changed", "message"),
    [
        ({"trees": 0}, "trees: must be a whole number from 1; got 0"),
        ({"trees": None}, "trees: must be given for a family"),
        ({"workers": 0}, "workers: must be a whole number from 1"),
        ({"shard_trees": 0}, "shard_trees: must be a whole number from 1"),
        ({"seed": -1}, "seed: must be a whole number >= 0; got -1"),
    ],
)
def test_bad_arguments_are_named(tmp_path, changed, message):
    with pytest.raises(InputError, match=message):
        _again(tmp_path / "d", **changed)
    assert not (tmp_path / "d").exists()


def test_progress_is_shown_with_rate_and_time_left_on_a_terminal_only(tmp_path, capfd, monkeypatch):
    monkeypatch.setenv("COLUMNS", "120")
    monkeypatch.setenv("TTY_COMPATIBLE", "1")
    _again(tmp_path / "d", progress=True)
    err = re.sub(r"\x1b\[[?\d;]*[a-zA-Z]", "", capfd.readouterr().err)  # without colours
    assert "42/42 trees" in err
    assert re.search(r"[\d,.]+/s.* left", err)
    monkeypatch.setenv("TTY_COMPATIBLE", "0")
    _again(tmp_path / "e", progress=True)
    assert capfd.readouterr().err == ""


def test_the_datasheet_says_what_the_dataset_is(tmp_path):
    manifest = _again(tmp_path / "d")
    page = (tmp_path / "d" / "README.md").read_text()
    assert f"{manifest['totals']['candidates']:,} candidates" in page
    assert COLD.sha256 in page
    for columns in shards.described_columns().values():
        for name, what in columns.items():
            assert f"| `{name}` | {what} |" in page
    assert (tmp_path / "d" / "family.toml").read_text() == COLD.text
