"""The recorder in an agent: what is written, what is counted, and that the agent never notices."""

from __future__ import annotations

import dataclasses
import errno
import gzip
import json
import os
import random
import signal
import subprocess
import sys
import threading
import time
import zlib
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from leaf_tables import table

from distill import block_files, trace_line, traces
from distill.errors import InputError
from distill.family import draw, load_family
from distill.record import from_record, parse_record, to_record
from distill.recorder import Recorder
from distill.traces import read_trees
from distill.tree import leaf_table

FAMILIES = Path(__file__).parent.parent / "datasets" / "families"
ENDS = ("written", "invalid", "dropped", "over_cap", "lost")


def small(i=0):
    """A valid table of two leaves, told from others by `extra`."""
    return {"mean": [0.0, 1.0], "var": [1.0, 1.0], "noise_var": [1, 1], "action": [0, 1], "extra": {"i": i}}


def read_all(folder):
    """Numbers of the records in a folder in file order, and the errors met."""
    errors: list[InputError] = []
    found = []
    for path in sorted(Path(folder).glob("*.jsonl.gz")):
        found += [tree.extra["i"] for _, tree in read_trees(path, on_error=errors.append)]
    return found, errors


def check_sum(recorder):
    counters = dataclasses.asdict(recorder.counters)
    assert sum(counters[name] for name in ENDS) == counters["sampled"]


# --- what is written --------------------------------------------------------------------------------


@pytest.mark.parametrize("n", [1, 2, 64, 4096])
def test_a_leaf_table_comes_back_bit_for_bit(tmp_path, n):
    t = table(np.random.default_rng(n), n, min(n, 5))
    with Recorder(tmp_path, strict=True) as recorder:
        recorder.see(**t, extra={"shift": "night", "value": np.float32(0.5), "moves": np.arange(2)})
    ((_, tree),) = read_trees(tmp_path / "trace-000001.jsonl.gz")
    back = leaf_table(tree)
    for name in ("mean", "var", "noise_var", "gain", "offset", "action", "cost"):
        np.testing.assert_array_equal(getattr(back, name), t[name])
    assert tree.remaining == t["remaining"]
    assert tree.extra == {"shift": "night", "value": 0.5, "moves": [0, 1]}
    assert recorder.counters.written == recorder.counters.files == 1
    assert recorder.counters.bytes == (tmp_path / "trace-000001.jsonl.gz").stat().st_size


def test_lists_float32_and_gaps_between_actions_are_taken(tmp_path):
    with Recorder(tmp_path, strict=True) as recorder:
        recorder.see(
            mean=np.array([0.1, 0.2, 0.3], dtype=np.float32), var=(1, 2, 3), noise_var=[1.0, 1, 1],
            action=np.array([2, 0, 2], dtype=np.uint8), remaining=np.array([40.0]),
        )  # fmt: skip
    ((_, tree),) = read_trees(tmp_path / "trace-000001.jsonl.gz")
    back = leaf_table(tree)
    assert back.action.tolist() == [1, 0, 1]
    assert back.mean is not None
    assert back.mean.tolist() == [float(np.float32(x)) for x in (0.1, 0.2, 0.3)]
    assert (back.gain.tolist(), back.offset.tolist(), back.cost.tolist()) == ([1.0] * 3, [0.0] * 3, [0.0] * 3)
    assert tree.remaining == 40


def test_counts_come_back_as_whole_numbers(tmp_path):
    with Recorder(tmp_path, strict=True) as recorder:
        for count in (np.array([3, 0]), [3.0, 0.0], np.array([3, 0], dtype=np.uint16)):
            recorder.see(**small(), count=count)
    lines = gzip.decompress((tmp_path / "trace-000001.jsonl.gz").read_bytes()).splitlines()
    assert [json.loads(line)["count"] for line in lines] == [[None, None, None, 3, 0]] * 3
    for _, tree in read_trees(tmp_path / "trace-000001.jsonl.gz"):
        assert tree.count is not None
        assert tree.count.tolist() == [3, 0]


