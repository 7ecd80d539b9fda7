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
