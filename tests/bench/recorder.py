"""What recording costs an agent: microseconds a decision, and the share of the aim of 20.

    OMP_NUM_THREADS=1 python tests/bench/recorder.py

Prints a Markdown table; never fails on a slow machine. `call` is the processor time of the agent's thread in `see`;
`all` adds that of the writer's thread, which an agent on one core pays too; `slowest` is the longest call
by the clock, with whatever else the machine did meanwhile. `dropped` must stay 0 for `all` to be honest.
"""

from __future__ import annotations

import sys
import tempfile
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from leaf_tables import table

from distill.recorder import Recorder

AIM = 20.0  # microseconds a decision, 64 leaves, 1 in 100
CALLS = 50_000


def measure(n_leaves: int, sample: float, calls: int) -> None:
    """One row of the table; the agent thinks for 20 microseconds between calls, so the writer keeps up."""
    tables = [table(np.random.default_rng(i), n_leaves, min(n_leaves, 5)) for i in range(200)]
    with tempfile.TemporaryDirectory() as folder:
        recorder = Recorder(folder, sample=sample)
        recorder.see(**tables[0])
        recorder.flush()
        own = slowest = 0.0
        start_all, start_own = time.process_time(), time.thread_time()
        for i in range(calls):
            t = tables[i % 200]
            began = time.perf_counter()
            recorder.see(**t)
            slowest = max(slowest, time.perf_counter() - began)
        own = time.thread_time() - start_own
        recorder.close(600)
        everything = time.process_time() - start_all
        start = time.thread_time()
        for i in range(calls):  # the same loop without the recorder
            t = tables[i % 200]
            began = time.perf_counter()
            slowest = max(slowest, time.perf_counter() - began)
        empty = time.thread_time() - start
    own, everything = ((x - empty) / calls * 1e6 for x in (own, everything))
    counters = recorder.counters
    print(
        f"| {n_leaves} | {sample:g} | {own:.2f} | {everything:.2f} | {everything / AIM:.2f} | "
        f"{slowest * 1e6:.0f} | {counters.written} | {counters.dropped} | {counters.bytes / max(counters.written, 1):.0f} |"
    )


def main() -> None:
    """All rows; the first is the one with an aim."""
    print(
        "| leaves | sample | call, us | all, us | all / 20 us | slowest, us | written | dropped | bytes a tree |"
    )
    print("|---|---|---|---|---|---|---|---|---|")
    for n_leaves, sample, calls in (
        (64, 0.01, CALLS), (64, 0.0, CALLS), (64, 0.001, CALLS), (8, 0.01, CALLS), (1024, 0.01, CALLS // 5), (64, 1.0, 500),
    ):  # fmt: skip
        measure(n_leaves, sample, calls)


if __name__ == "__main__":
    main()
