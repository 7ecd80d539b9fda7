"""Peers of a record scorer: they read the tree that the agent searches; floor 5."""

# mypy: allow-untyped-calls
from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np

from distill import voc
from distill.allocation import Search
from distill.allocation_rules import RULES, Belief, Topology, pick
from distill.feature_graph import FeatureGraph
from distill.query import Query
from distill.scorer_inputs import RECORD
from distill.tree import BeliefTree, Floats
from distill.tree_peer_kernels import NODES, SHARES, matched_on_tree, sampled_on_tree, sampled_together

__all__ = [
    "CORRELATED_MOMENTS", "FIRST_ORDER", "MOMENTS", "ONE", "SAMPLES", "STATIC", "THOMPSON", "UCT", "Held",
    "static_of_tree", "tree_peers",
]  # fmt: skip

# Names of peers, in figures too.
FIRST_ORDER: Final = "first-order closed form"
ONE: Final = "static VOC of one rollout"
STATIC: Final = "static closed form"
MOMENTS: Final = "moment matching with quadrature"
SAMPLES: Final = "Monte Carlo in equal time"
UCT: Final = "UCT"
THOMPSON: Final = "Thompson sampling"
CORRELATED_MOMENTS: Final = (
    "correlated leaves: an outcome moves every leaf, and matching their joint moments is what the backup does"
)


@dataclass(frozen=True, eq=False)
class Held:
    """What an agent has at hand when it decides: rows, rollouts left, and its tree for compiled rules.

    root : a triangular root of the covariance; None for independent leaves.
    """

    columns: Mapping[str, Any]
    remaining: int
    tree: BeliefTree
    topology: Topology
    belief: Belief
    scale: float
    root: Floats | None

    @classmethod
    def of(cls, columns: Mapping[str, Any], remaining: int, tree: BeliefTree) -> Held:
        """A tree without counts gets those that its beliefs are worth: noise variance over variance."""
        root = None if tree.cov is None else _root(tree.cov)
        topology, belief, scale = Search(tree).compiled
        if tree.count is None:
            worth = belief.noise / np.maximum(belief.var, 1e-300)
            counts = np.rint(np.clip(worth, 1, 1e9))
            topology, belief, scale = Search(replace(tree, count=counts)).compiled
        return cls(columns, remaining, tree, topology, belief, scale, root)


def _root(cov: Floats) -> Floats:
    """Triangular root of a covariance, with the least jitter of the diagonal that it needs."""
    size = float(np.max(np.diag(cov)))
    jitter = 0.0
    while True:
        try:
            return np.asarray(np.linalg.cholesky(cov + jitter * np.eye(len(cov))))
        except np.linalg.LinAlgError:
            jitter = max(10 * jitter, 1e-14 * size, 1e-300)


def static_of_tree(batch: int | None) -> Callable[[Held], Floats]:
    """The peer that picks by the exact static value of the tree; batch None is the rate."""

    def scored(held: Held) -> Floats:
        return voc.price(held.tree, Query(0.0, batch, held.remaining)).voc

    return scored


def tree_peers(value: Mapping[str, Any], samples: int, seed: int = 0) -> dict[str, Callable[[Held], Floats]]:
    """Name -> peer, a score a leaf from what the agent holds. Arguments as for `distill.peers.peers`.

    The static values are those of the exact engine at horizon 0. UCT goes down from the root (Kocsis and
    Szepesvari 2006) with the tree's scale as its unit; it and Thompson sampling pass chance nodes by drawing
    a child. Thompson sampling draws correlated leaves one by one. The first-order closed form reads the
    record rows, so its time leaves out the backup, as the scorer's does.
    """
    graph = FeatureGraph.of_value(value, RECORD)
    batch: int | None = value["batch"]
    rng = np.random.default_rng(seed)

    def first_order(held: Held) -> Floats:
        return graph.matrix({**held.columns, "remaining": float(held.remaining)}).first_order

    def matching(held: Held) -> Floats:
        place = (held.topology, held.belief, held.remaining, batch or 0)
        return np.asarray(matched_on_tree(*place, NODES, SHARES))

    def sampled(held: Held) -> Floats:
        asked = (held.remaining, batch or 0, samples)
        if held.root is None:
            return np.asarray(sampled_on_tree(rng, held.topology, held.belief, *asked))
        return np.asarray(sampled_together(rng, held.topology, held.belief, held.root, *asked))

    def chosen(rule: str) -> Callable[[Held], Floats]:
        number = RULES.index(rule)

        def scored(held: Held) -> Floats:
            out = np.zeros(len(held.belief.mean))
            place = (held.topology, held.belief, held.remaining, held.scale)
            out[pick(number, rng, *place)] = 1.0
            return out

        return scored

    return {
        FIRST_ORDER: first_order,
        ONE: static_of_tree(1),
        STATIC: static_of_tree(batch),
        MOMENTS: matching,
        SAMPLES: sampled,
        UCT: chosen("uct"),
        THOMPSON: chosen("thompson"),
    }
