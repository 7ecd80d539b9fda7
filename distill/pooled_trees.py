"""Several belief trees made one of a wanted size, as a large decision would be; floor 2.

The actions that stand at the same place below each root go below one decision node, so that the whole has
as many actions as the largest part. Each part counts in units of its own scale. Correlated leaves stay
correlated within their part.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any, Final

import numpy as np

from distill import schema
from distill.errors import InputError
from distill.query import scale_of
from distill.tree import BeliefTree, Floats

__all__ = ["first_leaves", "in_units_of_scale", "joined", "pooled"]

# Powers of the unit of utility in which leaf and node columns count.
_POWERS: Final = {
    **dict.fromkeys(("reward", "mean", "low", "high", "cost"), 1),
    **dict.fromkeys(("var", "noise_var", "cov"), 2),
}


def pooled(trees: Sequence[BeliefTree], n_leaves: int, rng: np.random.Generator) -> BeliefTree:
    """A tree of exactly `n_leaves` leaves from trees drawn at random, all of one kind of belief.

    `remaining` is that of the first one drawn, at least 1. Raises InputError where there is no tree.

    >>> from distill.record import from_record
    >>> pair = from_record({"format": "belief-tree/1", "parent": [-1, 0, 0], "remaining": 9,
    ...     "kind": ["decision", "leaf", "leaf"], "mean": [None, 0, 1], "var": [None, 1, 4],
    ...     "noise_var": [None, 3, 1]})
    >>> whole = pooled([pair], 3, np.random.default_rng(0))
    >>> whole.parent.tolist(), whole.var.tolist(), whole.remaining
    ([-1, 0, 0, 1, 2, 1], [0.25, 1.0, 0.25], 9)
    """
    if not trees:
        raise InputError("trees", "must hold at least one")
    parts: list[BeliefTree] = []
    while sum(part.n_leaves for part in parts) < n_leaves:
        tree = trees[int(rng.integers(len(trees)))]
        if not parts or tree.belief == parts[0].belief:
            parts.append(tree)
    whole = first_leaves(joined([in_units_of_scale(part) for part in parts]), n_leaves)
    return replace(whole, remaining=max(1, parts[0].remaining or 0))


def in_units_of_scale(tree: BeliefTree) -> BeliefTree:
    """The same tree with its scale as the unit of utility; unchanged without uncertainty."""
    unit = scale_of(tree) or 1.0
    changed = {}
    for name, power in _POWERS.items():
        column = getattr(tree, name)
        if column is not None:
            changed[name] = column / unit**power
    return replace(tree, **changed)


def joined(trees: Sequence[BeliefTree]) -> BeliefTree:
    """One root over all trees of one kind of belief: action j is a decision among the trees' actions j."""
    most = max(len(tree.action_nodes) for tree in trees)
    head = 1 + most
    parent: list[Any] = [[-1], np.zeros(most, dtype=np.int64)]
    start = head
    for tree in trees:
        place = np.arange(tree.n_nodes) + start - 1
        above = place[tree.parent[1:]]
        at_root = tree.parent[1:] == 0
        above[at_root] = 1 + np.arange(int(at_root.sum()))
        parent.append(above)
        start += tree.n_nodes - 1
    nodes: dict[str, list[Any]] = {
        "kind": [np.full(head, schema.DECISION, dtype=np.int8), *(t.kind[1:] for t in trees)],
        "reward": [np.zeros(head), *(t.reward[1:] for t in trees)],
        "discount": [np.ones(head), *(t.discount[1:] for t in trees)],
        "prob": [np.ones(head), *(t.prob[1:] for t in trees)],
    }
    columns: dict[str, Any] = {name: np.concatenate(x) for name, x in nodes.items()}
    for name in ("mean", "var", "noise_var", "alpha", "beta", "low", "high", "count", "cost"):
        own = [getattr(tree, name) for tree in trees]
        if all(x is not None for x in own):
            columns[name] = np.concatenate(own)
    if any(tree.cov is not None for tree in trees):
        columns.pop("var", None)
        columns["cov"] = _blocks(trees)
    return BeliefTree(np.concatenate(parent).astype(np.int64), **columns)


def _blocks(trees: Sequence[BeliefTree]) -> Floats:
    """The covariance of all leaves, 0 between trees."""
    sizes = [tree.n_leaves for tree in trees]
    ends = np.cumsum(sizes)
    out = np.zeros((int(ends[-1]), int(ends[-1])))
    for tree, size, end in zip(trees, sizes, ends.tolist(), strict=True):
        own = tree.cov if tree.cov is not None else np.diag(np.asarray(tree.var))
        out[end - size : end, end - size : end] = own
    return out


def first_leaves(tree: BeliefTree, n: int) -> BeliefTree:
    """The tree cut to its first n leaves; the outcomes left below a chance node share its probability."""
    if n >= tree.n_leaves:
        return tree
    kept = np.zeros(tree.n_nodes, dtype=bool)
    kept[tree.leaf_nodes[:n]] = True
    for c in reversed(range(1, tree.n_nodes)):
        kept[tree.parent[c]] |= kept[c]
    place = np.cumsum(kept) - 1
    chosen = np.flatnonzero(kept)
    parent = np.where(chosen == 0, -1, place[tree.parent[chosen]])
    prob = tree.prob[chosen].copy()
    total = np.bincount(np.maximum(parent, 0), weights=prob * (parent >= 0), minlength=len(chosen))
    many = np.bincount(np.maximum(parent, 0), weights=1.0 * (parent >= 0), minlength=len(chosen))
    below = np.flatnonzero(parent >= 0)
    below = below[tree.kind[chosen][parent[below]] == schema.CHANCE]
    sums = total[parent[below]]
    prob[below] = np.where(sums > 0, prob[below] / np.where(sums > 0, sums, 1), 1 / many[parent[below]])
    columns: dict[str, Any] = {name: getattr(tree, name)[chosen] for name in ("kind", "reward", "discount")}
    for name in ("mean", "var", "noise_var", "alpha", "beta", "low", "high", "count", "cost"):
        column = getattr(tree, name)
        columns[name] = None if column is None else column[:n]
    columns["cov"] = None if tree.cov is None else np.ascontiguousarray(tree.cov[:n, :n])
    return replace(tree, parent=parent.astype(np.int64), prob=prob, **columns)
