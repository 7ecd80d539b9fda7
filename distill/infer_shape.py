"""Shape of a family's trees from recorded ones: actions, leaves, depth, branching, chance nodes; floor 4.

A family draws a depth for each root action and a number of children for each inner node above the last
level, but a tree shows them only in part: a node that has as many children as leaves might have had more,
and an action that ended early might have been allowed to go deeper. Both distributions are maximum
likelihood estimates that take this censoring in, found by expectation maximisation (Dempster, Laird and
Rubin 1977, section 4.3).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Final

import numpy as np
from scipy import optimize, special

from distill import schema
from distill.estimates import Estimated, bootstrap, by_group, field_text, number_text
from distill.tree import BeliefTree, Floats, Ints
from distill.tree_columns import depths

__all__ = ["Shape", "shape_of"]

_ROUNDS: Final = 2000  # of expectation maximisation
_DRAWS: Final = 400  # of its bootstrap


@dataclass(frozen=True)
class Shape:
    """parameters : name -> estimate. toml : section -> field -> text of the family file."""

    parameters: dict[str, Estimated]
    toml: dict[str, dict[str, str]]


@dataclass
class _Seen:
    """What one tree shows. open_ends : per action, its depth and the sizes of the nodes on its last level."""

    leaves: list[int] = field(default_factory=list)
    parts: list[tuple[int, bool]] = field(default_factory=list)  # children, and whether there may be more
    open_ends: list[tuple[int, tuple[int, ...]]] = field(default_factory=list)
    inner: int = 0
    chance: int = 0
    splits: list[Floats] = field(default_factory=list)  # probabilities under chance nodes


def shape_of(trees: Sequence[BeliefTree], group: Sequence[int], seed: int = 0) -> Shape:
    """The shape of trees; `group` numbers their decisions from 0, whose stages are no independent trees."""
    seen = [_look(tree) for tree in trees]
    rows = [
        {
            "trees": 1.0,
            "actions": float(len(s.leaves)),
            "leaves": float(sum(s.leaves)),
            "inner": float(s.inner),
            "chance": float(s.chance),
        }
        for s in seen
    ]
    sums = by_group(rows, group)
    found = bootstrap(
        sums,
        lambda s: {
            "root actions": s["actions"] / s["trees"],
            "leaves an action": s["leaves"] / s["actions"],
            "chance nodes, share of inner ones": s["chance"] / s["inner"],
        },
        seed=seed,
    )
    sizes = [size for s in seen for size in s.leaves]
    section = {
        "actions": field_text([len(s.leaves) for s in seen], whole=True),
        "leaves": field_text(sizes, whole=True),
    }
    toml = {"shape": section}
    if max(sizes) > 1:
        levels = _Levels(seen, group)
        depth, branching = levels.fit(np.ones(max(group) + 1))
        section["depth"] = _weighted(levels.depths, depth)
        section["branching"] = _weighted(levels.branchings, branching)
        found |= levels.intervals(depth, branching, seed)
    else:
        section["depth"] = "1"
    if sums["chance"].sum() == 0:
        del found["chance nodes, share of inner ones"]
    else:
        share = found["chance nodes, share of inner ones"].value
        evenness = _evenness(seen, group, seed)
        found["evenness of probabilities"] = evenness
        toml["chance"] = {"share": number_text(share), "evenness": number_text(evenness.value)}
    return Shape(found, toml)


def _look(tree: BeliefTree) -> _Seen:
    out = _Seen()
    deep = depths(tree)
    children = np.bincount(tree.parent[1:], minlength=tree.n_nodes)
    below = (tree.kind == schema.LEAF).astype(int)  # leaves below
    deepest = deep.copy()
    action = np.zeros(tree.n_nodes, dtype=np.int64)
    parent = tree.parent.tolist()
    for c in range(tree.n_nodes - 1, 0, -1):
        below[parent[c]] += below[c]
        deepest[parent[c]] = max(deepest[parent[c]], deepest[c])
    for c in range(1, tree.n_nodes):
        action[c] = c if parent[c] == 0 else action[parent[c]]
    last: dict[int, list[int]] = {a: [] for a in tree.action_nodes.tolist()}
    for v in range(1, tree.n_nodes):
        if children[v] == 0:
            continue
        out.inner += 1
        if tree.kind[v] == schema.CHANCE:
            out.chance += 1
            if children[v] > 1:
                out.splits.append(tree.prob[1:][tree.parent[1:] == v])
        if deep[v] == deepest[action[v]] - 1:
            last[int(action[v])].append(int(children[v]))
        elif children[v] > 1:  # a family's nodes have two children or more
            out.parts.append((int(children[v]), bool(children[v] == below[v])))
    for a, ends in last.items():
        out.leaves.append(int(below[a]))
        if ends:  # an action that is a leaf says nothing of depth
            out.open_ends.append((int(deepest[a]), tuple(sorted(ends))))
    return out


class _Levels:
    """Depth and branching: counts of what each group shows, and the estimate for any weights of them."""

    def __init__(self, seen: Sequence[_Seen], group: Sequence[int]) -> None:
        n = max(group) + 1
        parts = sorted({p for s in seen for p in s.parts})
        ends = sorted({e for s in seen for e in s.open_ends})
        self._part_counts, self._end_counts = np.zeros((n, len(parts))), np.zeros((n, len(ends)))
        part_at, end_at = ({x: j for j, x in enumerate(xs)} for xs in (parts, ends))
        for g, s in zip(group, seen, strict=True):
            for p in s.parts:
                self._part_counts[g, part_at[p]] += 1
            for e in s.open_ends:
                self._end_counts[g, end_at[e]] += 1
        self._parts = np.array([p for p, _ in parts] or [0])[: len(parts)]
        self._more = np.array([m for _, m in parts], dtype=bool)
        self._reached = np.array([d for d, _ in ends], dtype=int)
        exact = self._parts[~self._more]
        top = int(max(self._parts, default=0))
        self.branchings = np.unique(np.concatenate([exact, [max(top, 2)]]))
        self.depths = np.unique(self._reached)
        # Which values each observation allows, (observations, values).
        self._part_allows = np.where(
            self._more[:, None],
            self.branchings >= self._parts[:, None],
            self.branchings == self._parts[:, None],
        )
        self._ends_in_time = self.depths == self._reached[:, None]
        self._goes_on = self.depths > self._reached[:, None]
        # How many last nodes of each size stand in each end, and which branchings are enough for a size.
        sizes = sorted({size for _, e in ends for size in e})
        self._end_sizes = np.array([[e.count(size) for size in sizes] for _, e in ends]).reshape(
            len(ends), -1
        )
        self._enough = self.branchings >= np.array(sizes, dtype=int)[:, None]

    def fit(self, weight: Floats, start: tuple[Floats, Floats] | None = None) -> tuple[Floats, Floats]:
        """Shares of `depths` and of `branchings`, for groups weighted so."""
        parts, ends = weight @ self._part_counts, weight @ self._end_counts
        depth, branching = start or tuple(np.full(len(x), 1 / len(x)) for x in (self.depths, self.branchings))
        for _ in range(_ROUNDS):
            # An action that might have gone deeper needs every last node to have drawn enough children.
            tail = np.maximum(self._enough @ branching, 1e-300)
            on = np.exp(self._end_sizes @ np.log(tail))
            share = self._ends_in_time * depth + self._goes_on * depth * on[:, None]
            share /= np.maximum(share.sum(axis=1, keepdims=True), 1e-300)
            drew = (ends * np.sum(share * self._goes_on, axis=1)) @ self._end_sizes
            allowed = self._part_allows * branching
            total = parts @ (allowed / np.maximum(allowed.sum(axis=1, keepdims=True), 1e-300))
            total = total + drew @ (self._enough * branching / tail[:, None])
            before = depth, branching
            if ends.sum() > 0:
                depth = ends @ share / ends.sum()
            if total.sum() > 0:
                branching = total / total.sum()
            if max(np.max(np.abs(depth - before[0])), np.max(np.abs(branching - before[1]))) < 1e-7:
                break
        return depth, branching

    def intervals(self, depth: Floats, branching: Floats, seed: int) -> dict[str, Estimated]:
        """The two means; the bootstrap fits each draw anew."""
        rng = np.random.default_rng(seed)
        n = len(self._part_counts)
        drawn = []
        for _ in range(_DRAWS):
            d, b = self.fit(np.bincount(rng.integers(0, n, n), minlength=n).astype(float), (depth, branching))
            drawn.append([d @ self.depths, b @ self.branchings])
        low, high = np.quantile(np.array(drawn), [0.025, 0.975], axis=0) if n > 1 else np.full((2, 2), np.nan)
        out = {"depth": Estimated(float(depth @ self.depths), float(low[0]), float(high[0]))}
        if len(self._parts):
            out["branching"] = Estimated(float(branching @ self.branchings), float(low[1]), float(high[1]))
        return out


def _weighted(values: Ints, shares: Floats) -> str:
    kept = [(int(x), p) for x, p in zip(values, shares, strict=True) if p > 1e-4]
    if len(kept) == 1:
        return str(kept[0][0])
    numbers = ", ".join(str(x) for x, _ in kept)
    return f"{{ choice = [{numbers}], weights = [{', '.join(number_text(p) for _, p in kept)}] }}"


def _evenness(seen: Sequence[_Seen], group: Sequence[int], seed: int) -> Estimated:
    """Parameter of a symmetric Dirichlet by maximum likelihood, with bootstrap interval.

    Its log likelihood needs three sums a number of children: nodes, and the logs of their probabilities.
    """
    widths = sorted({len(p) for s in seen for p in s.splits})
    if not widths:
        return Estimated(1.0, np.nan, np.nan)
    n = max(group) + 1
    times, logs = np.zeros((n, len(widths))), np.zeros((n, len(widths)))
    for g, s in zip(group, seen, strict=True):
        for p in s.splits:
            times[g, widths.index(len(p))] += 1
            logs[g, widths.index(len(p))] += float(np.sum(np.log(np.maximum(p, 1e-12))))
    k = np.array(widths)

    def best(weight: Floats) -> float:
        nodes, log_sum = weight @ times, weight @ logs

        def loss(log_a: float) -> float:
            a = np.exp(log_a)
            return -float(nodes @ (special.gammaln(k * a) - k * special.gammaln(a)) + (a - 1) * log_sum.sum())

        found = optimize.minimize_scalar(loss, bounds=(np.log(1e-3), np.log(1e6)), method="bounded")
        return float(np.exp(found.x))

    rng = np.random.default_rng(seed)
    drawn = [best(np.bincount(rng.integers(0, n, n), minlength=n).astype(float)) for _ in range(_DRAWS)]
    low, high = np.quantile(drawn, [0.025, 0.975]) if n > 1 else (np.nan, np.nan)
    return Estimated(best(np.ones(n)), float(low), float(high))
