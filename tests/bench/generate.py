"""Labels a second with one and two workers, their ratio, and what loading a million candidates takes.

    OMP_NUM_THREADS=1 python tests/bench/generate.py [TREES]

Prints Markdown tables; never fails on a slow machine. Run it on an otherwise idle machine of two cores or
more. First table: wall-clock time of `generate` with the dynamic rate, start of the worker processes
included; `steady` is the ratio without it: of the rates between the first shard and the last. The aim is 1.7
with two workers. Second: what one tree costs where, in one process. Third: a million candidates read for
training, aim 3 s and 1,024 MB.
"""

from __future__ import annotations

import json
import subprocess
import sys
import tempfile
import time
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1]))

from distill import shards, voc
from distill.family import Family, draw, load_family
from distill.generate import Asked, generate
from distill.shards import Labelled

FAMILIES = Path(__file__).parents[2] / "datasets" / "families"
LOAD = """
import json, sys, time
from distill.candidates import Candidates
start = time.perf_counter()
c, _ = Candidates.read(sys.argv[1])
seconds = time.perf_counter() - start
peak = next(line for line in open("/proc/self/status") if line.startswith("VmHWM:"))
print(json.dumps([len(c.label), seconds, int(peak.split()[1]) / 1024]))
"""


def timed(family: Family, trees: int, workers: int, folder: Path) -> tuple[float, float, int]:
    """Seconds of all, trees a second between the first shard and the last, and labels made."""
    start = time.perf_counter()
    manifest = generate(family, folder, trees=trees, workers=workers)
    seconds = time.perf_counter() - start
    written = sorted(path.stat().st_mtime for path in folder.glob("candidates-*.parquet"))
    one = manifest["shards"][0]["trees"]
    return seconds, (trees - one) / (written[-1] - written[0]), manifest["totals"]["candidates"]


def speed(name: str, trees: int) -> str:
    """A row of the first table."""
    family = load_family(FAMILIES / f"{name}.toml")
    generate(family, tempfile.mkdtemp(), trees=20)  # methods compiled
    found = {}
    for workers in (1, 2):
        with tempfile.TemporaryDirectory() as folder:
            found[workers] = timed(family, trees, workers, Path(folder))
    (one, slow, labels), (two, fast, _) = found[1], found[2]
    return (
        f"| {name} | {trees} | {labels / one:,.0f} | {labels / two:,.0f} | {one:.1f} | {two:.1f} "
        f"| {one / two:.2f} | {fast / slow:.2f} |"
    )


def costs(name: str, trees: int) -> str:
    """A row of the second table: microseconds a tree."""
    family = load_family(FAMILIES / f"{name}.toml")
    took = []

    def lap(start: float) -> float:
        took.append((time.perf_counter() - start) / trees * 1e6)
        return time.perf_counter()

    start = time.perf_counter()
    drawn = [draw(family, 0, i) for i in range(trees)]
    start = lap(start)
    queries = [Asked().query(t) for t in drawn]
    priced = [voc.price(t, q) for t, q in zip(drawn, queries, strict=True)]
    start = lap(start)
    rows = [Labelled(i, t, q, p) for i, (t, q, p) in enumerate(zip(drawn, queries, priced, strict=True))]
    shards.encode_shard(0, rows)
    lap(start)
    return f"| {name} | {took[0]:,.0f} | {took[1]:,.0f} | {took[2]:,.0f} |"


def load() -> str:
    """The row of the third table, best of three processes."""
    with tempfile.TemporaryDirectory() as folder:
        generate(
            load_family(FAMILIES / "cold-store.toml"), folder, trees=38_500, workers=2,
            asked=Asked(horizon=0, batch=1),
        )  # fmt: skip
        runs = [json.loads(subprocess.check_output([sys.executable, "-c", LOAD, folder])) for _ in range(3)]
    rows, seconds, _ = min(runs, key=lambda run: run[1])
    return f"| {rows:,} | {seconds:.2f} | {max(run[2] for run in runs):,.0f} |"


def main() -> None:
    """All tables."""
    trees = int(sys.argv[1]) if len(sys.argv) > 1 else 20_000
    print("| family | trees | labels/s, 1 | labels/s, 2 | s, 1 | s, 2 | ratio | steady |")
    print("|---|---|---|---|---|---|---|---|")
    for name, share in (("cold-store", 1), ("wide-gaussian", 1), ("on-time", 4)):
        print(speed(name, trees // share), flush=True)
    print("\n| family | draw, us a tree | label | encode |\n|---|---|---|---|")
    for name in ("cold-store", "wide-gaussian", "on-time"):
        print(costs(name, 500), flush=True)
    print("\n| candidates | s | peak MB |\n|---|---|---|")
    print(load())


if __name__ == "__main__":
    main()