def test_trees_of_every_kind_come_back(tmp_path):
    names = ("cold-store", "shared-aisles", "crossing-traffic", "on-time")
    trees = [draw(load_family(FAMILIES / f"{name}.toml"), 0, i) for name in names for i in range(3)]
    with Recorder(tmp_path, strict=True) as recorder:
        for tree in trees:
            recorder.see_tree(tree)
    found = [to_record(tree) for _, tree in read_trees(tmp_path / "trace-000001.jsonl.gz")]
    assert found == [to_record(tree) for tree in trees]


def test_arrays_are_copied_when_seen(tmp_path):
    t = table(np.random.default_rng(0), 64, 4)
    want = t["mean"].copy()
    with Recorder(tmp_path) as recorder:
        recorder.see(**t)
        t["mean"][:] = np.nan
        t["action"][:] = -1
    ((_, tree),) = read_trees(tmp_path / "trace-000001.jsonl.gz")
    np.testing.assert_array_equal(tree.mean, want)


# --- the sample -------------------------------------------------------------------------------------


def _chosen(folder, n=4000, **options):
    with Recorder(folder, **options) as recorder:
        for i in range(n):
            recorder.see(**small(i))
    assert recorder.counters.seen == n
    check_sum(recorder)
    return read_all(folder)[0]


def test_the_sample_repeats_by_seed_and_has_the_rate_asked_for(tmp_path):
    got = [_chosen(tmp_path / f"{i}", sample=0.1, seed=seed) for i, seed in enumerate((1, 1, 2))]
    assert got[0] == got[1] != got[2]
    for found in got:  # four standard errors of a binomial count
        assert abs(len(found) - 400) < 4 * (4000 * 0.1 * 0.9) ** 0.5


def test_gaps_are_those_of_independent_draws():
    recorder = Recorder("unused", sample=0.2, seed=3)
    drawn = np.array([recorder._drawn() for _ in range(40_000)])
    gaps = np.diff(np.flatnonzero(drawn))
    for gap in (1, 2, 5):
        p = 0.2 * 0.8 ** (gap - 1)
        assert abs(np.mean(gaps == gap) - p) < 4 * (p * (1 - p) / len(gaps)) ** 0.5


def test_a_sample_of_all_and_of_none(tmp_path):
    assert _chosen(tmp_path / "all", n=50) == list(range(50))
    assert _chosen(tmp_path / "none", n=50, sample=0) == []
    assert not (tmp_path / "none").exists()


# --- never into the agent ---------------------------------------------------------------------------

GOOD = small()


NUMBERS = st.one_of(
    st.floats(width=64),
    st.sampled_from([0.0, -0.0, 1.0, 5e-324, 1e100, 1.1e100, 1e200, 1.1e200, -1.0, 2.0**53, 2.0**54]),
)


@settings(deadline=None, max_examples=300, derandomize=True)
@given(st.data())
def test_a_table_is_taken_exactly_when_its_record_is_valid(data):
    """Against the record's own rules, on a record built the plain way."""
    n = data.draw(st.integers(1, 4))
    good = {"mean": 0.5, "var": 1.0, "noise_var": 2.0, "gain": 0.5, "offset": 0.25, "cost": 0.125}
    columns = {name: np.full(n, value) for name, value in good.items()}
    for name in data.draw(st.lists(st.sampled_from(list(good)), max_size=2)):
        columns[name][data.draw(st.integers(0, n - 1))] = data.draw(NUMBERS)
    actions = data.draw(st.lists(st.integers(0, n - 1), min_size=n, max_size=n))
    remaining = data.draw(st.one_of(st.integers(-1, 2**53 + 1), NUMBERS))
    present = sorted(set(actions))
    inner = 1 + len(present)
    plain = {
        "format": "belief-tree/1",
        "parent": [-1] + [0] * len(present) + [1 + present.index(a) for a in actions],
        "kind": ["decision"] * inner + ["leaf"] * n,
        "reward": [0] * inner + columns["offset"].tolist(),
        "discount": [1] * inner + columns["gain"].tolist(),
        "remaining": remaining,
    }
    for name in ("mean", "var", "noise_var", "cost"):
        plain[name] = [None] * inner + columns[name].tolist()
    try:
        want = to_record(from_record(plain))
    except InputError:
        want = None
    seen = trace_line.copy_table({**columns, "action": actions, "remaining": remaining}, None, (), {})
    try:
        got = to_record(parse_record(trace_line.trace_line(seen)))
    except InputError:
        got = None
    assert got == want


