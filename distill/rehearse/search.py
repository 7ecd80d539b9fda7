"""A small reference search: fixed look-ahead, rollouts at the leaves, beliefs of either kind, any rule."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from distill import schema
from distill.allocation import Search as Posterior
from distill.errors import InputError
from distill.rehearse.lookahead import Settings
from distill.rehearse.priors import OddsPrior, Prior, estimate_odds, estimate_prior, returns_of, wins_of
from distill.rehearse.simulator import Action, Simulator, State
from distill.tree import BeliefTree, Floats

__all__ = [
    "Prior",
    "Rule",
    "Search",
    "Settings",
    "action_values",
    "estimate_prior",
    "posterior_means",
    "prior_of",
]

_SURE = 1e-12  # width of a known leaf's win/loss belief, which cannot be 0, as a share of the others'

# Either the name of a rule of `distill.allocation`, or a function of the tree so far (its `remaining`
# says how many rollouts are left) and a generator, which returns the position of a leaf.
Rule = str | Callable[[BeliefTree, np.random.Generator], int]


def prior_of(
    simulator: Simulator, settings: Settings, rng: np.random.Generator, trees: int = 40
) -> Prior | OddsPrior:
    """The prior of the kind of beliefs that the settings ask for, from pilot rollouts."""
    estimate = estimate_prior if settings.win_loss is None else estimate_odds
    return estimate(simulator, settings, rng, trees=trees)


class Search:
    """One decision: beliefs over a look-ahead tree, sharpened by rollouts.

    Leaf values are taken as independent, normals or odds of winning; terminal leaves are sure. The prior
    mean, and the noise of one rollout, are this tree's own, from its opening rollouts, shrunk towards
    the pilot's (the mean of normals is not). Where two root actions share a state, or neighbouring states
    are worth much the same, leaves are in truth correlated: the belief does not know.
    """

    def __init__(
        self,
        simulator: Simulator,
        state: State,
        settings: Settings,
        prior: Prior | OddsPrior,
        rng: np.random.Generator,
    ) -> None:
        self.simulator = simulator
        self.settings = settings
        self.lookahead = settings.tree(simulator, state, rng)
        self.used = 0
        if isinstance(prior, OddsPrior) != (settings.win_loss is not None):
            raise InputError("prior", "must be of the kind of beliefs that the settings ask for", prior)
        if isinstance(prior, OddsPrior):
            self._posterior = Posterior(self._odds_tree(prior, rng))
        else:
            self._posterior = Posterior(self._prior_tree(prior, rng))

    def _opening(self, rng: np.random.Generator) -> Floats:
        """Returns of the rollouts before the search, shape (leaves, rollouts each)."""
        leaves, rollouts = self.settings.opening
        chosen = rng.permutation(np.flatnonzero(~self.lookahead.sure))[:leaves]
        return returns_of(self.simulator, self.lookahead, chosen, rollouts, self.settings.length, rng)

    def _odds_tree(self, prior: OddsPrior, rng: np.random.Generator) -> BeliefTree:
        assert self.settings.win_loss is not None
        ahead, n = self.lookahead, self.lookahead.n_leaves
        low, high = self.settings.win_loss
        alpha, beta = prior.of_tree(wins_of(self.simulator, self.settings, self._opening(rng)))
        return BeliefTree(
            ahead.parent, ahead.kind, ahead.reward, ahead.discount, ahead.prob,
            alpha=np.where(ahead.sure, 1.0, alpha),
            beta=np.where(ahead.sure, 1.0, beta),
            low=np.where(ahead.sure, 0.0, low),
            high=np.where(ahead.sure, _SURE * (high - low), high),
            count=np.zeros(n),
        )  # fmt: skip

    def rolled(self, leaf: int, rng: np.random.Generator) -> float:
        """One rollout: its return, or for win/loss beliefs 1 or 0."""
        found = self.lookahead.rollout(self.simulator, leaf, rng, self.settings.length)
        if self.settings.win_loss is None:
            return found
        if self.lookahead.sure[leaf]:
            return 0.0
        return float(wins_of(self.simulator, self.settings, np.array([found]))[0])

    def _prior_tree(self, prior: Prior, rng: np.random.Generator) -> BeliefTree:
        ahead = self.lookahead
        sure = ahead.sure
        mean, noise = 0.0, prior.noise_var
        returns = self._opening(rng)
        if returns.size:
            mean = float(returns.mean())
            own_weight = returns.size - len(returns)
            if own_weight and np.isfinite(prior.noise_weight):
                own = float(returns.var(axis=1, ddof=1).mean())
                pooled = prior.noise_weight * prior.noise_var + own_weight * own
                noise = pooled / (prior.noise_weight + own_weight)
        return BeliefTree(
            ahead.parent, ahead.kind, ahead.reward, ahead.discount, ahead.prob,
            mean=np.where(sure, 0.0, mean),
            var=np.where(sure, 0.0, prior.var),
            noise_var=np.full(ahead.n_leaves, noise),
            count=np.zeros(ahead.n_leaves),
        )  # fmt: skip

    def tree(self, **scalars: Any) -> BeliefTree:
        """The belief tree now; `scalars` such as `remaining`, `id`, `extra` go with it."""
        return self._posterior.tree(**scalars)

    def spend(self, rule: Rule, rollouts: int, remaining: int, rng: np.random.Generator) -> None:
        """Give out `rollouts` one by one; `remaining` is the budget left before the first of them."""
        for left in range(remaining, remaining - rollouts, -1):
            if isinstance(rule, str):
                leaf = self._posterior.pick(rule, rng, remaining=left)
            else:
                leaf = int(rule(self.tree(remaining=left), rng))
                if not 0 <= leaf < self.lookahead.n_leaves:
                    last = self.lookahead.n_leaves - 1
                    raise InputError("rule", f"must pick a leaf from 0 to {last}", leaf)
            self._posterior.observe(leaf, self.rolled(leaf, rng))
            self.used += 1

    def best_action(self) -> Action:
        """The root action with the largest backed-up mean; the first on ties."""
        return self.lookahead.actions[int(np.argmax(posterior_means(self.tree())))]


def action_values(tree: BeliefTree, leaf_values: Floats) -> Floats:
    """Root action values when leaf values are as given; shape (n_actions,) for shape (n_leaves,).

    Several sets of leaf values at once, shape (n_leaves, m), give shape (n_actions, m).

    >>> from distill.record import from_record
    >>> t = from_record({"format": "belief-tree/1", "parent": [-1, 0, 0],
    ...     "kind": ["decision", "leaf", "leaf"], "reward": [0, 1, 0],
    ...     "mean": [None, 0, 0], "var": [None, 1, 1], "noise_var": [None, 1, 1]})
    >>> action_values(t, np.array([2.0, 2.5]))
    array([3. , 2.5])
    """
    several = leaf_values.ndim == 2
    value = np.zeros((tree.n_nodes, *leaf_values.shape[1:]))
    value[tree.kind == schema.DECISION] = -np.inf
    value[tree.leaf_nodes] = leaf_values
    parent, decision = tree.parent.tolist(), (tree.kind == schema.DECISION).tolist()
    largest = np.maximum if several else max  # the plain one is faster on single numbers
    for v in range(tree.n_nodes - 1, 0, -1):
        q = tree.reward[v] + tree.discount[v] * value[v]
        p = parent[v]
        value[p] = largest(value[p], q) if decision[p] else value[p] + tree.prob[v] * q
    roots = tree.reward[tree.action_nodes], tree.discount[tree.action_nodes]
    reward, discount = (x[:, None] for x in roots) if several else roots
    return np.asarray(reward + discount * value[tree.action_nodes])


def posterior_means(tree: BeliefTree) -> Floats:
    """Root action values at the leaves' posterior means; shape (n_actions,)."""
    if tree.mean is not None:
        return action_values(tree, tree.mean)
    assert tree.alpha is not None
    assert tree.beta is not None
    assert tree.low is not None
    assert tree.high is not None
    return action_values(tree, tree.low + (tree.high - tree.low) * (tree.alpha / (tree.alpha + tree.beta)))
