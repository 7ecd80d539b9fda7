"""What a scorer file reads of a tree under search, kind by kind of its inputs."""

from __future__ import annotations

from typing import Any

from distill.allocation import Search as Posterior
from distill.errors import RefusedError
from distill.runtime import Scorer, Scores
from distill.tree import BeliefTree, leaf_table

__all__ = ["ScorerInputs"]


class ScorerInputs:
    """The arrays of one decision that a scorer's call takes; those that rollouts do not change are kept.

    Raises RefusedError for trees that the file cannot score: `fit` says so beforehand.
    """

    def __init__(self, scorer: Scorer, tree: BeliefTree) -> None:
        if not self.fit(scorer, tree):
            raise RefusedError("scorer: scores independent Gaussian leaves under decision nodes only")
        table = leaf_table(tree)
        self._scorer = scorer
        self._fixed: dict[str, Any] = {
            "noise_var": table.noise_var,
            "gain": table.gain,
            "offset": table.offset,
            "action": table.action,
            "cost": table.cost,
        }

    @staticmethod
    def fit(scorer: Scorer, tree: BeliefTree) -> bool:
        """Whether the scorer's inputs can hold the tree."""
        del scorer  # one kind of inputs so far
        return tree.var is not None and not tree.has_chance

    def score(self, posterior: Posterior, remaining: int) -> Scores:
        """One call of the scorer on the beliefs as they are."""
        mean, var = posterior.moments
        return self._scorer.score(mean=mean, var=var, remaining=remaining, **self._fixed)