class Hostile:
    def __array__(self, *_, **__):
        raise RuntimeError("no array today")

    def __repr__(self):
        raise RuntimeError("no text either")


INVALID = [
    ({"var": None}, "var: is missing"),
    ({"action": None}, "action: is missing"),
    ({"gain": [1.0, 0.0]}, r"gain[1]: must be above 0 and at most 1; got 0.0"),
    ({"gain": [1.5, 1.0]}, r"gain[0]: must be above 0 and at most 1; got 1.5"),
    ({"gain": [float("nan"), 1.0]}, "gain[0]: must be above 0"),
    ({"mean": [0.0, float("nan")]}, "mean[1]: must be finite"),
    ({"var": [-1.0, 1.0]}, "var[0]: must be >= 0"),
    ({"noise_var": [0.0, 1.0]}, "noise_var[0]: must be > 0"),
    ({"offset": [float("inf"), 0.0]}, "offset[0]: must be finite and at most 1e+100"),
    ({"cost": [-1.0, 0.0]}, "cost[0]: must be finite and >= 0"),
    ({"action": [0, -1]}, "action[1]: must be from 0 to 1; got -1"),
    ({"action": [0, 2]}, "action[1]: must be from 0 to 1; got 2"),
    ({"action": [0.0, 1.0]}, "action: must hold whole numbers"),
    ({"mean": 1.0}, "mean: must have shape"),
    ({"mean": []}, "mean: must have shape"),
    ({"mean": [[0.0, 1.0]]}, "mean: must have shape"),
    ({"var": [1.0]}, "var: must have shape (2,)"),
    ({"var": ["a", "b"]}, "var: must hold numbers"),
    ({"var": [[1.0], 2.0]}, "var: must"),
    ({"var": Hostile()}, "var: must be an array of numbers"),
    ({"count": [1]}, "count: must have shape (2,)"),
    ({"count": [0, -1]}, "count[1]: must be a whole number from 0 to 2^53; got -1"),
    ({"count": [0.5, 1]}, "count[0]: must be a whole number from 0 to 2^53; got 0.5"),
    ({"count": [2.0**54, 1]}, "count[0]: must be a whole number from 0 to 2^53"),
    ({"count": [float("nan"), 1]}, "count[0]: must be a whole number from 0 to 2^53; got nan"),
    ({"count": ["a", "b"]}, "count: must hold numbers"),
    ({"mean": [], "var": [], "noise_var": [], "action": []}, "mean: must have shape (n,), n from 1"),
    ({"action": []}, "action: must have shape (2,), as 'mean'; got (0,)"),
    ({"remaining": -1}, "remaining: must be a whole number"),
    ({"remaining": 1.5}, "remaining: must be a whole number"),
    ({"remaining": float("nan")}, "remaining: must be a whole number"),
    ({"remaining": [1, 2]}, "remaining: must be one number"),
    ({"remaining": 10**400}, "remaining: must hold numbers"),
    ({"extra": [1]}, "extra: must be an object"),
    ({"extra": {"x": float("nan")}}, "extra: must be an object for JSON"),
    ({"extra": {"x": Hostile()}}, "extra: must be an object for JSON"),
    ({"extra": {1: 0, "1": 0}}, "must not occur twice"),
    ({"depth": [1, 2]}, "key 'depth': must be among mean, var, noise_var"),
]


