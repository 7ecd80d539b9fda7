"""What recording costs an agent: microseconds a decision, their share of the aim of 20, and stalls.

    OMP_NUM_THREADS=1 python tests/bench/recorder.py

Prints two Markdown tables; never fails on a slow machine. First: `call` is the processor time of the agent's
thread in `see`; `all` adds that of the writer's thread, which an agent on one core pays too. `dropped`
must stay 0 for `all` to be honest. Second: how long a decision takes by the clock whose work lets go of
the interpreter and wants it back, as a scorer's call does, without and with a recorder of every tree.
"""

from __future__ import annotations

import hashlib
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
WORK = b"x" * 200_000  # hashing it takes about 0.1 ms, outside the interpreter


def tables(n_leaves: int) -> list[dict[str, object]]:
    """Two hundred different ones."""
    return [table(np.random.default_rng(i), n_leaves, min(n_leaves, 5)) for i in range(200)]


def cost(n_leaves: int, sample: float, calls: int) -> str:
    """A row of the first table."""
    seen = tables(n_leaves)
    with tempfile.TemporaryDirectory() as folder:
        recorder = Recorder(folder, sample=sample)
        recorder.see(**seen[0])
        recorder.flush()
        start_all, start_own = time.process_time(), time.thread_time()
        for i in range(calls):
            recorder.see(**seen[i % 200])
        own = time.thread_time() - start_own
        recorder.close(600)
        everything = time.process_time() - start_all
    own, everything = own / calls * 1e6, everything / calls * 1e6
    counters = recorder.counters
    size = counters.bytes / max(counters.written, 1)
    return (
        f"| {n_leaves} | {sample:g} | {own:.2f} | {everything:.2f} | {everything / AIM:.2f} "
        f"| {counters.written} | {counters.dropped} | {size:.0f} |"
    )


def stall(n_leaves: int, sample: float, calls: int) -> str:
    """A row of the second table."""
    seen = tables(n_leaves)
    took = np.zeros(calls)
    with tempfile.TemporaryDirectory() as folder, Recorder(folder, sample=sample) as recorder:
        for i in range(calls):
            began = time.perf_counter()
            recorder.see(**seen[i % 200])
            hashlib.sha256(WORK)
            took[i] = time.perf_counter() - began
    middle, high, highest = np.quantile(took, [0.5, 0.99, 1]) * 1e3
    dropped = recorder.counters.dropped
    return f"| {n_leaves} | {sample:g} | {middle:.2f} | {high:.2f} | {highest:.2f} | {dropped} |"


def main() -> None:
    """Both tables; the first row is the one with an aim."""
    print("| leaves | sample | call, us | all, us | all / 20 us | written | dropped | bytes a tree |")
    print("|---|---|---|---|---|---|---|---|")
    for n_leaves, sample in ((64, 0.01), (64, 0.0), (64, 0.001), (8, 0.01)):
        print(cost(n_leaves, sample, CALLS))
    print(cost(1024, 0.01, CALLS // 5))
    print(cost(64, 1.0, 500))
    print()
    print("| leaves | sample | median, ms | 99 %, ms | longest, ms | dropped |")
    print("|---|---|---|---|---|---|")
    for n_leaves in (64, 1024, 4096):
        for sample in (0.0, 0.01, 1.0):
            print(stall(n_leaves, sample, 2000 if n_leaves < 4096 else 500))


if __name__ == "__main__":
    main()
