"""Which trees to label: those where the next rollouts can change the decision, more often; floor 4.

Late in a search hardly anything is at stake, and such trees teach and prove little. Trees are sorted into
strata by a value that costs next to nothing, drawn with chances that differ by stratum, and carry the
inverse of their chance as a weight, so that weighted figures are those of the trees as they came
(Horvitz and Thompson 1952).
"""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from typing import Final

import numpy as np
from numpy.typing import NDArray

from distill import schema, voc
from distill.query import Query, scale_of
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["BOUNDS", "CHANCES", "STRATA", "at_stake", "choose", "count", "stratum"]

# Strata by what is at stake, a share of the tree's scale, and how likely a tree of each is taken.
BOUNDS: Final = (1e-4, 1e-2, 1e-1)
CHANCES: Final = (1.0, 2.0, 4.0, 6.0)
STRATA: Final = ("below 0.0001", "0.0001 to 0.01", "0.01 to 0.1", "0.1 and more")


def at_stake(trees: Sequence[BeliefTree], remaining: int | None = None) -> Floats:
    """What each decision may still gain: static VOC of all rollouts left at the best leaf, over the scale.

    remaining : rollouts left; None takes each tree's own, and without one the leaf's value is taken as
    learnt. Covariances are left out, and win/loss leaves stand as normal ones of equal moments: this
    sorts trees, it labels none. Shape (n_trees,), between 0 and about 0.4; 0 where nothing is uncertain.
    """
    priced = voc.price_many([_one_rollout(tree, remaining) for tree in trees], Query(horizon=0.0))
    best = np.array([max(float(np.max(p.voc)), 0.0) for p in priced])
    scale = np.array([scale_of(tree) for tree in trees])
    left = np.array([_left(tree, remaining) > 0 for tree in trees])
    return np.where(left & (scale > 0), best / np.where(scale > 0, scale, 1), 0.0)


def _left(tree: BeliefTree, remaining: int | None) -> int:
    left = tree.remaining if remaining is None else remaining
    return schema.MAX_ROLLOUTS if left is None else left


def _one_rollout(tree: BeliefTree, remaining: int | None) -> BeliefTree:
    """The tree with independent normal leaves and a rollout that tells as much as all that are left."""
    if tree.belief == "gaussian":
        mean, noise = tree.mean, tree.noise_var
        var = tree.var if tree.cov is None else np.diag(tree.cov).copy()
    else:
        a, b, low, high = (np.asarray(getattr(tree, name)) for name in schema.WIN_LOSS_COLUMNS)
        p, q, span = a / (a + b), b / (a + b), high - low
        mean, var = low + span * p, span**2 * p * q / (a + b + 1)
        noise = np.maximum(span**2 * p * q * (a + b) / (a + b + 1), np.finfo(float).tiny)
    assert noise is not None
    return dataclasses.replace(
        tree, mean=mean, var=var, noise_var=noise / max(_left(tree, remaining), 1),
        cov=None, alpha=None, beta=None, low=None, high=None,
    )  # fmt: skip


def stratum(stakes: Floats) -> Ints:
    """Stratum of each tree, a position in STRATA.

    >>> stratum(np.array([0.0, 0.05, 0.3]))
    array([0, 2, 3])
    """
    return np.searchsorted(BOUNDS, stakes, side="right").astype(np.int64)


def count(strata: Ints) -> list[int]:
    """Trees of each stratum."""
    return [int(n) for n in np.bincount(strata, minlength=len(STRATA))]


def choose(stakes: Floats, n: int, rng: np.random.Generator) -> tuple[Ints, Floats]:
    """Draw `n` of the trees without repetition; returns their positions in order, and a weight each.

    Systematic sampling with unequal chances (Madow 1949) in the order of the strata: each stratum gets
    its share to within one tree, and within a stratum all have the same chance p. The weight is
    n / (p x number of trees), so its expected mean is 1.

    >>> rows, weight = choose(np.array([0.0, 0.0, 0.0, 0.0, 0.2, 0.2]), 3, np.random.default_rng(0))
    >>> len(rows), sorted(set(weight.tolist()))
    (3, [0.5, 2.0])
    """
    total = len(stakes)
    strata = stratum(stakes)
    chance = _chances(np.asarray(CHANCES)[strata], n)
    order = np.lexsort((rng.permutation(total), strata))
    ends = np.cumsum(chance[order])
    ends *= n / ends[-1]
    points = np.minimum(rng.random() + np.arange(n), np.nextafter(n, 0))
    rows = np.sort(order[np.searchsorted(ends, points, side="right")])
    return rows, n / total / chance[rows]


def _chances(size: Floats, n: int) -> NDArray[np.float64]:
    """Chances proportional to size, none above 1, that sum to n."""
    sure = np.zeros(len(size), dtype=bool)
    while True:
        rest = max(n - int(sure.sum()), 0)
        free = float(size[~sure].sum())
        chance = np.where(sure, 1.0, size * (rest / free if free > 0 else 1.0))
        more = (chance > 1) & ~sure
        if not np.any(more):
            return chance
        sure |= more
