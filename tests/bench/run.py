"""Labels a second and core of every exact method, their ratio to the oracle, and growth with the leaves.

    OMP_NUM_THREADS=1 python tests/bench/run.py [NAME ...]

One thread, one process. Prints a Markdown table; never fails on a slow machine. `of aim` is the rate over the
figure that the engine is built for; `x oracle` is the time of one label of the oracle over that of one
here; `x sampling` is what plain Monte Carlo would take until four standard errors are the error that the
case aims at, worked out from a short run.
"""

from __future__ import annotations

import math
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from dense_trees import two_level
from win_loss_builders import arms

from distill import voc
from distill.family import draw, parse_family
from distill.oracle import dense, independent, win_loss
from distill.query import Query, scale_of
from distill.tree import BeliefTree

FAMILY = """
format = "tree-family/1"
name = "bench"
belief = "gaussian"
shape = { actions = %(actions)s, leaves = %(leaves)s, depth = %(depth)s, branching = [2, 3] }
edge = { reward = { normal = [0, 0.2] }, discount = [0.9, 1] }
prior = { action = { normal = [0, 0.3] }, mean = { normal = [0, 0.5] }, sd = { log_uniform = [0.5, 2] } }
noise = { sd = { log_uniform = [0.5, 4] } }
budget = { rollouts = 100, used = [0, 0.6] }
search = { even = 1, uct = 1, thompson = 2, static_rate = 2 }
%(more)s
"""


def family(
    count: int,
    actions: object = "[2, 6]",
    leaves: object = "[1, 12]",
    depth: object = "[2, 4]",
    more: str = "",
) -> list[BeliefTree]:
    """Trees as a search would meet them."""
    text = FAMILY % {"actions": actions, "leaves": leaves, "depth": depth, "more": more}
    return [draw(parse_family(text.encode(), "bench"), 5, i) for i in range(count)]


def correlated(count: int, groups: int = 8, leaves: int = 8) -> list[BeliefTree]:
    """Trees of groups x leaves with a random covariance of unit scale."""
    rng = np.random.default_rng(7)
    out = []
    for _ in range(count):
        n = groups * leaves
        loading = rng.normal(size=(n, 6)) / 3
        cov = loading @ loading.T + np.diag(rng.uniform(0.2, 1.0, n))
        means = rng.normal(0, 0.5, (groups, leaves)).tolist()
        out.append(two_level(means, cov, rng.uniform(0.5, 4, n)))
    return out


def coins(count: int) -> list[BeliefTree]:
    """5 x 5 win/loss leaves, half-searched."""
    rng = np.random.default_rng(11)
    return [
        arms(*([(1 + float(a), 1 + float(b)) for a, b in rng.integers(0, 8, (5, 2))] for _ in range(5)))
        for _ in range(count)
    ]


@dataclass(frozen=True)
class Case:
    """Trees, what is asked, the aims: labels a second, error as a share of scale; the oracle of one label."""

    trees: Callable[[], list[BeliefTree]]
    query: Query
    aim: float
    error: float
    oracle: Callable[[BeliefTree, int], float] | None = None


def flat_oracle(horizon: float) -> Callable[[BeliefTree, int], float]:
    """The oracle of one rollout at independent leaves."""
    return lambda tree, leaf: independent.voc(tree, leaf, 1, horizon)


RATE = Query(math.inf, None, 100)
CHANCE = "chance = { share = 0.5 }"
CASES = {
    "static, independent": Case(lambda: family(4000), Query(0.0), 1e6, 1e-12, flat_oracle(0.0)),
    "dynamic, independent, decisions": Case(
        lambda: family(400), Query(), 30_000, 1e-8, flat_oracle(math.inf)
    ),
    "horizon 8, independent, decisions": Case(
        lambda: family(400), Query(8.0), 30_000, 1e-8, flat_oracle(8.0)
    ),
    "dynamic, chance nodes, depth 4": Case(
        lambda: family(100, "[2, 5]", "[2, 6]", 4, CHANCE), Query(), 3000, 1e-6
    ),
    "static, dense, 64 leaves": Case(
        lambda: correlated(20), Query(0.0), 5000, 1e-10, lambda t, i: dense.static_voc(t, i, 1)
    ),
    "dynamic, dense, 64 leaves, sampling": Case(lambda: correlated(2), Query(), 200, 4e-4),
    "win/loss, dynamic, 25 leaves": Case(
        lambda: coins(100), Query(), 5000, 1e-9, lambda t, i: win_loss.voc(t, math.inf, i, 1)
    ),
    "rate, dynamic, independent, 25 leaves": Case(lambda: family(60, 5, 5), RATE, 4000, 1e-6),
    "rate, dynamic, win/loss, 25 leaves": Case(lambda: coins(20), RATE, 500, 1e-6),
    "rate, static, dense, 64 leaves": Case(lambda: correlated(10), Query(0.0, None, 100), 1000, 1e-8),
}