@pytest.mark.parametrize(("change", "problem"), INVALID, ids=[p[:30] for _, p in INVALID])
def test_what_is_no_leaf_table_is_counted_and_not_written(tmp_path, change, problem):
    with Recorder(tmp_path) as recorder:
        recorder.see(**{**GOOD, **change})
        recorder.flush()
        assert problem in (recorder.counters.problem or "")
        recorder.see(**GOOD)
    assert (recorder.counters.invalid, recorder.counters.written) == (1, 1)
    check_sum(recorder)
    assert read_all(tmp_path) == ([0], [])
    with Recorder(tmp_path, strict=True) as strict, pytest.raises(InputError):
        strict.see(**{**GOOD, **change})


def test_nonsense_calls_are_counted(tmp_path):
    endless: dict[str, object] = {}
    endless["x"] = endless
    nested: list[object] = []
    for _ in range(100_000):
        nested = [nested]
    with Recorder(tmp_path) as recorder:
        recorder.see()
        recorder.see([0.0], [1.0])
        recorder.see(**{**GOOD, "extra": endless})
        recorder.see(**{**GOOD, "extra": {"x": nested}})
        recorder.see_tree(None)  # type: ignore[arg-type]
        recorder.see_tree(Hostile())  # type: ignore[arg-type]
    assert recorder.counters.invalid == recorder.counters.seen == 6
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    "options",
    [
        {"sample": 1.1}, {"sample": float("nan")}, {"sample": "0.1"}, {"name": ""}, {"name": "a/b"},
        {"name": ".x"}, {"max_file_bytes": 0}, {"max_file_bytes": 10, "max_total_bytes": 9},
        {"keep": "all"}, {"flush_seconds": 0}, {"block_bytes": 0}, {"queue_bytes": -1}, {"seed": 0.5},
    ],
)  # fmt: skip
def test_parameters_out_of_range_are_named_at_once(tmp_path, options):
    with pytest.raises(InputError, match=list(options)[-1]):
        Recorder(tmp_path, **options)


def test_a_full_queue_drops_and_counts(tmp_path, monkeypatch):
    gate = threading.Event()
    monkeypatch.setattr(
        "distill.recorder.trace_line", lambda x, _: gate.wait(20) and trace_line.trace_line(x)
    )
    with Recorder(tmp_path, queue_bytes=20_000) as recorder:
        for i in range(100):
            recorder.see(**small(i))
        dropped = recorder.counters.dropped
        assert 70 < dropped < 95  # a small tree counts for a little over 1 kB
        gate.set()
    assert recorder.counters.written == 100 - dropped
    assert read_all(tmp_path) == (list(range(100 - dropped)), [])


def test_calls_after_the_end_are_dropped(tmp_path):
    recorder = Recorder(tmp_path)
    recorder.see(**GOOD)
    assert recorder.close()
    recorder.see(**GOOD)
    assert recorder.close()
    assert recorder.flush()
    assert (recorder.counters.written, recorder.counters.dropped) == (1, 1)


def test_threads_share_a_recorder(tmp_path):
    with Recorder(tmp_path) as recorder:

        def work(start):
            for i in range(start, start + 100):
                recorder.see(**small(i))

        threads = [threading.Thread(target=work, args=(1000 * k,)) for k in range(4)]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
    found, errors = read_all(tmp_path)
    assert sorted(found) == [1000 * k + i for k in range(4) for i in range(100)]
    assert not errors
    check_sum(recorder)


def test_records_reach_the_disk_without_being_asked(tmp_path):
    recorder = Recorder(tmp_path, flush_seconds=0.05)
    recorder.see(**GOOD)
    deadline = time.monotonic() + 20
    while recorder.counters.written == 0 and time.monotonic() < deadline:
        time.sleep(0.01)
    assert read_all(tmp_path) == ([0], [])
    recorder.close()


# --- caps -------------------------------------------------------------------------------------------


def fill(folder, n=60, **options):
    with Recorder(folder, block_bytes=400, max_file_bytes=1000, **options) as recorder:
        for i in range(n):
            recorder.see(**small(i))
    check_sum(recorder)
    return recorder


