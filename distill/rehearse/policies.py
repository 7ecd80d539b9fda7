"""Policies: ways to choose the next rollout, compared on the same decisions."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, NamedTuple, Protocol

import numpy as np

from distill.allocation import Search as Posterior
from distill.errors import InputError
from distill.query import Priced, Query
from distill.runtime import Scorer
from distill.tree import BeliefTree, Ints, leaf_table

__all__ = ["ByRule", "ByScorer", "ByValue", "Choice", "Policy", "TopTwoThompson", "leaf_actions"]


class Choice(NamedTuple):
    """Roll out `leaf` `rollouts` times before choosing again.

    fell_back : another rule chose, because the policy's own values told no leaf apart.
    """

    leaf: int
    rollouts: int = 1
    fell_back: bool = False


class Policy(Protocol):
    """Chooses rollouts for one decision after another. `name` stands in tables and files."""

    @property
    def name(self) -> str:
        """Unique among the policies of a rehearsal."""

    def begin(self, tree: BeliefTree) -> None:
        """A new decision, with its beliefs before the first rollout."""

    def choose(self, posterior: Posterior, remaining: int, rng: np.random.Generator) -> Choice | None:
        """The next rollouts, `remaining` being left in all; None stops early."""


@dataclass
class ByRule:
    """One of the rules of `distill.allocation`: even, uct, thompson or static_rate.

    exploration : UCT's constant, in units of the tree's scale.
    """

    rule: str
    exploration: float = 1.0

    @property
    def name(self) -> str:
        """The rule, and UCT's constant."""
        return f"uct-{self.exploration:g}" if self.rule == "uct" else self.rule

    def begin(self, tree: BeliefTree) -> None:
        """Nothing to prepare."""

    def choose(self, posterior: Posterior, remaining: int, rng: np.random.Generator) -> Choice:
        """One rollout where the rule says."""
        return Choice(posterior.pick(self.rule, rng, remaining=remaining, exploration=self.exploration))


class TopTwoThompson:
    """Top-two Thompson sampling on root actions (Russo 2016, section 3.3, "TTTS").

    With probability `share` the leaf of a Thompson draw; otherwise draws are repeated until one is best
    under another root action, at most `tries` times, and that one's leaf is rolled out.
    """

    def __init__(self, share: float = 0.5, tries: int = 30) -> None:
        if not 0 < share <= 1:
            raise InputError("share", "must be above 0 and at most 1", share)
        self.share = share
        self.tries = tries
        self.name = "top_two_thompson"
        self._action: Ints = np.zeros(0, dtype=np.int64)

    def begin(self, tree: BeliefTree) -> None:
        """Remember which leaf stands under which root action."""
        self._action = leaf_actions(tree)

    def choose(self, posterior: Posterior, remaining: int, rng: np.random.Generator) -> Choice:
        """One rollout, at the leader's leaf or the challenger's."""
        leader = posterior.pick("thompson", rng, remaining=remaining)
        if rng.random() < self.share:
            return Choice(leader)
        for _ in range(self.tries):
            challenger = posterior.pick("thompson", rng, remaining=remaining)
            if self._action[challenger] != self._action[leader]:
                return Choice(challenger)
        return Choice(leader)


class ByValue:
    """The candidate with the best value of computation, by any function that prices trees.

    price : (tree, query) -> Priced, for instance `distill.voc.price`.
    horizon : 0 static, inf dynamic. rate : best VOC a rollout over batches, else of one rollout.
    commit : spend the rate's whole batch before choosing again; else one rollout at a time.
    rollout_price : value units; the search stops where no candidate is worth more a rollout.
    Where no value stands out from 0 the static rate decides, so that late rollouts keep an order. Such
    choices are marked: a policy that mostly falls back is the static rate under another name.
    """

    def __init__(
        self,
        price: Callable[[BeliefTree, Query], Priced],
        *,
        horizon: float = math.inf,
        rate: bool = True,
        commit: bool = False,
        rollout_price: float = 0.0,
        name: str = "",
    ) -> None:
        if not rollout_price >= 0:
            raise InputError("rollout_price", "must be >= 0", rollout_price)
        self._price = price
        self.horizon = horizon
        self.rate = rate
        self.commit = commit
        self.rollout_price = rollout_price
        words = {0.0: "static", math.inf: "dynamic"}.get(horizon, f"horizon{horizon:g}")
        self.name = name or f"exact_{words}_{'rate' if rate else 'voc'}"

    def begin(self, tree: BeliefTree) -> None:
        """Nothing to prepare."""

    def choose(self, posterior: Posterior, remaining: int, rng: np.random.Generator) -> Choice | None:
        """The best candidate, or None where none is worth `rollout_price`."""
        query = Query(horizon=self.horizon, batch=None if self.rate else 1, remaining=remaining)
        priced = self._price(posterior.tree(), query)
        best = int(np.argmax(priced.voc))
        if self.rollout_price > 0 and priced.voc[best] <= self.rollout_price:
            return None
        if not priced.voc[best] > priced.error[best]:
            return Choice(posterior.pick("static_rate", rng, remaining=remaining), fell_back=True)
        return Choice(best, int(priced.batch[best]) if self.commit else 1)


class ByScorer:
    """The leaf that a shipped scorer picks, from the arrays that an agent keeps anyway.

    scorer : `distill.runtime.Scorer`, for independent Gaussian leaves under decision nodes.
    commit, rollout_price : as for `ByValue`; both read all of the scorer's outputs instead of its pick.
    """

    def __init__(
        self, scorer: Scorer, *, name: str = "scorer", commit: bool = False, rollout_price: float = 0.0
    ) -> None:
        if not rollout_price >= 0:
            raise InputError("rollout_price", "must be >= 0", rollout_price)
        self.scorer = scorer
        self.commit = commit
        self.rollout_price = rollout_price
        self.name = name
        self._fixed: dict[str, Any] = {}

    def begin(self, tree: BeliefTree) -> None:
        """The columns of the leaf table that rollouts do not change."""
        table = leaf_table(tree)
        self._fixed = {
            "noise_var": table.noise_var,
            "gain": table.gain,
            "offset": table.offset,
            "action": table.action,
            "cost": table.cost,
        }

    def choose(self, posterior: Posterior, remaining: int, rng: np.random.Generator) -> Choice | None:
        """One call of the scorer."""
        del rng  # the protocol passes it
        mean, var = posterior.moments
        if not self.commit and self.rollout_price == 0:
            return Choice(self.scorer.pick(mean=mean, var=var, remaining=remaining, **self._fixed))
        scores = self.scorer.score(mean=mean, var=var, remaining=remaining, **self._fixed)
        if self.rollout_price > 0 and scores.voc[scores.pick] <= self.rollout_price:
            return None
        return Choice(scores.pick, max(int(scores.batch[scores.pick]), 1) if self.commit else 1)


def leaf_actions(tree: BeliefTree) -> Ints:
    """Position of each leaf's root action, in child order; shape (n_leaves,)."""
    under = np.full(tree.n_nodes, -1, dtype=np.int64)
    under[tree.action_nodes] = np.arange(len(tree.action_nodes))
    for v, p in enumerate(tree.parent.tolist()):
        if p > 0:
            under[v] = under[p]
    return under[tree.leaf_nodes]
