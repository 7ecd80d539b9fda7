"""Belief trees as immutable flat arrays, and the leaf table of a flat one; floor 1, light."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from distill import schema
from distill.errors import RefusedError

__all__ = ["BeliefTree", "LeafTable", "leaf_paths", "leaf_table"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class BeliefTree:
    """A tree of possible futures with beliefs at its leaves.

    Node columns have length `n_nodes`, parents before children, node 0 the root, a decision node:
    `parent` (root -1), `kind` (codes of `schema.KINDS`), and of the edge into the node `reward` (u),
    `discount` (0 < g <= 1) and `prob` (1 unless under a chance node).
    Leaf columns have length `n_leaves`, in node order: Gaussian leaves carry `mean`, `var` (or the
    matrix `cov` instead) and `noise_var`; win/loss leaves `alpha`, `beta`, `low`, `high`. The others
    are None. `count` is rollouts so far (None: unknown), `cost` value units a rollout.
    Optional scalars: `horizon` (rollouts; inf allowed), `batch`, `remaining`, `id`, `extra`.

    Arrays are read-only. Build one with `record.from_record`, or directly from arrays known to be valid.
    """

    parent: Ints
    kind: NDArray[np.int8]
    reward: Floats
    discount: Floats
    prob: Floats
    mean: Floats | None = None
    var: Floats | None = None
    noise_var: Floats | None = None
    alpha: Floats | None = None
    beta: Floats | None = None
    low: Floats | None = None
    high: Floats | None = None
    count: Floats | None = None
    cost: Floats | None = None
    cov: Floats | None = None
    horizon: float | None = None
    batch: int | None = None
    remaining: int | None = None
    id: str | int | None = None
    extra: Mapping[str, Any] | None = None

    def __post_init__(self) -> None:
        if self.cost is None:
            object.__setattr__(self, "cost", np.zeros(self.n_leaves))
        for value in vars(self).values():
            if isinstance(value, np.ndarray):
                value.flags.writeable = False

    @property
    def n_nodes(self) -> int:
        """Number of nodes."""
        return len(self.parent)

    @property
    def leaf_nodes(self) -> Ints:
        """Node index of each leaf, in node order; shape (n_leaves,)."""
        return np.flatnonzero(self.kind == schema.LEAF)

    @property
    def n_leaves(self) -> int:
        """Number of leaves."""
        return int(np.count_nonzero(self.kind == schema.LEAF))

    @property
    def action_nodes(self) -> Ints:
        """Node index of each root action, in child order; shape (n_actions,)."""
        return np.flatnonzero(self.parent == 0)

    @property
    def belief(self) -> str:
        """'gaussian' or 'win_loss'."""
        return "gaussian" if self.mean is not None else "win_loss"

    @property
    def has_chance(self) -> bool:
        """Whether any node is a chance node."""
        return bool(np.any(self.kind == schema.CHANCE))


@dataclass(frozen=True, eq=False)
class LeafTable:
    """Independent leaves of a decision-only tree, flattened: leaf i counts gain_i X_i + offset_i.

    All arrays have shape (n_leaves,); `action` is the 0-based position of the root action, every
    position up to the largest occurs. Units as in `schema.LEAF_TABLE_UNITS`.
    """

    gain: Floats
    offset: Floats
    action: Ints
    cost: Floats
    mean: Floats | None = None
    var: Floats | None = None
    noise_var: Floats | None = None
    alpha: Floats | None = None
    beta: Floats | None = None
    low: Floats | None = None
    high: Floats | None = None


def leaf_paths(tree: BeliefTree) -> tuple[Floats, Floats, Ints]:
    """Of each leaf, in leaf order: gain, offset and root action.

    gain = product of discounts on the way, offset = sum of reward times the discounts before it.
    """
    n = tree.n_nodes
    gain, offset = np.ones(n), np.zeros(n)
    action = np.full(n, -1, dtype=np.int64)
    actions = tree.action_nodes
    action[actions] = np.arange(len(actions))
    parent = tree.parent.tolist()
    for c in range(1, n):
        p = parent[c]
        offset[c] = offset[p] + gain[p] * tree.reward[c]
        gain[c] = gain[p] * tree.discount[c]
        if p > 0:
            action[c] = action[p]
    leaves = tree.leaf_nodes
    return gain[leaves], offset[leaves], action[leaves]


def leaf_table(tree: BeliefTree) -> LeafTable:
    """The leaf table of a decision-only tree with independent leaves, in leaf order; see `leaf_paths`.

    Raises RefusedError for chance nodes or `cov`, which a leaf table cannot hold.

    >>> from distill.record import from_record
    >>> t = from_record({"format": "belief-tree/1", "parent": [-1, 0, 1, 0],
    ...     "kind": ["decision", "decision", "leaf", "leaf"], "reward": [0, 1, 2, 0],
    ...     "discount": [1, 0.5, 0.5, 1], "mean": [None, None, 0, 1],
    ...     "var": [None, None, 1, 1], "noise_var": [None, None, 1, 1]})
    >>> leaf_table(t).gain, leaf_table(t).offset, leaf_table(t).action
    (array([0.25, 1.  ]), array([2., 0.]), array([0, 1]))
    """
    if tree.has_chance:
        raise RefusedError("a leaf table holds decision nodes only; this tree has chance nodes")
    if tree.cov is not None:
        raise RefusedError("a leaf table holds independent leaves; this tree has 'cov'")
    assert tree.cost is not None
    columns = {name: getattr(tree, name) for name in (*schema.GAUSSIAN_COLUMNS, *schema.WIN_LOSS_COLUMNS)}
    return LeafTable(*leaf_paths(tree), tree.cost, **columns)