def seconds_per_label(trees: list[BeliefTree], query: Query) -> tuple[float, list]:
    """Time a label after compilation, best of three passes, and the labels."""
    voc.price_many(trees[:2], query)
    best, priced = math.inf, []
    for _ in range(3):
        start = time.process_time()
        priced = voc.price_many(trees, query)
        best = min(best, time.process_time() - start)
    return best / sum(t.n_leaves for t in trees), priced


def sampling_seconds(tree: BeliefTree, leaf: int, query: Query, error: float) -> float:
    """Time that plain Monte Carlo of one label needs for the standard error `error`, from a short run."""
    start = time.process_time()
    rng = np.random.default_rng(0)
    if query.horizon == 0:
        b, _ = dense.posterior(tree, leaf, 1)
        rises = [dense.root_value(tree, tree.mean + z * b) for z in rng.standard_normal(200)]
        spread = float(np.std(rises) / math.sqrt(len(rises)))
    else:
        _, spread = dense.monte_carlo_voc(tree, leaf, 1, query.horizon, rng, 50, 500)
    return (time.process_time() - start) * (spread / error) ** 2


def methods(names: list[str]) -> None:
    """The table of methods."""
    print("| case | labels/s/core | of aim | error, of scale: median, largest | x oracle | x sampling |")
    print("| --- | --- | --- | --- | --- | --- |")
    for name, case in CASES.items():
        if names and name not in names:
            continue
        trees = case.trees()
        each, priced = seconds_per_label(trees, case.query)
        share = np.concatenate([p.error / scale_of(t) for t, p in zip(trees, priced, strict=True)])
        worth = [p.voc.max() / scale_of(t) for t, p in zip(trees[:20], priced[:20], strict=True)]
        tree = trees[int(np.argmax(worth))]  # one where there is something to find
        leaf = int(np.argmax(priced[int(np.argmax(worth))].voc))
        ratio = sampling = ""
        if case.oracle is not None:
            start = time.process_time()
            case.oracle(tree, leaf)
            ratio = f"{(time.process_time() - start) / each:,.0f}"
        if tree.mean is not None and not case.query.rate:
            seconds = sampling_seconds(tree, leaf, case.query, case.error / 4 * scale_of(tree))
            sampling = f"{seconds / each:.1e}"
        cells = (
            f"{1 / each:,.0f}", f"{1 / each / case.aim:.1f}",
            f"{np.median(share):.0e}, {share.max():.0e}", ratio, sampling,
        )  # fmt: skip
        print(f"| {name} | " + " | ".join(cells) + " |", flush=True)


def growth() -> None:
    """Time a label as the leaves grow, 4 root actions."""
    sizes = (8, 64, 512, 4096)
    print("\n| microseconds a label | " + " | ".join(f"{n} leaves" for n in sizes) + " | 4,096 over 64 |")
    print("| --- |" + " --- |" * (len(sizes) + 1))
    for name, query in (("static", Query(0.0)), ("dynamic", Query()), ("dynamic rate, 100 left", RATE)):
        each = []
        for n in sizes:
            trees = family(max(1, 256 // n), 4, n // 4, 2)
            each.append(seconds_per_label(trees, query)[0] * 1e6)
        print(
            f"| {name} | " + " | ".join(f"{x:.3g}" for x in each) + f" | {each[3] / each[1]:.2f} |",
            flush=True,
        )


if __name__ == "__main__":
    methods(sys.argv[1:])
    if len(sys.argv) == 1:
        growth()
