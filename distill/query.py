"""What is asked of the exact engine, and what it answers; floor 1."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np

from distill import schema
from distill.errors import InputError
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["Priced", "Query", "net_value", "resolve", "scale_of", "to_output"]


@dataclass(frozen=True)
class Query:
    """Which value of computation is asked for.

    horizon : h, rollouts that each leaf still receives before the later decisions; 0 static, inf dynamic.
    batch : rollouts a candidate; None asks for the rate, max over k <= remaining of VOC(k) / k.
    remaining : rollouts left; bounds the rate, and must be given for it.
    tolerance : largest absolute error wanted, as a share of the tree's scale; None takes what the
        method gives. A method that cannot meet it raises ToleranceError.

    >>> Query(batch=None)
    Traceback (most recent call last):
    distill.errors.InputError: remaining: must be given for a rate
    """

    horizon: float = math.inf
    batch: int | None = 1
    remaining: int | None = None
    tolerance: float | None = None

    def __post_init__(self) -> None:
        if not self.horizon >= 0:
            raise InputError("horizon", "must be >= 0", self.horizon)
        if self.batch is not None and not 1 <= self.batch <= schema.MAX_ROLLOUTS:
            raise InputError("batch", "must be a whole number from 1 to 2^53", self.batch)
        if self.rate and self.remaining is None:
            raise InputError("remaining", "must be given for a rate")
        if self.remaining is not None and not 0 <= self.remaining <= schema.MAX_ROLLOUTS:
            raise InputError("remaining", "must be a whole number from 0 to 2^53", self.remaining)
        if self.tolerance is not None and not self.tolerance > 0:
            raise InputError("tolerance", "must be > 0", self.tolerance)

    @property
    def rate(self) -> bool:
        """Whether the best VOC a rollout over batches is asked for."""
        return self.batch is None


@dataclass(frozen=True, eq=False)
class Priced:
    """Exact VOC of every candidate of one tree.

    voc : shape (n_leaves,), u; with a rate query, u a rollout. Never negative.
    batch : shape (n_leaves,), the batch asked for, or the best one (0 where no rollout is left).
    value : shape (n_actions,), V_h per root action, u.
    error : shape (n_leaves,), bound on the absolute error of `voc`, same unit.
    method : name of the exact method.
    """

    voc: Floats
    batch: Ints
    value: Floats
    error: Floats
    method: str


def scale_of(tree: BeliefTree) -> float:
    """The tree's scale: the largest standard deviation that any leaf contributes to the root, u.

    max over leaves of gain x sqrt(variance), where gain is the product of discounts and
    probabilities on the way. Errors are stated as shares of it. 0 for a tree without uncertainty.
    Win/loss: sd = (high - low) sqrt(a b / ((a + b)^2 (a + b + 1))).
    """
    gain = np.ones(tree.n_nodes)
    parent = tree.parent.tolist()
    for c in range(1, tree.n_nodes):
        gain[c] = gain[parent[c]] * tree.discount[c] * tree.prob[c]
    if tree.mean is not None:
        var = tree.var if tree.cov is None else np.diag(tree.cov)
        assert var is not None
        sd = np.sqrt(var)
    else:
        assert tree.alpha is not None
        assert tree.beta is not None
        assert tree.low is not None
        assert tree.high is not None
        total = tree.alpha + tree.beta
        sd = (tree.high - tree.low) * np.sqrt(tree.alpha / total * (tree.beta / total) / (total + 1))
    return float(np.max(gain[tree.leaf_nodes] * sd))


def resolve(
    tree: BeliefTree,
    *,
    horizon: float | None = None,
    batch: int | None = None,
    rate: bool = False,
    remaining: int | None = None,
    tolerance: float | None = None,
) -> Query:
    """The query for one tree: a given argument beats the record's scalar; else dynamic and batch 1.

    Raises InputError for a rate whose `remaining` neither the caller nor the record gives.
    """
    if horizon is None:
        horizon = tree.horizon if tree.horizon is not None else math.inf
    if remaining is None:
        remaining = tree.remaining
    if rate:
        return Query(horizon, None, remaining, tolerance)
    if batch is None:
        batch = tree.batch if tree.batch is not None else 1
    return Query(horizon, batch, remaining, tolerance)


def net_value(tree: BeliefTree, query: Query, priced: Priced) -> Floats:
    """VOC - batch x cost, or rate - cost; shape (n_leaves,), the unit of `priced.voc`."""
    assert tree.cost is not None
    return priced.voc - (tree.cost if query.rate else priced.batch * tree.cost)


def to_output(tree: BeliefTree, query: Query, priced: Priced) -> dict[str, Any]:
    """The JSON object that `price` prints for one tree.

    Keys: `voc`, `batch`, `error` per leaf in node order, `value` per root action in child order, `best`
    (0-based leaf position of the best net value, the first on ties), `method`, `id`.
    """
    return {
        "id": tree.id,
        "voc": priced.voc.tolist(),
        "batch": priced.batch.tolist(),
        "value": priced.value.tolist(),
        "error": priced.error.tolist(),
        "best": int(np.argmax(net_value(tree, query, priced))),
        "method": priced.method,
    }
