"""Random belief trees as a search would meet them; floor 3.

A draw is a problem, then a search of it: the shape, the prior over leaf values and the noise come from
the family's distributions, true leaf values from the prior, and a share of the rollout budget is spent
by allocation rules, with simulated rollouts around the true values and exact posterior updates. So the
trees cover fresh ones, half-searched ones and close calls in the proportions that a search makes.
"""

from __future__ import annotations

import math
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from distill import schema
from distill.allocation import RULES, Search
from distill.family_file import Family, load_family, parse_family
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["Family", "draw", "load_family", "parse_family"]

_STREAM: Final = 0x7EE5  # keeps these draws apart from other uses of the same seed


def draw(family: Family, seed: int, index: int) -> BeliefTree:
    """Tree number `index` of the family under `seed`: the same bits whoever draws it, in any order.

    seed, index : whole numbers >= 0. The tree's `id` is the index; `remaining` is what is left of the
    drawn budget, at least 1; `count` is rollouts so far; `horizon` and `batch` are drawn
    where the family has them.

    >>> family = parse_family(b'''
    ... format = "tree-family/1"
    ... name = "two bays"
    ... belief = "gaussian"
    ... shape = { actions = 2, leaves = [1, 3] }
    ... prior = { sd = 1 }
    ... noise = { sd = 2 }
    ... budget = { rollouts = 16, used = 0.5 }
    ... search = { thompson = 1 }
    ... ''')
    >>> tree = draw(family, seed=0, index=7)
    >>> tree.remaining, int(tree.count.sum()), len(tree.action_nodes)
    (8, 8, 2)
    """
    rng = np.random.Generator(np.random.PCG64(np.random.SeedSequence(seed, spawn_key=(_STREAM, index))))
    parent, kind, prob = _shape(family, rng)
    n, leaves = len(parent), np.flatnonzero(kind == schema.LEAF)
    scale = family["prior.scale"].one(rng)
    reward = scale * family["edge.reward"].draw(rng, n)
    discount = np.full(n, family["edge.discount"].one(rng))
    reward[0], discount[0] = 0.0, 1.0
    cost = scale * family["cost.tree"].one(rng) * family["cost.leaf"].draw(rng, len(leaves))
    leaf_prior = _gaussian_prior if family.belief == "gaussian" else _win_loss_prior
    columns, truth = leaf_prior(family, rng, parent, leaves, scale)

    budget = int(family["budget.rollouts"].one(rng))
    used = min(int(budget * family["budget.used"].one(rng)), budget - 1)
    if rng.random() < family.number("budget.fresh"):
        used = 0
    horizon = family["budget.horizon"].one(rng) if "budget.horizon" in family.fields else None
    batch = int(family["budget.batch"].one(rng)) if "budget.batch" in family.fields else None
    search = Search(BeliefTree(parent, kind, reward, discount, prob, cost=cost, **columns))
    search.run(
        truth,
        {rule: family.number(f"search.{rule}") for rule in RULES},
        rng,
        rollouts=used,
        budget=budget,
        batch=int(family["search.batch"].one(rng)),
        switch=family.number("search.switch"),
        exploration=family["search.exploration"].one(rng),
    )
    return search.tree(remaining=budget - used, horizon=horizon, batch=batch, id=index)


def _shape(family: Family, rng: np.random.Generator) -> tuple[Ints, NDArray[np.int8], Floats]:
    """Parents, kinds and probabilities, breadth first.

    Each action has its own number of leaves and depth (edges from the root to its deepest leaf). Above
    the last level a node splits its leaves over `branching` children at random; on the last level all
    the leaves that are left hang side by side, and a single one replaces its inner node.
    """
    actions = int(family["shape.actions"].one(rng))
    sizes = family["shape.leaves"].draw(rng, actions).astype(int).tolist()
    depths = family["shape.depth"].draw(rng, actions).astype(int).tolist()
    chance_share = family.number("chance.share") if family.has("chance") else 0.0
    parent, kind, prob = [-1], [schema.DECISION], [1.0]
    level = [(0, 1.0, size, depth - 1) for size, depth in zip(sizes, depths, strict=True)]
    while level:
        deeper: list[tuple[int, float, int, int]] = []
        for above, p, size, levels in level:
            node = len(parent)
            parent.append(above)
            prob.append(p)
            if size == 1:
                kind.append(schema.LEAF)
                continue
            if levels > 1:
                parts = min(int(family["shape.branching"].one(rng)), size)
                split = (1 + rng.multinomial(size - parts, [1 / parts] * parts)).tolist()
            else:
                split = [1] * size
            is_chance = chance_share > 0 and rng.random() < chance_share
            kind.append(schema.CHANCE if is_chance else schema.DECISION)
            weights = _probabilities(family, rng, len(split)) if is_chance else [1.0] * len(split)
            deeper += [(node, w, s, levels - 1) for w, s in zip(weights, split, strict=True)]
        level = deeper
    return np.array(parent), np.array(kind, dtype=np.int8), np.array(prob)


