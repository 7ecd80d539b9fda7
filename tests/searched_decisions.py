"""Decisions recorded at several stages of a simulated search, inside the model and outside of it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from distill.allocation import Search
from distill.family import draw, parse_family
from distill.tree import BeliefTree, Floats

_FRESH = b"""
format = "tree-family/1"
name = "fresh"
belief = "gaussian"
shape = { actions = 3, leaves = [2, 4] }
prior = { sd = 1, mean = { normal = [0, 0.5] } }
noise = { sd = 2 }
budget = { rollouts = 64, used = 0 }
search = { even = 1 }
"""

Noise = Callable[[np.random.Generator], float]  # of unit variance


def gaussian_noise(rng: np.random.Generator) -> float:
    return float(rng.standard_normal())


def rare_crash(rng: np.random.Generator) -> float:
    """Unit variance, mean 0: one rollout in fifty falls far below the others."""
    return float((0.02 - (rng.random() < 0.02)) / np.sqrt(0.02 * 0.98))


def searched(
    decisions: int,
    *,
    seed: int = 0,
    noise: Noise = gaussian_noise,
    wander: float = 0.0,
    alike: float = 0.0,
    stages: int = 5,
    rollouts: int = 12,
) -> list[BeliefTree]:
    """`stages` records of each decision, `rollouts` apart, Thompson sampling between them.

    wander : sd that each true leaf value moves between records, which the beliefs do not know.
    alike : share of a leaf value's variance that the leaves of an action have in common, unknown to them.
    """
    family = parse_family(_FRESH)
    rng = np.random.default_rng(seed)
    out = []
    for d in range(decisions):
        prior = draw(family, seed, d)
        assert prior.mean is not None
        truth = prior.mean + _deviations(prior, alike, rng)
        search = Search(prior)
        for stage in range(stages):
            left = 64 - stage * rollouts
            out.append(replace(search.tree(remaining=left), extra={"decision": d, "rule": "thompson"}))
            for r in range(rollouts):
                i = search.pick("thompson", rng, remaining=left - r)
                search.observe(i, truth[i] + 2 * noise(rng))
            truth = truth + wander * rng.standard_normal(len(truth))
    return out


def _deviations(prior: BeliefTree, alike: float, rng: np.random.Generator) -> Floats:
    parent = prior.parent[prior.leaf_nodes]
    shared = rng.standard_normal(prior.n_nodes)[parent]
    own = rng.standard_normal(len(parent))
    return np.sqrt(alike) * shared + np.sqrt(1 - alike) * own
