"""What one decision by a scorer file costs: microseconds by number of leaves, and where they go.

    OMP_NUM_THREADS=1 python tests/bench/scorer.py [SCORER.onnx ...]

Without a file, small ones are made from a rule. Prints two Markdown tables; never fails on a slow machine.
First: raw arrays in, pick out, median and least of many calls, and the least a leaf. Second, at 64 leaves:
nodes of the graph, onnxruntime alone, the rest of the call, and the closed form that the runtime falls
back to.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from leaf_tables import table
from scorers import KINDS, scorer_bytes

from distill.onnx_reader import read_model
from distill.runtime import Scorer

LEAVES = (8, 64, 256, 1024, 4096)


def timed(act: Callable[[], object], seconds: float = 1.0) -> tuple[float, float]:
    """Median and least microseconds of a call."""
    for _ in range(100):
        act()
    spent, end = [], time.perf_counter() + seconds
    while time.perf_counter() < end:
        start = time.perf_counter_ns()
        act()
        spent.append(time.perf_counter_ns() - start)
    return float(np.median(spent)) / 1e3, min(spent) / 1e3


def in_range(scorer: Scorer, n: int) -> dict[str, object]:
    """A table that the file answers alone, or the last of fifty tries."""
    for seed in range(50):
        t = table(np.random.default_rng(seed), n, min(n, 6))
        if scorer.score(**t).in_range.all():
            break
    return t


def main() -> None:
    files = {path: Path(path).read_bytes() for path in sys.argv[1:]}
    files = files or {kind: scorer_bytes(kind) for kind in KINDS}
    scorers = {name: Scorer.from_bytes(data) for name, data in files.items()}
    print("| scorer | leaves | median, us | least, us | least a leaf, us |\n| --- | --- | --- | --- | --- |")
    for name, scorer in scorers.items():
        for n in LEAVES:
            t = in_range(scorer, n)
            median, least = timed(lambda s=scorer, t=t: s.pick(**t))
            print(f"| {name} | {n} | {median:.1f} | {least:.1f} | {least / n:.3f} |")
    print("\n| scorer | nodes | onnxruntime, us | rest of the call, us | closed form, us |")
    print("| --- | --- | --- | --- | --- |")
    closed = Scorer.closed_form()
    for name, scorer in scorers.items():
        t = in_range(scorer, 64)
        whole = timed(lambda s=scorer, t=t: s.pick(**t))[1]
        binding = scorer._local.kept[64].binding
        alone = timed(lambda s=scorer, b=binding: s._session.run_with_iobinding(b))[1]
        fallback = timed(lambda t=t: closed.pick(**t))[1]
        nodes = len(read_model(files[name]).nodes)
        print(f"| {name} | {nodes} | {alone:.1f} | {whole - alone:.1f} | {fallback:.1f} |")


if __name__ == "__main__":
    main()
