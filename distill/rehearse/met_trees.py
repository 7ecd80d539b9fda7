"""The belief trees that a policy meets in its own search, for traces and for training."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import replace
from typing import Final

import numpy as np

from distill.allocation import Search as Posterior
from distill.errors import InputError
from distill.rehearse.loop import Budget, decide, luck_of, posterior_means
from distill.rehearse.policies import Choice, Policy
from distill.rehearse.problems import Problem
from distill.rehearse.record import POINTS
from distill.tree import BeliefTree

__all__ = ["FIRST_SEED", "met_trees"]

FIRST_SEED: Final = 2_000_000  # decisions that are recorded, apart from those rehearsed and tuned on


class _Recording:
    """A policy, and the beliefs before its choices at given numbers of rollouts spent."""

    def __init__(self, policy: Policy, budget: int) -> None:
        self.name = policy.name
        self.trees: list[BeliefTree] = []
        self._policy = policy
        self._points = sorted({int(share * budget) for share in POINTS})
        self._budget = budget
        self._due = list(self._points)

    def begin(self, tree: BeliefTree) -> None:
        self._due = list(self._points)
        self._policy.begin(tree)

    def choose(self, posterior: Posterior, remaining: int, rng: np.random.Generator) -> Choice | None:
        if self._due and self._budget - remaining >= self._due[0]:
            self._due.pop(0)
            self.trees.append(posterior.tree(remaining=remaining))
        return self._policy.choose(posterior, remaining, rng)


def met_trees(
    problems: Sequence[Problem],
    policy: Policy,
    *,
    decisions: int,
    rollouts: int = 128,
    first_seed: int = FIRST_SEED,
) -> Iterator[BeliefTree]:
    """Belief trees that a policy meets in its own search, at the POINTS of its budget.

    decisions : of each problem, on seeds from `first_seed` on. rollouts : budget of each. Every tree
    carries `remaining`, `count`, `id` and in `extra` the problem, the seed and the policy.
    """
    if decisions < 1:
        raise InputError("decisions", "must be at least 1", decisions)
    for problem in problems:
        recording = _Recording(policy, rollouts)
        for seed in range(first_seed, first_seed + decisions):
            rng = luck_of(seed)
            decide(problem.draw(seed), recording, Budget(rollouts=rollouts), rng, values=posterior_means)
            about = {"problem": problem.name, "seed": seed, "policy": policy.name}
            for tree in recording.trees:
                assert tree.remaining is not None
                name = f"{problem.name}-{seed}-{rollouts - tree.remaining}"
                yield replace(tree, id=name, extra=about)
            recording.trees.clear()
