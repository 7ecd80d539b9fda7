"""What a tree looks like in a few numbers, to compare one set of trees with another; floor 3."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from distill import schema
from distill.query import scale_of
from distill.tree import BeliefTree, Floats, Ints, leaf_paths

__all__ = ["COLUMNS", "EdgeRewards", "decision_key", "depths", "edge_rewards", "path_gains", "tree_columns"]

# Column -> what it says, for people.
COLUMNS: Final[Mapping[str, str]] = {
    "actions": "root actions",
    "leaves": "leaves",
    "depth": "edges from the root to the deepest leaf",
    "chance share": "share of inner nodes below the root that are chance nodes",
    "gain": "geometric mean over leaves of the product of discounts from the root",
    "remaining": "rollouts left",
    "spent": "rollouts so far",
    "untried share": "share of leaves without a rollout",
    "noise": "log10 of a rollout's sd over the leaf's present sd, median leaf",
    "sd spread": "sd of log10 of the leaves' present sds",
    "mean spread": "sd of the leaves' means over the tree's scale",
    "offset spread": "sd over leaves of the discounted rewards from the root, over the tree's scale",
    "cost": "log10 of the mean cost of a rollout over the tree's scale",
    "scale": "log10 of the tree's scale",
}


def tree_columns(trees: Sequence[BeliefTree]) -> dict[str, Floats]:
    """Column -> one number a tree; NaN where a tree has no such thing."""
    rows = [_row(tree) for tree in trees]
    # Six digits: what rounding tells apart is the same.
    return {
        name: np.array([float(f"{row.get(name, math.nan):.6g}") for row in rows], dtype=float)
        for name in COLUMNS
    }


def _row(tree: BeliefTree) -> dict[str, float]:
    inner = np.flatnonzero(tree.kind != schema.LEAF)[1:]
    sd, mean, noise = _moments(tree)
    scale = scale_of(tree)
    uncertain = sd > 0
    row: dict[str, float] = {
        "actions": len(tree.action_nodes),
        "leaves": tree.n_leaves,
        "depth": int(depths(tree).max()),
        "gain": float(np.exp(np.mean(path_gains(tree)[0]))),
    }
    if len(inner):
        row["chance share"] = float(np.mean(tree.kind[inner] == schema.CHANCE))
    if tree.remaining is not None:
        row["remaining"] = tree.remaining
    if tree.count is not None:
        row |= {"spent": float(tree.count.sum()), "untried share": float(np.mean(tree.count == 0))}
    if np.any(uncertain):
        row["noise"] = float(np.median(np.log10(noise[uncertain] / sd[uncertain])))
        row["sd spread"] = float(np.std(np.log10(sd[uncertain])))
    if scale > 0:
        row["scale"] = math.log10(scale)
        row["mean spread"] = float(np.std(mean)) / scale
        row["offset spread"] = float(np.std(leaf_paths(tree)[1])) / scale
        assert tree.cost is not None
        if np.any(tree.cost > 0):
            row["cost"] = math.log10(float(np.mean(tree.cost)) / scale)
    return row


def _moments(tree: BeliefTree) -> tuple[Floats, Floats, Floats]:
    """Standard deviation, mean and a rollout's standard deviation at each leaf, u."""
    if tree.mean is not None:
        var = np.diag(tree.cov) if tree.cov is not None else tree.var
        assert var is not None
        assert tree.noise_var is not None
        return np.sqrt(var), tree.mean, np.sqrt(tree.noise_var)
    assert tree.alpha is not None
    assert tree.beta is not None
    assert tree.low is not None
    assert tree.high is not None
    total = tree.alpha + tree.beta
    rate, span = tree.alpha / total, tree.high - tree.low
    one = np.sqrt(rate * (tree.beta / total))
    return span * one / np.sqrt(total + 1), tree.low + span * rate, span * one


def depths(tree: BeliefTree) -> Ints:
    """Edges from the root to each node."""
    out = np.zeros(tree.n_nodes, dtype=np.int64)
    for c, p in enumerate(tree.parent.tolist()):
        if c:
            out[c] = out[p] + 1
    return out


def path_gains(tree: BeliefTree) -> tuple[Floats, Ints]:
    """Of each leaf, the log of its gain and the edges from the root; an action with one leaf is that leaf.

    One discount an edge, exp(sum of logs / sum of edges), gives a tree's leaves the same geometric mean gain.
    """
    log_gain, action = np.log(tree.discount), np.arange(tree.n_nodes)
    for c, p in enumerate(tree.parent.tolist()):
        if p > 0:
            log_gain[c] += log_gain[p]
            action[c] = action[p]
    leaves = tree.leaf_nodes
    lone = np.bincount(action[leaves], minlength=tree.n_nodes) == 1
    return log_gain[leaves], np.where(lone[action[leaves]], 1, depths(tree)[leaves])


@dataclass(frozen=True, eq=False)
class EdgeRewards:
    """What a tree tells of rewards that are alike on every edge: each of `values` is a sum of such rewards,
    weighted; `weights`, `squares` : sums of these weights and of their squares, over all values."""

    values: Floats
    weights: float
    squares: float


def edge_rewards(trees: Sequence[BeliefTree]) -> tuple[list[EdgeRewards], bool]:
    """Of each tree the rewards of its edges; or, and then True, the offsets of its leaves.

    Where no node above a leaf has a reward in any tree, the records are tables, which have a leaf's whole
    offset on its last edge: that is the sum over a path.
    """
    inner = [np.flatnonzero(t.kind != schema.LEAF)[1:] for t in trees]
    nodes = sum(len(at) for at in inner)
    at_leaves = nodes > 0 and not any(np.any(t.reward[at]) for t, at in zip(trees, inner, strict=True))
    at_leaves = at_leaves and any(np.any(t.reward) for t in trees)
    if not at_leaves:
        return [EdgeRewards(t.reward[1:], t.n_nodes - 1.0, t.n_nodes - 1.0) for t in trees], False
    out = []
    for tree in trees:
        logs, edges = path_gains(tree)
        before = [np.exp(logs.sum() / edges.sum()) ** np.arange(k) for k in edges]
        out.append(
            EdgeRewards(
                leaf_paths(tree)[1], float(sum(w.sum() for w in before)), float(sum(w @ w for w in before))
            )
        )
    return out, True


def decision_key(tree: BeliefTree) -> str | None:
    """What the stages of one recorded decision have in common; None where the record does not say."""
    if tree.extra is None or "decision" not in tree.extra:
        return None
    return json.dumps(dict(tree.extra), sort_keys=True)
