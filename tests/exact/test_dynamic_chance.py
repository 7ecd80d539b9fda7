"""Exact VOC with chance nodes and rollouts still to come: published values, the oracle, and properties."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import settings
from ladder import QUADRATURE

from distill.exact.dynamic_chance import price
from distill.query import Query
from distill.record import from_record
from distill.tree import BeliefTree

PUBLISHED = json.loads((Path(__file__).parents[1] / "data" / "published_chance.json").read_text())["entries"]
PROPERTIES = settings(deadline=None, max_examples=25, derandomize=True)

Sketch = tuple[str, Any] | list[Any]


class Builder:
    """Trees from nested sketches: ("leaf", mean, var, noise_var), ("max", children), ("mean", [(p, child)]).

    A child may be wrapped as ("edge", reward, discount, child).
    """

    def __init__(self) -> None:
        self.columns: dict[str, list[Any]] = {
            name: [] for name in ("parent", "kind", "reward", "discount", "prob", "mean", "var", "noise_var")
        }

    def add(self, sketch: Any, parent: int = -1, prob: float | None = None) -> None:
        reward, discount = (None, None) if parent < 0 else (0.0, 1.0)
        while sketch[0] == "edge":
            reward, discount, sketch = sketch[1] + reward, sketch[2], sketch[3]
        node = len(self.columns["parent"])
        kind = {"leaf": "leaf", "max": "decision", "mean": "chance"}[sketch[0]]
        leaf = sketch[1:] if kind == "leaf" else (None, None, None)
        for name, value in zip(self.columns, (parent, kind, reward, discount, prob, *leaf), strict=True):
            self.columns[name].append(value)
        if kind == "decision":
            for child in sketch[1]:
                self.add(child, node)
        elif kind == "chance":
            for p, child in sketch[1]:
                self.add(child, node, p)


def build(*actions: Any) -> BeliefTree:
    builder = Builder()
    builder.add(("max", list(actions)))
    return from_record({"format": "belief-tree/1", **builder.columns})


def leaf(mean: float, var: float, noise_var: float = 1.0) -> Any:
    return ("leaf", mean, var, noise_var)


def random_sketch(rng: np.random.Generator, depth: int, width: int = 3, sure: float = 0.1) -> Any:
    """A node of a random tree; decision and chance nodes at any level."""
    if depth == 0 or rng.random() < 0.15:
        var = 0.0 if rng.random() < sure else float(rng.lognormal())
        node = leaf(float(rng.normal()), var, float(rng.lognormal()))
    else:
        children = [random_sketch(rng, depth - 1, width, sure) for _ in range(rng.integers(1, width + 1))]
        if rng.random() < 0.5:
            node = ("max", children)
        else:
            p = rng.dirichlet(np.ones(len(children)))
            p[-1] = 1.0 - p[:-1].sum()
            node = ("mean", list(zip(p.tolist(), children, strict=True)))
    return ("edge", float(rng.normal(scale=0.3)), float(rng.uniform(0.7, 1.0)), node)


def random_tree(seed: int, depth: int = 4, actions: int = 3, **how: Any) -> BeliefTree:
    rng = np.random.default_rng(seed)
    return build(*(random_sketch(rng, depth - 1, **how) for _ in range(actions)))


# ---------------------------------------------------------------- published and derived values


def edge_effects(tree: Any, scale: float = 1.0) -> Any:
    """max over children of (effect + child's value), times scale, with chance nodes of odds 1/2 as sums."""
    children = []
    for mean, sd, below in tree[1]:
        if below[0] == "leaf":
            children.append(leaf(mean * scale, (sd * scale) ** 2))
        else:
            effect = leaf(2 * mean * scale, (2 * sd * scale) ** 2)
            children.append(("mean", [(0.5, effect), (0.5, edge_effects(below, 2 * scale))]))
    return ("max", children)


def binary_tree(depth: int) -> Any:
    below = binary_tree(depth - 1) if depth > 1 else ["leaf"]
    return ["node", [[0.0, 1.0, below]] * 2]


def published_sketch(inputs: dict[str, Any]) -> Any:
    if "tree" in inputs:
        return edge_effects(inputs["tree"])
    if "depth" in inputs:
        return edge_effects(binary_tree(inputs["depth"]))
    between, within = float(inputs["sg"]), float(inputs["sl"])
    groups = [["node", [[0.0, within, ["leaf"]]] * size] for size in inputs["groups"]]
    return edge_effects(["node", [[0.0, between, group] for group in groups]])


@pytest.mark.parametrize("entry", [e for e in PUBLISHED if e["group"] == "tree_prior"], ids=lambda e: e["id"])
def test_expected_maximum_of_nested_effects(entry: dict[str, Any]) -> None:
    if entry["inputs"].get("depth", 0) > 6:
        pytest.skip("1,024 leaves: in the slow suite")
    priced = price(build(published_sketch(entry["inputs"])), Query())
    assert priced.value[0] == pytest.approx(float(entry["verified"]), abs=QUADRATURE)
    assert np.all(priced.voc == 0)  # one action