def test_files_rotate_below_their_cap(tmp_path):
    recorder = fill(tmp_path, max_total_bytes=10**6)
    sizes = [p.stat().st_size for p in sorted(tmp_path.iterdir())]
    assert len(sizes) == recorder.counters.files > 3
    assert max(sizes) <= 1000
    assert sum(sizes) == recorder.counters.bytes
    assert read_all(tmp_path) == (list(range(60)), [])


def test_blocks_larger_than_a_file_are_split(tmp_path):
    with Recorder(tmp_path, max_file_bytes=400, flush_seconds=1000) as recorder:
        for i in range(40):
            recorder.see(**{**small(i), "mean": np.random.default_rng(i).normal(size=2)})
    assert recorder.counters.written == 40
    assert max(p.stat().st_size for p in tmp_path.iterdir()) <= 400
    assert read_all(tmp_path) == (list(range(40)), [])


def test_the_first_are_kept_under_the_total(tmp_path):
    recorder = fill(tmp_path, max_total_bytes=3000)
    assert sum(p.stat().st_size for p in tmp_path.iterdir()) <= 3000
    assert recorder.counters.over_cap > 0
    assert "size caps" in (recorder.counters.problem or "")
    assert read_all(tmp_path) == (list(range(recorder.counters.written)), [])
    again = fill(tmp_path, max_total_bytes=3000)  # what an earlier recorder left counts too
    assert again.counters.over_cap > again.counters.written
    assert sum(p.stat().st_size for p in tmp_path.iterdir()) <= 3000


def test_the_last_are_kept_under_the_total(tmp_path):
    (tmp_path / "notes.txt").write_text("mine")
    (tmp_path / "other-000001.jsonl.gz").write_bytes(b"x" * 5000)
    recorder = fill(tmp_path, max_total_bytes=3000, keep="last")
    assert recorder.counters.written == 60
    assert sum(p.stat().st_size for p in tmp_path.glob("trace-*")) <= 3000
    assert (tmp_path / "notes.txt").read_text() == "mine"
    (tmp_path / "other-000001.jsonl.gz").unlink()
    found, errors = read_all(tmp_path)
    assert not errors
    assert found == list(range(60 - len(found), 60))


def test_collected_files_make_room(tmp_path):
    with Recorder(tmp_path, max_file_bytes=400, max_total_bytes=400) as recorder:
        for i in range(20):
            recorder.see(**small(i))
            recorder.flush()
        assert recorder.counters.over_cap > 0
        written = recorder.counters.written
        (tmp_path / "trace-000001.jsonl.gz").unlink()
        recorder.see(**small(99))
    assert recorder.counters.written == written + 1
    assert read_all(tmp_path)[0] == [99]


def test_a_record_larger_than_a_file_is_counted(tmp_path):
    t = table(np.random.default_rng(0), 64, 4)
    with Recorder(tmp_path, max_file_bytes=500, max_total_bytes=500) as recorder:
        recorder.see(**t)
        recorder.flush()
        recorder.see(**GOOD)
    assert (recorder.counters.over_cap, recorder.counters.written) == (1, 1)


def test_recorders_share_a_folder_and_old_files_stay_as_they_are(tmp_path):
    fill(tmp_path, n=5, max_total_bytes=10**6)
    before = {p.name: p.read_bytes() for p in tmp_path.iterdir()}
    with Recorder(tmp_path) as a, Recorder(tmp_path) as b:
        for i in range(3):
            a.see(**small(100 + i))
            b.see(**small(200 + i))
            a.flush()
            b.flush()
    for name, data in before.items():
        assert (tmp_path / name).read_bytes() == data
    found, errors = read_all(tmp_path)
    assert (sorted(found), errors) == ([*range(5), 100, 101, 102, 200, 201, 202], [])


