"""Random decision-only trees with independent Gaussian leaves, for tests of exact methods."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from builders import bush

from distill.record import from_record
from distill.tree import BeliefTree


def deep_tree(rng: np.random.Generator, depth: int = 3, chance: bool = False) -> BeliefTree:
    """A tree of uneven depth with rewards, discounts and noise of their own; chance nodes if asked."""
    record: dict[str, Any] = {
        name: [] for name in ("parent", "kind", "reward", "discount", "prob", "mean", "var", "noise_var")
    }

    def add(parent: int, level: int, under_chance: bool, prob: float) -> None:
        node = len(record["parent"])
        leaf = level == depth or (level > 0 and rng.random() < 0.4)
        kind = "leaf" if leaf else ("chance" if chance and level > 0 and rng.random() < 0.4 else "decision")
        record["parent"].append(parent)
        record["kind"].append(kind)
        record["reward"].append(float(rng.normal(0, 0.3)) if level else None)
        record["discount"].append(float(rng.uniform(0.5, 1)) if level else None)
        record["prob"].append(prob if under_chance else None)
        record["mean"].append(float(rng.normal()) if leaf else None)
        record["var"].append(float(rng.lognormal(0, 1.5)) * float(rng.random() > 0.1) if leaf else None)
        record["noise_var"].append(float(rng.lognormal(1, 1)) if leaf else None)
        if not leaf:
            n = int(rng.integers(2, 4))
            probs = rng.dirichlet(np.ones(n))
            for p in probs:
                add(node, level + 1, kind == "chance", float(p))

    add(-1, 0, False, 1.0)
    return from_record({"format": "belief-tree/1", **record})


def mixed_bush(rng: np.random.Generator, spread: float = 3.0, decades: float = 1.5) -> BeliefTree:
    """2 to 4 actions of 1 to 6 leaves; sds over some decades, one leaf in ten sure."""
    sizes = rng.integers(1, 7, size=rng.integers(2, 5))
    mean = [(rng.normal(size=n) * spread).tolist() for n in sizes]
    var = [(rng.lognormal(0, decades, size=n) * (rng.random(n) > 0.1)).tolist() for n in sizes]
    return bush(mean, var, noise_var=float(rng.lognormal(0, 2)))


def close_call(rng: np.random.Generator, decades: float = 4.0) -> BeliefTree:
    """Sds over `decades` decades, and the best leaves of all actions within a few of their own sds."""
    mean, var = [], []
    for _ in range(int(rng.integers(2, 4))):
        n = int(rng.integers(1, 5))
        sd = 10.0 ** rng.uniform(-decades, 0, size=n) * (rng.random(n) > 0.12)
        m = rng.normal(size=n) * 10.0 ** rng.uniform(-decades, 0.7)
        mean.append(m - m.max() + float(rng.choice(sd)) * rng.normal() * 3)
        var.append(sd**2)
    return bush([m.tolist() for m in mean], [v.tolist() for v in var], noise_var=10.0 ** rng.uniform(-4, 4))


def shifted(tree: BeliefTree, by: float) -> BeliefTree:
    """The same tree with `by` added to the reward of every root action."""
    reward = tree.reward.copy()
    reward[tree.action_nodes] += by
    return _changed(tree, reward=reward)


def scaled(tree: BeliefTree, by: float) -> BeliefTree:
    """The same tree in other units of utility."""
    assert tree.mean is not None
    assert tree.var is not None
    assert tree.noise_var is not None
    return _changed(
        tree,
        reward=tree.reward * by,
        mean=tree.mean * by,
        var=tree.var * by**2,
        noise_var=tree.noise_var * by**2,
    )


def _changed(tree: BeliefTree, **columns: Any) -> BeliefTree:
    kept = {k: v for k, v in vars(tree).items() if k not in columns}
    return BeliefTree(**kept, **columns)


HORIZONS = (0.0, 0.3, 3.0, 100.0, math.inf)
