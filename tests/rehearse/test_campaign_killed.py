"""A rehearsal on two workers, killed without warning, goes on to the same decisions."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq
import pytest

FAST = str(Path(__file__).parents[2] / "models" / "cold-store-fast.onnx")
FLAGS = [
    *(x for name in ("tree-3x2^1-noise1", "tree-2x3^1-noise4", "tree-4x2^1-noise1", "taxi")
      for x in ("--problem", name)),
    "--budget", "24", "--budget", "20ms@1ms", "--budget", "48",
    "--policy", "uct", "--policy", "static-rate", "--policy", "exact-dynamic-rate", "--scorer", FAST,
    "--seeds", "40", "--tuning-seeds", "10",
]  # fmt: skip
CHOSEN = (
    "seed",
    "regret",
    "regret_by_mean",
    "expected_regret",
    "rollouts",
    "stopped",
    "choices",
    "fallbacks",
)


def command(out: Path) -> list[str]:
    return [sys.executable, "-m", "distill", "rehearse", "--out", str(out), *FLAGS]


def alive(group: int) -> bool:
    """Whether a process of the group is left, apart from one that is dead and not yet collected."""
    found = subprocess.run(["ps", "-eo", "pgid=,stat="], capture_output=True, text=True, check=True).stdout
    rows = (line.split() for line in found.splitlines())
    return any(int(pgid) == group and not stat.startswith("Z") for pgid, stat in rows)


@pytest.mark.slow
def test_killed_with_two_workers_it_resumes_to_the_same_decisions(tmp_path):
    whole, part = tmp_path / "whole", tmp_path / "part"
    subprocess.run(command(whole), check=True, capture_output=True, timeout=250)
    for cells in (3, 9, 20):  # killed three times, each time further on
        with subprocess.Popen(
            [*command(part), "--workers", "2"],
            stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, start_new_session=True,
        ) as run:  # fmt: skip
            until = time.monotonic() + 200
            while len(list(part.glob("cells/*--*.parquet"))) < cells and run.poll() is None:
                assert time.monotonic() < until
                time.sleep(0.02)
            assert run.poll() is None  # it is in the middle
            os.kill(run.pid, signal.SIGKILL)
        until = time.monotonic() + 100
        while alive(run.pid):  # workers see that nobody waits for them
            assert time.monotonic() < until
            time.sleep(0.2)
    subprocess.run([*command(part), "--workers", "2"], check=True, capture_output=True, timeout=250)
    names = sorted(p.name for p in whole.glob("cells/*.parquet"))
    assert names == sorted(p.name for p in part.glob("cells/*.parquet"))
    assert {p.name for p in whole.glob("places/*")} == {p.name for p in part.glob("places/*")}
    assert len(list(part.glob("places/*.done"))) == 12
    untimed = 0
    for name in names:
        a, b = pq.read_table(whole / "cells" / name), pq.read_table(part / "cells" / name)
        assert a["seed"].to_pylist() == b["seed"].to_pylist()
        if b'"seconds": null' in a.schema.metadata[b"rehearsal"]:
            untimed += 1  # at equal time regrets depend on the time that choosing really took
            for column in CHOSEN:
                assert np.array_equal(a[column].to_numpy(), b[column].to_numpy(), equal_nan=True), (
                    name,
                    column,
                )
    assert untimed == 4 * 2 * 5