def test_a_number_taken_meanwhile_is_passed_over(tmp_path, monkeypatch):
    monkeypatch.setattr(block_files.BlockFiles, "_numbered", lambda _: [])  # as the folder was before
    for i in range(3):
        with Recorder(tmp_path) as recorder:
            recorder.see(**small(i))
        assert recorder.counters.written == 1
    assert read_all(tmp_path) == ([0, 1, 2], [])


def test_mere_repetition_is_packed_no_tighter_than_readers_allow(tmp_path):
    assert trace_line.MOST_LINE == traces._MOST_LINE
    assert trace_line._MOST_RATIO < traces._MOST_RATIO
    t = {name: np.zeros(20_000) for name in ("mean", "var")}
    with Recorder(tmp_path, strict=True) as recorder:
        for i in range(6):
            recorder.see(**t, noise_var=np.ones(20_000), action=np.zeros(20_000, dtype=int), extra={"i": i})
    assert read_all(tmp_path) == (list(range(6)), [])


# --- crashes and a full disk ------------------------------------------------------------------------


def test_a_file_cut_anywhere_gives_every_record_of_its_whole_blocks(tmp_path):
    with Recorder(tmp_path / "whole") as recorder:
        for i in range(6):
            recorder.see(**small(i))
            if i % 2:
                recorder.flush()
    data = (tmp_path / "whole" / "trace-000001.jsonl.gz").read_bytes()
    ends, rest = [0], data
    while rest:
        member = zlib.decompressobj(16 + zlib.MAX_WBITS)
        assert len(member.decompress(rest).splitlines()) == 2
        rest = member.unused_data
        ends.append(len(data) - len(rest))
    assert len(ends) == 4
    path = tmp_path / "cut.jsonl.gz"
    for cut in range(1, len(data)):
        path.write_bytes(data[:cut])
        errors: list[InputError] = []
        found = [tree.extra["i"] for _, tree in read_trees(path, on_error=errors.append)]
        whole = 2 * sum(end <= cut for end in ends[1:])
        assert found == list(range(len(found)))
        assert whole <= len(found) <= whole + 2
        assert len(errors) == (cut not in ends)
        assert all("gzip: must be whole" in str(e) for e in errors)


AGENT = """
import sys, time
from distill.recorder import Recorder
recorder = Recorder(sys.argv[1], flush_seconds=0.01, block_bytes=3000, max_file_bytes=20_000)
i = 0
while True:
    for _ in range(20):
        recorder.see(mean=[0.1 * i, 1.0], var=[1.0, 2.0], noise_var=[1.0, 1.0], action=[0, 1], extra={"i": i})
        i += 1
    if i % 100 == 0 and recorder.flush(60):
        print(i, flush=True)
    time.sleep(0.0002)
"""


def _kill_agents(tmp_path, n, seed):
    rng = random.Random(seed)
    for k in range(n):
        folder = tmp_path / f"{k}"
        agent = subprocess.Popen(
            [sys.executable, "-c", AGENT, str(folder)], stdout=subprocess.PIPE, text=True
        )
        assert agent.stdout is not None
        assert agent.stdout.readline() == "100\n"
        time.sleep(rng.uniform(0, 0.4))
        agent.send_signal(signal.SIGKILL)
        promised = 100
        for line in agent.stdout:
            promised = int(line) if line.endswith("\n") else promised
        agent.stdout.close()
        assert agent.wait() == -signal.SIGKILL
        found, errors = read_all(folder)
        assert found == list(range(len(found)))  # nothing is missing in between, nothing twice
        assert len(found) >= promised  # what was flushed is there
        assert len(errors) <= 1
        assert all("gzip: must be whole" in str(e) for e in errors)
        with Recorder(folder) as recorder:  # the next run goes on beside it
            recorder.see(**small(len(found)))
        assert read_all(folder)[0] == list(range(len(found) + 1))


def test_a_killed_agent_leaves_readable_traces(tmp_path):
    _kill_agents(tmp_path, 4, seed=0)


@pytest.mark.slow
def test_agents_killed_at_many_moments_leave_readable_traces(tmp_path):
    _kill_agents(tmp_path, 20, seed=1)


