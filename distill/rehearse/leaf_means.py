"""What unlimited rollouts would say of a searched tree, estimated by many at each leaf.

For simulators without an exact model: a search cannot learn more than the mean return of rollouts at its
leaves, so an action's worth is what these means give it, backed up as the search does it.
"""

from __future__ import annotations

import hashlib
import json
import math
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np

from distill import schema
from distill.errors import InputError
from distill.files import read_json, write_atomic
from distill.record import to_record
from distill.rehearse.search import Search, action_values
from distill.tree import BeliefTree, Floats

__all__ = ["LEAF_ROLLOUTS", "LeafMeans", "keep_means", "kept_means", "leaf_means", "worth_error"]

LEAF_ROLLOUTS: Final = 4000  # at each leaf, where none are asked for


@dataclass(frozen=True, eq=False)
class LeafMeans:
    """Mean return at each leaf, value units, and the variance of that estimate; shape (n_leaves,)."""

    mean: Floats
    var: Floats

    def worth(self, tree: BeliefTree) -> Floats:
        """Root action values at these means; shape (n_actions,)."""
        return action_values(tree, self.mean)


def leaf_means(search: Search, rollouts: int, luck: np.random.SeedSequence) -> LeafMeans:
    """Means of `rollouts` at each leaf that is not terminal; those are worth 0.

    luck : of these rollouts alone, so that no policy's luck is judged by itself. The variance is that of the
    returns over `rollouts`; of win/loss leaves, that of odds with one win and one loss more than were seen,
    so that it is not 0 where all ended alike.
    """
    n, sure = search.lookahead.n_leaves, search.lookahead.sure
    mean, var = np.zeros(n), np.zeros(n)
    for leaf, seed in enumerate(luck.spawn(n)):
        if sure[leaf]:
            continue
        rng = np.random.default_rng(seed)
        returns = np.array([search.rolled(leaf, rng) for _ in range(rollouts)])
        mean[leaf] = returns.mean()
        if search.settings.win_loss is None:
            var[leaf] = returns.var(ddof=1) / rollouts
        else:
            low, high = search.settings.win_loss
            odds = (returns.sum() + 1) / (rollouts + 2)
            mean[leaf] = low + (high - low) * mean[leaf]
            var[leaf] = (high - low) ** 2 * odds * (1 - odds) / rollouts
    return LeafMeans(mean, var)


def worth_error(tree: BeliefTree, means: LeafMeans) -> float:
    """Standard error of the difference between the best root action and another, the largest of them.

    Value units; by first order: below a decision node the child with the largest mean counts, below a
    chance node all do, leaves being estimated apart. What maxima add is not in it: of several leaves worth
    nearly the same the largest mean is too large, by about as much as the error.
    """
    value, var = np.full(tree.n_nodes, -np.inf), np.zeros(tree.n_nodes)
    chance = tree.kind == schema.CHANCE
    value[chance] = 0.0
    value[tree.leaf_nodes], var[tree.leaf_nodes] = means.mean, means.var
    at_root: list[tuple[float, float]] = []
    for v in range(tree.n_nodes - 1, 0, -1):
        q, s = tree.reward[v] + tree.discount[v] * value[v], tree.discount[v] ** 2 * var[v]
        p = int(tree.parent[v])
        if p == 0:
            at_root.append((float(q), float(s)))
        if chance[p]:
            value[p] += tree.prob[v] * q
            var[p] += tree.prob[v] ** 2 * s
        elif q > value[p]:
            value[p], var[p] = q, s
    best = max(range(len(at_root)), key=lambda i: at_root[i][0])
    others = [s for i, (_, s) in enumerate(at_root) if i != best]
    return math.sqrt(at_root[best][1] + max(others)) if others else 0.0


def kept_means(path: Path, search: Search, rollouts: int) -> LeafMeans | None:
    """The means that a file holds for this very tree and number of rollouts; None where it does not."""
    if not path.exists():
        return None
    try:
        found: Any = read_json(path)
    except InputError:
        return None
    if not isinstance(found, dict) or found.get("of") != _mark(search, rollouts):
        return None
    return LeafMeans(np.array(found["mean"], dtype=np.float64), np.array(found["var"], dtype=np.float64))


def keep_means(path: Path, search: Search, rollouts: int, means: LeafMeans) -> None:
    """Write means for `kept_means`."""
    found = {"of": _mark(search, rollouts), "mean": means.mean.tolist(), "var": means.var.tolist()}
    write_atomic(path, (json.dumps(found) + "\n").encode())


def _mark(search: Search, rollouts: int) -> str:
    """Of a tree, its prior (which pilot rollouts gave it) and the settings: another simulator has another."""
    about = json.dumps([to_record(search.tree()), rollouts, repr(search.settings)], sort_keys=True)
    return hashlib.sha256(about.encode()).hexdigest()