def _probabilities(family: Family, rng: np.random.Generator, n: int) -> list[float]:
    """Probabilities under a chance node: symmetric Dirichlet, `evenness` its parameter."""
    weights = rng.standard_gamma(family["chance.evenness"].one(rng), n)
    total = weights.sum()
    return (weights / total if total > 0 else np.full(n, 1 / n)).tolist()


def _gaussian_prior(
    family: Family, rng: np.random.Generator, parent: Ints, leaves: Ints, scale: float
) -> tuple[dict[str, Any], Floats]:
    n = len(leaves)
    action = _action_of(parent)[leaves]
    mean = family["prior.action"].draw(rng, int(action.max()) + 1)[action] + family["prior.mean"].draw(rng, n)
    sd = scale * family["prior.tree_sd"].one(rng) * family["prior.sd"].draw(rng, n)
    noise = scale * family["noise.tree_sd"].one(rng) * family["noise.sd"].draw(rng, n)
    columns = {"mean": scale * mean, "noise_var": noise**2}
    if not family.has("correlation"):
        columns["var"] = sd**2
        return columns, columns["mean"] + sd * rng.standard_normal(n)
    loading = sd[:, None] * _loadings(parent, leaves, family["correlation.shared"].one(rng))
    own = sd**2 - np.einsum("ij,ij->i", loading, loading)
    columns["cov"] = loading @ loading.T
    np.fill_diagonal(columns["cov"], sd**2)
    shared = loading @ rng.standard_normal(loading.shape[1])
    return columns, columns["mean"] + shared + np.sqrt(np.maximum(own, 0)) * rng.standard_normal(n)


def _loadings(parent: Ints, leaves: Ints, shared: float) -> Floats:
    """Weight of each inner node's effect in each leaf, as a share of the leaf's standard deviation.

    Each inner node below the root has one effect that all leaves under it share; those above a leaf
    make up the share `shared` of its variance between them, in equal parts.
    """
    inner = np.unique(parent[1:])
    column = {int(v): j for j, v in enumerate(inner[inner > 0])}
    out = np.zeros((len(leaves), len(column)))
    for i, leaf in enumerate(leaves.tolist()):
        above = []
        v = int(parent[leaf])
        while v > 0:
            above.append(column[v])
            v = int(parent[v])
        if above:
            out[i, above] = math.sqrt(shared / len(above))
    return out


def _win_loss_prior(
    family: Family, rng: np.random.Generator, parent: Ints, leaves: Ints, scale: float
) -> tuple[dict[str, Any], Floats]:
    del parent
    n = len(leaves)
    strength, rate = family["prior.strength"].draw(rng, n), family["prior.win_rate"].draw(rng, n)
    low = scale * family["prior.low"].draw(rng, n)
    high = low + scale * family["prior.span"].draw(rng, n)
    alpha, beta = strength * rate, strength * (1 - rate)
    return {"alpha": alpha, "beta": beta, "low": low, "high": high}, rng.beta(alpha, beta)


def _action_of(parent: Ints) -> Ints:
    """Root action of every node, 0-based child order; -1 for the root."""
    out, actions = [-1], 0
    for v in parent[1:].tolist():
        if v == 0:
            out.append(actions)
            actions += 1
        else:
            out.append(out[v])
    return np.array(out)