class FullDisk:
    """Takes `room` bytes, the last write in part, and then nothing."""

    def __init__(self, room):
        self.room = room
        self.write = os.write

    def __call__(self, descriptor, data):
        if self.room <= 0:
            raise OSError(errno.ENOSPC, "No space left on device")
        taken = self.write(descriptor, data[: self.room])
        self.room -= taken
        return taken


def test_a_full_disk_is_counted_and_recording_goes_on_when_there_is_room(tmp_path, monkeypatch):
    disk = FullDisk(700)
    monkeypatch.setattr(block_files.os, "write", disk)
    with Recorder(tmp_path) as recorder:
        for i in range(20):
            recorder.see(**small(i))
            recorder.flush()
        counters = recorder.counters
        written = counters.written
        assert 0 < written < 10
        assert counters.lost == counters.errors == 20 - written
        assert "No space left on device" in (counters.problem or "")
        assert read_all(tmp_path) == (list(range(written)), [])
        disk.room = 10**6
        recorder.see(**small(99))
    assert recorder.counters.written == written + 1
    check_sum(recorder)
    assert read_all(tmp_path) == ([*range(written), 99], [])
    assert sorted(p.name for p in tmp_path.iterdir()) == ["trace-000001.jsonl.gz", "trace-000002.jsonl.gz"]


def test_strict_mode_tells_of_failed_writes(tmp_path, monkeypatch):
    monkeypatch.setattr(block_files.os, "write", FullDisk(0))
    recorder = Recorder(tmp_path, strict=True)
    recorder.see(**GOOD)
    with pytest.raises(OSError, match="No space left"):
        recorder.close()
    assert list(tmp_path.iterdir()) == []


def test_a_limit_on_file_sizes_by_the_system_is_counted(tmp_path):
    """A real failing write, in part: the system's own limit, in a process of its own."""
    code = """
import resource, sys
from distill.recorder import Recorder
resource.setrlimit(resource.RLIMIT_FSIZE, (600, 600))
with Recorder(sys.argv[1]) as recorder:
    for i in range(12):
        recorder.see(mean=[0.1 * i], var=[1.0], noise_var=[1.0], action=[0], extra={"i": i})
        recorder.flush()
print(recorder.counters.written, recorder.counters.lost, recorder.counters.errors)
"""
    done = subprocess.run(
        [sys.executable, "-c", code, str(tmp_path)], capture_output=True, text=True, check=True
    )
    written, lost, errors = map(int, done.stdout.split())
    assert (written + lost, done.stderr) == (12, "")
    assert errors == lost > 0
    found, problems = read_all(tmp_path)
    assert (len(found), problems) == (written, [])


def test_a_folder_that_cannot_be_made_is_counted(tmp_path):
    (tmp_path / "file").write_text("")
    with Recorder(tmp_path / "file" / "traces") as recorder:
        recorder.see(**GOOD)
    assert (recorder.counters.lost, recorder.counters.errors) == (1, 1)
    assert "Not a directory" in (recorder.counters.problem or "")


def test_first_blocks_of_killed_writers_are_swept(tmp_path):
    old, new = tmp_path / ".trace-a.part", tmp_path / ".trace-b.part"
    for path in (old, new):
        path.write_bytes(b"x")
    os.utime(old, (1, 1))
    with Recorder(tmp_path) as recorder:
        recorder.see(**GOOD)
    assert sorted(p.name for p in tmp_path.iterdir()) == [".trace-b.part", "trace-000001.jsonl.gz"]


def test_a_file_system_without_hard_links_will_do(tmp_path, monkeypatch):
    def refuse(*_):
        raise OSError(errno.EPERM, "Operation not permitted")

    monkeypatch.setattr(block_files.os, "link", refuse)
    recorder = fill(tmp_path, max_total_bytes=10**6)
    assert recorder.counters.written == 60
    assert read_all(tmp_path) == (list(range(60)), [])


# --- ends of processes ------------------------------------------------------------------------------


