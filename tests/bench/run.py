"""Labels a second and core of every exact method, their ratio to the oracle, and growth with the leaves.

    OMP_NUM_THREADS=1 python tests/bench/run.py [NAME ...]

One thread, one process. Prints a Markdown table; never fails on a slow machine. `of aim` is the rate over the
figure that the engine is built for; `x oracle` is the time of one label of the oracle over that of one
here; `x sampling` is what plain Monte Carlo would take until four standard errors are the error that the
case aims at, worked out from a short run. Rates: the oracle prices every batch, worked out from a middle one.
The last line holds the compiled flat method against plain vectorised NumPy.
"""

from __future__ import annotations

import math
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parent))
sys.path.insert(0, str(Path(__file__).parents[1]))

import numpy_flat
from dense_trees import two_level
from win_loss_builders import arms

from distill import schema, voc
from distill.family import draw, load_family, parse_family
from distill.oracle import chance, dense, independent, win_loss
from distill.query import Query, scale_of
from distill.record import from_record
from distill.sample_data import FAMILIES
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


def balanced(count: int, width: int = 3) -> list[BeliefTree]:
    """Decision, chance, decision, chance and leaves by turns, `width` children everywhere: 3^4 leaves."""
    rng = np.random.default_rng(13)
    out = []
    for _ in range(count):
        parent, kind, level, prob = [-1], ["decision"], [0], [None]
        for v in range((width**4 - 1) // (width - 1)):
            odds = rng.dirichlet(np.ones(width)).tolist()
            for c in range(width):
                parent.append(v)
                level.append(level[v] + 1)
                kind.append(("decision", "chance", "decision", "chance", "leaf")[level[-1]])
                prob.append(odds[c] if kind[v] == "chance" else None)

        def column(draw: Callable[[], float], kind: list[str] = kind) -> list[float | None]:
            return [float(draw()) if k == "leaf" else None for k in kind]

        columns = {
            "mean": column(rng.standard_normal),
            "var": column(lambda: rng.uniform(0.5, 2)),
            "noise_var": column(lambda: rng.uniform(1, 9)),
        }
        out.append(
            from_record({"format": "belief-tree/1", "parent": parent, "kind": kind, "prob": prob, **columns})
        )
    return out


def coins_below_chance(count: int) -> list[BeliefTree]:
    """The win/loss family with chance nodes, below choices too."""
    text = (FAMILIES / "on-time.toml").read_text().replace("depth = [2, 3]", "depth = 4")
    family = parse_family(f"{text}\n[chance]\nshare = 0.5\n".encode(), "bench")
    return [draw(family, 5, i) for i in range(count)]


Oracle = Callable[[BeliefTree, int, int, float], float]


@dataclass(frozen=True)
class Case:
    """Trees, what is asked, the aims: labels a second (None: none set), error as a share of scale; the oracle
    of one label (tree, leaf, batch, horizon)."""

    trees: Callable[[], list[BeliefTree]]
    query: Query
    aim: float | None
    error: float
    oracle: Oracle | None = None


def _flat(tree: BeliefTree, leaf: int, k: int, h: float) -> float:
    return independent.voc(tree, leaf, k, h)


def _chance(tree: BeliefTree, leaf: int, k: int, h: float) -> float:
    return chance.voc(tree, leaf, k, h)


def _dense(tree: BeliefTree, leaf: int, k: int, h: float) -> float:
    assert h == 0
    return dense.static_voc(tree, leaf, k)


def _coins(tree: BeliefTree, leaf: int, k: int, h: float) -> float:
    return win_loss.voc(tree, h, leaf, k)


RATE = Query(math.inf, None, 100)
CHANCE = "chance = { share = 0.5 }"
CASES = {
    "static, independent": Case(lambda: family(4000), Query(0.0), 1e6, 1e-12, _flat),
    "dynamic, independent, decisions": Case(lambda: family(400), Query(), 30_000, 1e-8, _flat),
    "horizon 8, independent, decisions": Case(lambda: family(400), Query(8.0), 30_000, 1e-8, _flat),
    "dynamic, chance nodes, depth 4": Case(
        lambda: family(100, "[2, 5]", "[2, 6]", 4, CHANCE), Query(), 3000, 1e-6, _chance
    ),
    "horizon 8, chance nodes, depth 4": Case(
        lambda: family(100, "[2, 5]", "[2, 6]", 4, CHANCE), Query(8.0), 3000, 1e-6, _chance
    ),
    "dynamic, chance nodes, crossing-traffic": Case(
        lambda: [draw(load_family(FAMILIES / "crossing-traffic.toml"), 5, i) for i in range(60)],
        Query(), 3000, 1e-6, _chance,
    ),
    "dynamic, chance nodes, 81 leaves, balanced": Case(lambda: balanced(3), Query(), 3000, 1e-6),
    "static, dense, 64 leaves": Case(lambda: correlated(20), Query(0.0), 5000, 1e-10, _dense),
    "dynamic, dense, 64 leaves, sampling": Case(lambda: correlated(4), Query(), 200, 4e-4),
    "win/loss, dynamic, 25 leaves": Case(lambda: coins(100), Query(), 5000, 1e-9, _coins),
    "win/loss, horizon 8, 25 leaves": Case(lambda: coins(100), Query(8.0), None, 1e-9),
    "win/loss, dynamic, chance below choices": Case(lambda: coins_below_chance(60), Query(), None, 1e-6),
    "rate, dynamic, independent, 25 leaves": Case(lambda: family(60, 5, 5), RATE, 4000, 1e-6, _flat),
    "rate, dynamic, win/loss, 25 leaves": Case(lambda: coins(20), RATE, 500, 1e-6, _coins),
    "rate, static, dense, 64 leaves": Case(
        lambda: correlated(10), Query(0.0, None, 100), 1000, 1e-8, _dense
    ),
}  # fmt: skip


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


def coin_sampling_seconds(tree: BeliefTree, leaf: int, query: Query, error: float) -> float:
    """The same for win/loss leaves, one trial."""
    assert query.horizon == math.inf
    assert tree.alpha is not None
    assert tree.beta is not None
    assert tree.low is not None
    assert tree.high is not None
    rng = np.random.default_rng(0)
    start = time.process_time()
    found = []
    a, b = tree.alpha[leaf], tree.beta[leaf]
    for _ in range(20):
        worth = []
        for alpha, beta in ((0, 0), (1, 0), (0, 1)):
            p = rng.beta(tree.alpha, tree.beta, (200, tree.n_leaves))
            p[:, leaf] = rng.beta(a + alpha, b + beta, 200)
            worth.append(_mean_values(tree, tree.low + (tree.high - tree.low) * p).max())
        found.append((a * worth[1] + b * worth[2]) / (a + b) - worth[0])
    spread = float(np.std(found) / math.sqrt(len(found)))
    return (time.process_time() - start) * (spread / error) ** 2


def _mean_values(tree: BeliefTree, x: np.ndarray) -> np.ndarray:
    """Mean of every root action over rows of leaf values."""
    values = {int(node): x[:, i] for i, node in enumerate(tree.leaf_nodes)}
    for node in range(tree.n_nodes - 1, 0, -1):
        if node not in values:
            kids = np.flatnonzero(tree.parent == node)
            q = np.stack([tree.reward[c] + tree.discount[c] * values.pop(int(c)) for c in kids])
            values[node] = tree.prob[kids] @ q if tree.kind[node] == schema.CHANCE else q.max(axis=0)
    return np.array([tree.reward[a] + tree.discount[a] * values[int(a)].mean() for a in tree.action_nodes])


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
            k = 1 if case.query.batch is not None else max(1, int(case.query.remaining or 2) // 2)
            start = time.process_time()
            case.oracle(tree, leaf, k, case.query.horizon)
            times = 1 if case.query.batch is not None else case.query.remaining or 1
            ratio = f"{(time.process_time() - start) * times / each:,.0f}"
        short = sampling_seconds if tree.mean is not None else coin_sampling_seconds
        if not case.query.rate and (tree.mean is not None or case.query.horizon == math.inf):
            seconds = short(tree, leaf, case.query, case.error / 4 * scale_of(tree))
            sampling = f"{seconds / each:.1e}"
        cells = (
            f"{1 / each:,.0f}", "" if case.aim is None else f"{1 / each / case.aim:.1f}",
            f"{np.median(share):.0e}, {share.max():.0e}", ratio, sampling,
        )  # fmt: skip
        print(f"| {name} | " + " | ".join(cells) + " |", flush=True)


def growth() -> None:
    """Time a label as the leaves grow, 4 root actions."""
    sizes = (8, 64, 512, 4096)
    print("\n| microseconds a label | " + " | ".join(f"{n} leaves" for n in sizes) + " | 4,096 over 64 |")
    print("| --- |" + " --- |" * (len(sizes) + 1))

    def flat(n: int) -> list[BeliefTree]:
        return family(max(1, 256 // n), 4, n // 4, 2)

    def coin(n: int) -> list[BeliefTree]:
        rng = np.random.default_rng(n)
        rows = 1.0 + rng.integers(0, 8, (max(1, 256 // n), 4, n // 4, 2))
        return [arms(*([(float(a), float(b)) for a, b in action] for action in tree)) for tree in rows]

    rows = (
        ("static", flat, Query(0.0)), ("dynamic", flat, Query()), ("horizon 8", flat, Query(8.0)),
        ("dynamic rate, 100 left", flat, RATE), ("win/loss, dynamic", coin, Query()),
        ("win/loss, dynamic rate, 100 left", coin, RATE),
    )  # fmt: skip
    for name, trees, query in rows:
        each = [seconds_per_label(trees(n), query)[0] * 1e6 for n in sizes]
        print(
            f"| {name} | " + " | ".join(f"{x:.3g}" for x in each) + f" | {each[3] / each[1]:.2f} |",
            flush=True,
        )


def compiled_or_not() -> None:
    """The flat method, compiled, over the same in NumPy."""
    trees = family(60)
    each, priced = seconds_per_label(trees, Query())
    start = time.process_time()
    plain = [numpy_flat.voc(tree) for tree in trees]
    slow = (time.process_time() - start) / sum(t.n_leaves for t in trees)
    miss = max(
        float(np.abs(x - p.voc).max()) / scale_of(t) for x, p, t in zip(plain, priced, trees, strict=True)
    )
    print(
        f"\nDynamic, independent, decisions: NumPy {1 / slow:,.0f} labels/s/core, compiled {slow / each:.1f} "
        f"times that; they differ by {miss:.0e} of scale at most."
    )


if __name__ == "__main__":
    methods(sys.argv[1:])
    if len(sys.argv) == 1:
        growth()
        compiled_or_not()
