"""Trees with dependent leaves that several tests share."""

from __future__ import annotations

from typing import Any

import numpy as np

from distill.record import from_record
from distill.tree import BeliefTree


def flat(mean: Any, cov: Any, noise: Any = 1.0, **more: Any) -> BeliefTree:
    """Every leaf a root action; `noise` a number or one a leaf."""
    mean = np.asarray(mean, dtype=float)
    n = len(mean)
    noise = np.broadcast_to(np.asarray(noise, dtype=float), n)
    return from_record(
        {
            "format": "belief-tree/1",
            "parent": [-1] + [0] * n,
            "kind": ["decision"] + ["leaf"] * n,
            "mean": [None, *mean.tolist()],
            "cov": np.asarray(cov, dtype=float).tolist(),
            "noise_var": [None, *noise.tolist()],
            **more,
        }
    )


def two_level(
    groups: list[list[float]], cov: Any, noise: Any = 1.0, kind: str = "decision", **more: Any
) -> BeliefTree:
    """One root action a group, a node of `kind` (chance: equal odds) over leaves with the means given."""
    parent, kinds, mean, prob = [-1], ["decision"], [None], [None]
    for means in groups:
        parent.append(0)
        kinds.append(kind)
        mean.append(None)
        prob.append(None)
        node = len(parent) - 1
        for m in means:
            parent.append(node)
            kinds.append("leaf")
            mean.append(m)
            prob.append(1 / len(means) if kind == "chance" else None)
    n = sum(map(len, groups))
    noise = iter(np.broadcast_to(np.asarray(noise, dtype=float), n).tolist())
    return from_record(
        {
            "format": "belief-tree/1",
            "parent": parent,
            "kind": kinds,
            "prob": prob,
            "mean": mean,
            "cov": np.asarray(cov, dtype=float).tolist(),
            "noise_var": [next(noise) if k == "leaf" else None for k in kinds],
            **more,
        }
    )


def random_tree(rng: np.random.Generator, leaves: int, chance: bool = True, **more: Any) -> BeliefTree:
    """A tree of random shape, at most about `leaves` leaves, covariance of random rank, some rows zero."""
    parent, kind, prob = [-1], ["decision"], [None]
    open_ = [0]
    while open_:
        node = open_.pop(0)
        n_kids = int(rng.integers(1, 4))
        odds = rng.dirichlet(np.ones(n_kids))
        for j in range(n_kids):
            parent.append(node)
            prob.append(float(odds[j]) if kind[node] == "chance" else None)
            full = len(parent) + len(open_) >= leaves
            if full or rng.random() < 0.4:
                kind.append("leaf")
            else:
                kind.append("chance" if chance and rng.random() < 0.5 else "decision")
                open_.append(len(parent) - 1)
    is_leaf = [k == "leaf" for k in kind]
    n = sum(is_leaf)
    factor = rng.normal(size=(n, int(rng.integers(1, n + 1))))
    factor[rng.random(n) < 0.1] = 0
    edge = [None] + [1] * (len(parent) - 1)

    def column(draw: Any) -> list[float | None]:
        return [float(draw()) if leaf else None for leaf in is_leaf]

    return from_record(
        {
            "format": "belief-tree/1",
            "parent": parent,
            "kind": kind,
            "prob": prob,
            "reward": [e and float(rng.normal() * (rng.random() < 0.5)) for e in edge],
            "discount": [e and float(rng.choice([1.0, rng.uniform(0.5, 1)])) for e in edge],
            "mean": column(rng.normal),
            "cov": (factor @ factor.T).tolist(),
            "noise_var": column(rng.exponential),
            **more,
        }
    )


def effects_tree(nested: Any, mean: Any = None, cov: Any = None) -> BeliefTree:
    """One root action over a tree ["node", [[mean, sd, subtree], ...]] or ["leaf"] of effects on edges.

    A leaf is the sum of the effects on its way. `mean` and `cov`, when given, replace what follows.
    """
    parent, kind, means, sds = [-1, 0], ["decision", "decision"], [0.0, 0.0], [0.0, 0.0]

    def grow(node: int, subtree: Any) -> None:
        for m, sd, below in subtree[1]:
            parent.append(node)
            kind.append("leaf" if below[0] == "leaf" else "decision")
            means.append(means[node] + m)
            sds.append(sd)
            if below[0] != "leaf":
                grow(len(parent) - 1, below)

    grow(1, nested)
    leaves = [v for v, k in enumerate(kind) if k == "leaf"]
    if mean is None:
        mean = [means[v] for v in leaves]
    if cov is None:
        on_way = ways(parent)[leaves]
        cov = (on_way * np.square(sds)) @ on_way.T
    values = iter(np.asarray(mean, dtype=float).tolist())
    return from_record(
        {
            "format": "belief-tree/1",
            "parent": parent,
            "kind": kind,
            "mean": [next(values) if k == "leaf" else None for k in kind],
            "cov": np.asarray(cov).tolist(),
            "noise_var": [1.0 if k == "leaf" else None for k in kind],
        }
    )


def ways(parent: list[int]) -> np.ndarray:
    """Row v: 1 at every node on the way from v to the root, both included."""
    out = np.eye(len(parent))
    for v in range(1, len(parent)):
        out[v] += out[parent[v]]
    return out


def nested_effects(
    rng: np.random.Generator, depth: int, branching: tuple[int, int], rollouts: int
) -> BeliefTree:
    """A decision tree whose nodes all add an effect, after some rollouts at random leaves."""
    parent, kind, level = [-1], ["decision"], [0]
    for d in range(depth):
        here, level = level, []
        for node in here:
            for _ in range(int(rng.integers(branching[0], branching[1] + 1))):
                parent.append(node)
                kind.append("leaf" if d == depth - 1 or rng.random() < 0.15 else "decision")
                if kind[-1] == "decision":
                    level.append(len(parent) - 1)
    leaves = [v for v, k in enumerate(kind) if k == "leaf"]
    on_way = ways(parent)[leaves]
    cov = (on_way * rng.uniform(0.2, 1.5, size=len(parent))) @ on_way.T
    for leaf in rng.integers(len(leaves), size=rollouts):
        cov = cov - np.outer(cov[leaf], cov[leaf]) / (cov[leaf, leaf] + rng.uniform(0.5, 3))
    cov = (cov + cov.T) / 2
    return from_record(
        {
            "format": "belief-tree/1",
            "parent": parent,
            "kind": kind,
            "mean": [float(rng.normal()) if k == "leaf" else None for k in kind],
            "cov": cov.tolist(),
            "noise_var": [float(rng.uniform(0.5, 2)) if k == "leaf" else None for k in kind],
        }
    )
