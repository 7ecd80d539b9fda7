"""Policies that need no value of computation: even, UCT, Thompson sampling and its relatives."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Final, NamedTuple, Protocol

import numpy as np

from distill.allocation import Search as Posterior
from distill.errors import InputError
from distill.tree import BeliefTree, Ints

__all__ = ["ByRule", "Choice", "Policy", "TopTwoThompson", "WithPrior", "leaf_actions"]


_NARROWEST: Final = 1e-6  # of a prior, as a factor on its own sd


class Choice(NamedTuple):
    """Roll out `leaf` `rollouts` times before choosing again.

    fell_back : another rule chose, because the policy's own values told no leaf apart.
    """

    leaf: int
    rollouts: int = 1
    fell_back: bool = False


class Policy(Protocol):
    """Chooses rollouts for one decision after another. `name` stands in tables and files.

    A policy may offer more: `observe(leaf, observed, rollouts)`, called after every choice with what
    `distill.allocation.Search.observe` takes, on the policy's time, for beliefs of its own;
    `expect(rollout_seconds)`, called before `begin` with the cost of a rollout, 0 where that is not
    known; `suits(tree)`, whether it can search such trees at all; `own_beliefs` = True where `observe`
    keeps beliefs that it chooses by in place of the tree's, whose upkeep is then not charged;
    `watch(most)`, after which it never stops early but has in `worth`, after each choice, what the best
    rollout is worth in units of the tree's scale, where that is at most `most`, else infinity.
    """

    @property
    def name(self) -> str:
        """Unique among the policies of a rehearsal."""

    def begin(self, tree: BeliefTree) -> None:
        """A new decision, with its beliefs before the first rollout."""

    def choose(self, posterior: Posterior, remaining: int, rng: np.random.Generator) -> Choice | None:
        """The next rollouts, `remaining` being left in all; None stops early."""


@dataclass
class ByRule:
    """One of the rules of `distill.allocation` (even, uct, thompson, static_rate), or static_voc.

    static_voc : the knowledge gradient of one rollout: the static rate when no batch but 1 is looked at.
    exploration : UCT's constant, in units of the tree's scale. name : by default the rule, with it.
    """

    rule: str
    exploration: float = 1.0
    name: str = ""

    def __post_init__(self) -> None:
        if not 0 <= self.exploration < np.inf:
            raise InputError("c", "must be >= 0 and finite", self.exploration)
        self.name = self.name or (f"uct-{self.exploration:g}" if self.rule == "uct" else self.rule)

    def begin(self, tree: BeliefTree) -> None:
        """Nothing to prepare."""

    def choose(self, posterior: Posterior, remaining: int, rng: np.random.Generator) -> Choice:
        """One rollout where the rule says."""
        if self.rule == "static_voc":
            return Choice(posterior.pick("static_rate", rng, remaining=1))
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
        self.name = "top_two_thompson" if share == 0.5 else f"top_two_thompson-{share:g}"
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


class WithPrior:
    """A policy that chooses by a prior of its own: tuned Thompson sampling is Thompson sampling so.

    width : factor on the standard deviation of every leaf's prior, 1e-6 to 1e6 (win/loss: its trials are
        divided by width^2, its mean kept). What is acted on in the end are the beliefs of the tree, as for
        everyone.
    """

    own_beliefs = True

    def __init__(self, policy: Policy, width: float) -> None:
        if not _NARROWEST <= width <= 1 / _NARROWEST:
            raise InputError("prior", f"must be from {_NARROWEST:g} to {1 / _NARROWEST:g}", width)
        self._policy = policy
        self.width = width
        self.name = policy.name if width == 1 else f"{policy.name}-prior{width:g}"
        self._own: Posterior | None = None

    def begin(self, tree: BeliefTree) -> None:
        """The tree with the policy's own prior."""
        if tree.var is not None:
            tree = replace(tree, var=tree.var * self.width**2)
        elif tree.cov is not None:
            tree = replace(tree, cov=tree.cov * self.width**2)
        else:
            assert tree.alpha is not None
            assert tree.beta is not None
            tree = replace(tree, alpha=tree.alpha / self.width**2, beta=tree.beta / self.width**2)
        self._own = Posterior(tree)
        self._policy.begin(tree)

    def choose(self, posterior: Posterior, remaining: int, rng: np.random.Generator) -> Choice | None:
        """The policy's choice under its own beliefs."""
        del posterior
        assert self._own is not None
        return self._policy.choose(self._own, remaining, rng)

    def observe(self, leaf: int, observed: float, rollouts: int) -> None:
        """Keep the own beliefs up to date."""
        assert self._own is not None
        self._own.observe(leaf, observed, rollouts)
        if (observe := getattr(self._policy, "observe", None)) is not None:
            observe(leaf, observed, rollouts)

    def expect(self, rollout_seconds: float) -> None:
        """Tell the policy."""
        if (expect := getattr(self._policy, "expect", None)) is not None:
            expect(rollout_seconds)

    def suits(self, tree: BeliefTree) -> bool:
        """Whether the policy can search such trees."""
        suits = getattr(self._policy, "suits", None)
        return suits is None or bool(suits(tree))

    @property
    def watch(self) -> Callable[[float], None] | None:
        """The policy's, where it has a price to stop at."""
        return getattr(self._policy, "watch", None)

    @property
    def worth(self) -> float:
        """What the best rollout is worth under the own beliefs, to a policy that watches."""
        return float(getattr(self._policy, "worth", np.inf))


def leaf_actions(tree: BeliefTree) -> Ints:
    """Position of each leaf's root action, in child order; shape (n_leaves,)."""
    under = np.full(tree.n_nodes, -1, dtype=np.int64)
    under[tree.action_nodes] = np.arange(len(tree.action_nodes))
    for v, p in enumerate(tree.parent.tolist()):
        if p > 0:
            under[v] = under[p]
    return under[tree.leaf_nodes]
