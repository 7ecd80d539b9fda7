"""Trees of decision and chance nodes from nested sketches, for the tests of several methods.

A sketch is leaf(...), ("max", [children]), ("mean", [(p, child), ...]) or ("edge", reward, discount, child).
"""

from __future__ import annotations

from typing import Any

import numpy as np

from distill.record import from_record
from distill.tree import BeliefTree

_COLUMNS = ("parent", "kind", "reward", "discount", "prob", "mean", "var", "noise_var")
_KINDS = {"leaf": "leaf", "max": "decision", "mean": "chance"}


def leaf(mean: float, var: float, noise_var: float = 1.0) -> Any:
    return ("leaf", mean, var, noise_var)


def build(*actions: Any, **scalars: Any) -> BeliefTree:
    """The tree whose root chooses among the actions."""
    columns: dict[str, list[Any]] = {name: [] for name in _COLUMNS}
    stack: list[tuple[Any, int, float | None]] = [(("max", list(actions)), -1, None)]
    while stack:
        sketch, parent, prob = stack.pop(0)
        reward, discount = (None, None) if parent < 0 else (0.0, 1.0)
        if sketch[0] == "edge":
            _, reward, discount, sketch = sketch
        node = len(columns["parent"])
        values = sketch[1:] if sketch[0] == "leaf" else (None, None, None)
        row = (parent, _KINDS[sketch[0]], reward, discount, prob, *values)
        for name, value in zip(_COLUMNS, row, strict=True):
            columns[name].append(value)
        if sketch[0] == "max":
            stack.extend((child, node, None) for child in sketch[1])
        elif sketch[0] == "mean":
            stack.extend((child, node, p) for p, child in sketch[1])
    return from_record({"format": "belief-tree/1", **columns, **scalars})


def shares(rng: np.random.Generator, n: int) -> list[float]:
    """n probabilities that sum to 1."""
    p = rng.dirichlet(np.ones(n))
    p[-1] = max(1.0 - p[:-1].sum(), 0.0)
    return [float(x) for x in p]


def random_sketch(rng: np.random.Generator, depth: int, width: int = 3, sure: float = 0.1) -> Any:
    """A node of a random tree, unit scale; decision and chance nodes at any level, some leaves sure."""
    if depth == 0 or rng.random() < 0.15:
        var = 0.0 if rng.random() < sure else float(rng.lognormal())
        node = leaf(float(rng.normal()), var, float(rng.lognormal()))
    else:
        children = [random_sketch(rng, depth - 1, width, sure) for _ in range(rng.integers(1, width + 1))]
        if rng.random() < 0.5:
            node = ("max", children)
        else:
            node = ("mean", list(zip(shares(rng, len(children)), children, strict=True)))
    return ("edge", float(rng.normal(scale=0.3)), float(rng.uniform(0.7, 1.0)), node)


def random_tree(seed: int, depth: int = 4, actions: int = 3, **how: Any) -> BeliefTree:
    rng = np.random.default_rng(seed)
    return build(*(random_sketch(rng, depth - 1, **how) for _ in range(actions)))


def nested_effects(tree: Any, scale: float = 1.0) -> Any:
    """max over children of (effect + child's value), times scale, where chance nodes of odds 1/2 make sums.

    tree : ["node", [[mean, sd, subtree], ...]] with ["leaf"] at the ends; every edge has a normal effect.
    """
    children = []
    for mean, sd, below in tree[1]:
        if below[0] == "leaf":
            children.append(leaf(mean * scale, (sd * scale) ** 2))
        else:
            effect = leaf(2 * mean * scale, (2 * sd * scale) ** 2)
            children.append(("mean", [(0.5, effect), (0.5, nested_effects(below, 2 * scale))]))
    return ("max", children)
