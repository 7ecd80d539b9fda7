"""Killed while a file is being written, by a process or with it: the same bytes after the next run."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

from distill.errors import InputError
from distill.family import draw, load_family
from distill.generate import Asked, Traces, add, generate
from distill.traces import write_trees

FAMILY = Path(__file__).parents[1] / "datasets" / "families" / "cold-store.toml"
COLD = load_family(FAMILY)

# Files reach the disk in small steps here, so that nearly all the time is spent inside a write.
_DRIVER = """
import os, sys, time
from distill import files
from distill.family import load_family
from distill.generate import Asked, Traces, add, generate

class Slow:
    def __init__(self, file): self.file = file
    def __enter__(self): return self
    def __exit__(self, *error): self.file.close()
    def __getattr__(self, name): return getattr(self.file, name)
    def write(self, data):
        for at in range(0, len(data), 1 << 12):
            self.file.write(data[at : at + (1 << 12)])
            self.file.flush()
            time.sleep(0.02)

real = os.fdopen
files.os.fdopen = lambda fd, mode: Slow(real(fd, mode))
print("ready", flush=True)
out, traces, workers = sys.argv[2], sys.argv[3], int(sys.argv[4])
if traces:
    add(Traces.read([traces]), out, workers=workers)
else:
    plan = dict(trees=42, seed=1, asked=Asked(horizon=0), shard_trees=8)
    generate(load_family(sys.argv[1]), out, workers=workers, **plan)
"""


def _bytes(folder):
    return {path.name: path.read_bytes() for path in Path(folder).iterdir()}


def _whole(folder, workers=1):
    generate(COLD, folder, trees=42, seed=1, asked=Asked(horizon=0), shard_trees=8, workers=workers)


def _start(folder, workers=1, traces=""):
    command = [sys.executable, "-c", _DRIVER, str(FAMILY), str(folder), str(traces), str(workers)]
    process = subprocess.Popen(command, stdout=subprocess.PIPE, start_new_session=True)
    assert process.stdout.readline() == b"ready\n"
    return process


def _killed_after(folder, seconds, **how):
    """Killed that long after its first shard began; whether it was, and whether inside a write."""
    process = _start(folder, **how)
    end = time.monotonic() + 60
    while not any(Path(folder).glob(".trees-*.part")) and process.poll() is None and time.monotonic() < end:
        time.sleep(0.002)
    time.sleep(seconds)
    os.killpg(process.pid, signal.SIGKILL)
    process.wait()
    process.stdout.close()
    return -process.returncode == signal.SIGKILL, any(Path(folder).glob(".*.part"))


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    folder = tmp_path_factory.mktemp("whole") / "d"
    _whole(folder)
    return _bytes(folder)


@pytest.mark.slow
@pytest.mark.parametrize("workers", [1, 2])
def test_killed_in_the_middle_of_a_write(tmp_path, whole, workers):
    rng = np.random.default_rng(workers)
    killed = halves = 0
    for i in range(20):
        folder = tmp_path / str(i)
        was, half = _killed_after(folder, rng.uniform(0, 1.0), workers=workers)
        killed, halves = killed + was, halves + half
        _whole(folder)
        assert _bytes(folder) == whole
    assert killed >= 10
    assert halves >= 10


@pytest.mark.slow
def test_an_addition_killed_in_the_middle_of_a_write(tmp_path):
    traces = tmp_path / "more.jsonl"
    write_trees(traces, [draw(COLD, 9, i) for i in range(120)])
    _whole(tmp_path / "start")
    _whole(tmp_path / "whole")
    add(Traces.read([traces]), tmp_path / "whole")
    expected = _bytes(tmp_path / "whole")
    rng = np.random.default_rng(3)
    killed = 0
    for i in range(10):
        folder = tmp_path / str(i)
        folder.mkdir()
        for name, data in _bytes(tmp_path / "start").items():
            (folder / name).write_bytes(data)
        killed += _killed_after(folder, rng.uniform(0, 1.0), traces=traces)[0]
        add(Traces.read([traces]), folder)
        assert _bytes(folder) == expected
    assert killed >= 5


def test_two_runs_at_once_are_refused_and_a_killed_one_lets_go(tmp_path, whole):
    process = _start(tmp_path)
    try:
        end = time.monotonic() + 60
        while not (tmp_path / "manifest.json").exists() and time.monotonic() < end:
            time.sleep(0.005)
        with pytest.raises(InputError, match="must not be written by another run at the same time"):
            _whole(tmp_path)
    finally:
        os.killpg(process.pid, signal.SIGKILL)
        process.wait()
        process.stdout.close()
    _whole(tmp_path)
    assert _bytes(tmp_path) == whole