def _run(code, folder):
    done = subprocess.run(
        [sys.executable, "-W", "ignore", "-c", code, str(folder)],
        capture_output=True,
        text=True,
        check=False,
        timeout=60,
    )
    assert (done.returncode, done.stderr) == (0, "")
    return done.stdout


def test_the_end_of_the_interpreter_flushes(tmp_path):
    code = """
import sys
from distill.recorder import Recorder
recorder = Recorder(sys.argv[1], flush_seconds=1000)
for i in range(5):
    recorder.see(mean=[0.0], var=[1.0], noise_var=[1.0], action=[0], extra={"i": i})
"""
    _run(code, tmp_path)
    assert read_all(tmp_path) == ([0, 1, 2, 3, 4], [])


@pytest.mark.skipif(not hasattr(os, "fork"), reason="no fork here")
def test_after_a_fork_both_sides_record_what_they_see_once(tmp_path):
    code = """
import os, sys
from distill.recorder import Recorder
recorder = Recorder(sys.argv[1], flush_seconds=1000)
see = lambda i: recorder.see(mean=[0.0], var=[1.0], noise_var=[1.0], action=[0], extra={"i": i})
for i in range(3):
    see(i)
recorder.flush()
see(3)  # waits in the parent's queue or block
children = []
for k in range(1, 4):
    recorder._lock.acquire()  # as another thread might hold it at the moment of the fork
    child = os.fork()
    if child == 0:
        assert recorder.counters.seen == 0
        for i in range(3):
            see(10 * k + i)
        assert recorder.close()
        assert recorder.counters.written == 3, recorder.counters
        os._exit(0)
    recorder._lock.release()
    children.append(child)
see(4)
assert all(os.waitpid(child, 0)[1] == 0 for child in children)
"""
    _run(code, tmp_path)
    found, errors = read_all(tmp_path)
    assert (sorted(found), errors) == ([0, 1, 2, 3, 4, 10, 11, 12, 20, 21, 22, 30, 31, 32], [])


@pytest.mark.skipif(not hasattr(signal, "setitimer"), reason="no timers here")
def test_a_signal_handler_may_record_too(tmp_path):
    code = """
import signal, sys, time
from distill.recorder import Recorder
recorder = Recorder(sys.argv[1], queue_bytes=2**28)
see = lambda *_: recorder.see(mean=[0.0], var=[1.0], noise_var=[1.0], action=[0])
signal.signal(signal.SIGALRM, see)
signal.setitimer(signal.ITIMER_REAL, 1e-3, 1e-3)
n = 0
while n < 300 or recorder.counters.seen < n + 5:
    see()
    n += 1
    time.sleep(0)
signal.setitimer(signal.ITIMER_REAL, 0)
assert recorder.close(60)
c = recorder.counters
assert c.written == c.sampled, c
"""
    _run(code, tmp_path)


def test_a_call_inside_a_call_does_not_wait_for_it(tmp_path):
    code = """
import sys
from distill.recorder import Recorder
recorder = Recorder(sys.argv[1])
with recorder._lock:  # where a signal may arrive
    recorder.see(mean=[0.0], var=[1.0], noise_var=[1.0], action=[0], extra={"i": 0})
"""
    _run(code, tmp_path)
    assert read_all(tmp_path) == ([0], [])


def test_importing_it_imports_nothing_heavy():
    code = "import sys, distill.recorder; print(sorted({m.partition('.')[0] for m in sys.modules}))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    for name in ("onnxruntime", "onnx", "numba", "scipy", "pyarrow", "rich"):
        assert f"'{name}'" not in done.stdout


def test_files_are_plain_gzip_of_json_lines(tmp_path):
    with Recorder(tmp_path) as recorder:
        for i in range(3):
            recorder.see(**small(i))
            recorder.flush()
    lines = gzip.decompress((tmp_path / "trace-000001.jsonl.gz").read_bytes()).splitlines()
    assert [json.loads(line)["extra"]["i"] for line in lines] == [0, 1, 2]
