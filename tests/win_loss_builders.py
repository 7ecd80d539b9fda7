"""Small win/loss trees for tests."""

from __future__ import annotations

from typing import Any

import numpy as np

from distill.record import from_record
from distill.tree import BeliefTree

_COLUMNS = ("alpha", "beta", "low", "high")


def arms(*actions: list[tuple[float, ...]], **more: Any) -> BeliefTree:
    """Root actions, each the best of leaves (alpha, beta) or (alpha, beta, low, high)."""
    parent, kind = [-1], ["decision"]
    columns: dict[str, list[float | None]] = {name: [None] for name in _COLUMNS}
    for leaves in actions:
        node = len(parent)
        parent += [0] + [node] * len(leaves)
        kind += ["decision"] + ["leaf"] * len(leaves)
        rows = [leaf if len(leaf) == 4 else (*leaf, 0.0, 1.0) for leaf in leaves]
        for j, name in enumerate(_COLUMNS):
            columns[name] += [None] + [row[j] for row in rows]
    return from_record({"format": "belief-tree/1", "parent": parent, "kind": kind, **columns, **more})


def random_tree(
    rng: np.random.Generator, *, depth: int = 3, chance: bool = True, whole: bool = False
) -> BeliefTree:
    """A random tree of decision (and chance) nodes with 2 or 3 children, rewards and discounts.

    whole : alpha and beta are small whole numbers and supports are [0, 1], as in a fresh search.
    """
    parent, kind, level = [-1], ["decision"], [0]
    i = 0
    while i < len(parent):
        if kind[i] != "leaf":
            for _ in range(int(rng.integers(1 + (i == 0), 4))):
                parent.append(i)
                level.append(level[i] + 1)
                inner = level[-1] < depth and rng.random() < 0.5
                kinds = ("decision", "chance") if chance else ("decision",)
                kind.append(str(rng.choice(kinds)) if inner else "leaf")
        i += 1
    n = len(parent)
    reward = [0.0, *(rng.normal(size=n - 1) * (0.0 if whole else 0.3)).tolist()]
    discount = [1.0, *rng.uniform(0.6, 1.0, n - 1).tolist()] if not whole else [1.0] * n
    prob: list[float | None] = [None] * n
    columns: dict[str, list[float | None]] = {name: [None] * n for name in _COLUMNS}
    for i in range(n):
        children = [c for c in range(1, n) if parent[c] == i]
        if kind[i] == "chance":
            weights = rng.dirichlet(np.ones(len(children)))
            for c, w in zip(children, weights, strict=True):
                prob[c] = float(w)
        if kind[i] == "leaf":
            low = 0.0 if whole else float(rng.normal() * 0.3)
            width = 1.0 if whole else float(rng.uniform(0.3, 1.5))
            a, b = rng.integers(1, 8, 2).tolist() if whole else np.exp(rng.normal(0.5, 1.5, 2)).tolist()
            for name, value in zip(_COLUMNS, (a, b, low, low + width), strict=True):
                columns[name][i] = value
    record = {
        "format": "belief-tree/1",
        "parent": parent,
        "kind": kind,
        "reward": reward,
        "discount": discount,
    }
    return from_record({**record, "prob": prob, **columns})


def later_choice(rng: np.random.Generator, *, deep: bool = False, whole: bool = True) -> BeliefTree:
    """An action that chooses between a leaf and a chance node over two (leaves 2, 0 and 1); a rival leaf.

    deep : choices below the chance nodes too, rewards and discounts. whole : whole alpha and beta.
    """
    parent, inner = [-1, 0, 1, 2, 2, 1, 0], {1: "decision", 2: "chance"}
    if deep:
        parent = [-1, 0, 1, 2, 2, 1, 1, 6, 6, 8, 8, 0, 11, 11]
        inner |= {6: "chance", 8: "decision", 11: "decision"}
    n = len(parent)
    kind = ["decision", *(inner.get(v, "leaf") for v in range(1, n))]
    prob: list[float | None] = [None] * n
    columns: dict[str, list[float | None]] = {name: [None] * n for name in _COLUMNS}
    for v in range(n):
        if kind[v] == "chance":
            prob[parent.index(v)] = x = float(rng.uniform(0.2, 0.8))
            prob[parent.index(v) + parent[parent.index(v) :].index(v, 1)] = 1 - x
        if kind[v] == "leaf":
            a, b = rng.integers(1, 7, 2).tolist() if whole else np.exp(rng.normal(0.5, 1.2, 2)).tolist()
            for name, value in zip(_COLUMNS, (a, b, 0.0, 1.0), strict=True):
                columns[name][v] = value
    reward, discount = [0.0] * n, [1.0] * n
    if deep:
        reward[1:], discount[1:] = rng.normal(0, 0.05, n - 1).tolist(), rng.uniform(0.8, 1, n - 1).tolist()
    record = {
        "format": "belief-tree/1",
        "parent": parent,
        "kind": kind,
        "reward": reward,
        "discount": discount,
        "prob": prob,
    }
    return from_record({**record, **columns})


def change(tree: BeliefTree, **columns: Any) -> BeliefTree:
    """The same tree with columns replaced."""
    fields = {name: value for name, value in vars(tree).items() if value is not None}
    return BeliefTree(**{**fields, **columns})
