"""A small reference search: fixed look-ahead, rollouts at the leaves, Gaussian beliefs, any rule."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.optimize import brentq
from scipy.special import digamma, polygamma

from distill import schema
from distill.allocation import Search as Posterior
from distill.errors import InputError, RefusedError
from distill.rehearse.lookahead import Lookahead, look_ahead, plan_ahead
from distill.rehearse.simulator import Action, Simulator, State
from distill.tree import BeliefTree, Floats

__all__ = ["Prior", "Rule", "Search", "Settings", "action_values", "estimate_prior"]

_SAME = 1e-10  # returns that differ by less, as a share of the largest, differ by rounding
_MOST_WEIGHT = 1e6  # degrees of freedom beyond which trees are taken to share one noise

# Either the name of a rule of `distill.allocation`, or a function of the tree so far (its `remaining`
# says how many rollouts are left) and a generator, which returns the position of a leaf.
Rule = str | Callable[[BeliefTree, np.random.Generator], int]


@dataclass(frozen=True)
class Settings:
    """How a search looks ahead.

    depth : steps of look-ahead. length : most steps of a rollout beyond its leaf.
    plans : leaves are plans of actions (`plan_ahead`) instead of states (`look_ahead`).
    samples : outcomes drawn per action where the simulator has no model and steps are random.
    opening : (leaves, rollouts each) spent before the search to set this tree's prior mean and noise.
        They are the prior's alone: the search's budget and its beliefs at leaves do not count them.
    """

    depth: int = 2
    length: int = 30
    plans: bool = False
    samples: int = 1
    opening: tuple[int, int] = (4, 4)

    def tree(self, simulator: Simulator, state: State, rng: np.random.Generator) -> Lookahead:
        """The look-ahead tree from a state."""
        if self.plans:
            return plan_ahead(simulator, state, self.depth, rng)
        return look_ahead(simulator, state, self.depth, rng, samples=self.samples)


@dataclass(frozen=True)
class Prior:
    """What pilot rollouts say about the leaves of a tree, before any tree is searched.

    var : variance of leaf values within a tree, u^2.
    noise_var : typical variance of one rollout, u^2; noise_weight : how many observations the pilot's
        figure is worth against a tree's own (degrees of freedom, inf where trees do not differ).
    """

    var: float
    noise_var: float
    noise_weight: float


def estimate_prior(
    simulator: Simulator,
    settings: Settings,
    rng: np.random.Generator,
    *,
    trees: int = 40,
    leaves: int = 8,
    rollouts: int = 6,
) -> Prior:
    """Empirical Bayes from pilot rollouts on trees met by random play.

    One-way random effects by the method of moments (Searle, Casella and McCulloch 1992, section 3.6):
    within a leaf the pooled variance of its rollouts; between leaves of a tree the variance of their
    averages less noise / rollouts, kept at or above a hundredth of the noise of one rollout. Noise
    differs between trees as a scaled inverse chi square, whose weight comes from the spread of the
    logarithms of the trees' noise estimates (Smyth 2004, section 6.2).

    Raises RefusedError where rollouts do not vary.
    """
    noise, between, freedom, top = [], [], [], 0.0
    for state in _wander(simulator, rng, trees):
        tree = settings.tree(simulator, state, rng)
        open_leaves = np.flatnonzero(~tree.sure)
        if len(open_leaves) < 2:
            continue
        chosen = rng.permutation(open_leaves)[:leaves]
        returns = _returns(simulator, tree, chosen, rollouts, settings.length, rng)
        top = max(top, float(np.abs(returns).max()))
        within = float(returns.var(axis=1, ddof=1).mean())
        noise.append(within)
        between.append(float(returns.mean(axis=1).var(ddof=1)) - within / rollouts)
        freedom.append(len(chosen) * (rollouts - 1))
    typical = float(np.average(noise, weights=freedom)) if noise else 0.0
    if not typical > (_SAME * top) ** 2:
        raise RefusedError(f"{simulator.name}: pilot rollouts do not vary; one at each leaf tells all")
    weight = _noise_weight(np.array(noise), np.array(freedom, dtype=float), typical)
    return Prior(max(float(np.mean(between)), typical / 100), typical, weight)


class Search:
    """One decision: beliefs over a look-ahead tree, sharpened by rollouts.

    Leaf values are taken as independent normals; terminal leaves are sure. The prior mean, and the
    noise of one rollout, are this tree's own, from its opening rollouts; the noise is shrunk towards
    the pilot's. Where two root actions share a state, or neighbouring states are worth much the same,
    leaves are in truth correlated: the belief does not know.
    """

    def __init__(
        self, simulator: Simulator, state: State, settings: Settings, prior: Prior, rng: np.random.Generator
    ) -> None:
        self.simulator = simulator
        self.settings = settings
        self.lookahead = settings.tree(simulator, state, rng)
        self.used = 0
        self._posterior = Posterior(self._prior_tree(prior, rng))

    def _prior_tree(self, prior: Prior, rng: np.random.Generator) -> BeliefTree:
        ahead = self.lookahead
        sure = ahead.sure
        mean, noise = 0.0, prior.noise_var
        open_leaves = np.flatnonzero(~sure)
        if len(open_leaves):
            leaves, rollouts = self.settings.opening
            chosen = rng.permutation(open_leaves)[:leaves]
            returns = _returns(self.simulator, ahead, chosen, rollouts, self.settings.length, rng)
            mean = float(returns.mean())
            own_weight = len(chosen) * (rollouts - 1)
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
            observed = self.lookahead.rollout(self.simulator, leaf, rng, self.settings.length)
            self._posterior.observe(leaf, observed)
            self.used += 1

    def best_action(self) -> Action:
        """The root action with the largest backed-up mean; the first on ties."""
        tree = self.tree()
        assert tree.mean is not None
        return self.lookahead.actions[int(np.argmax(action_values(tree, tree.mean)))]


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


def _returns(
    simulator: Simulator, tree: Lookahead, leaves: Any, rollouts: int, length: int, rng: np.random.Generator
) -> Floats:
    """Returns of `rollouts` at each of some leaves, shape (leaves, rollouts)."""
    return np.array(
        [[tree.rollout(simulator, int(i), rng, length) for _ in range(rollouts)] for i in leaves]
    ).reshape(len(leaves), rollouts)


def _wander(simulator: Simulator, rng: np.random.Generator, n: int) -> list[State]:
    """States met by random play, restarted at the end of each episode and after 20 steps at most."""
    found: list[State] = []
    while len(found) < n:
        state = simulator.start(rng)
        for _ in range(20):
            if simulator.is_terminal(state) or len(found) == n:
                break
            found.append(state)
            choices = simulator.actions(state)
            state, _ = simulator.step(state, choices[int(rng.random() * len(choices))], rng)
    return found


def _noise_weight(noise: Floats, freedom: Floats, typical: float) -> float:
    """Weight (degrees of freedom) of the inverse chi square behind many trees' noise estimates.

    The logarithm of an estimate with d degrees of freedom varies by trigamma(d / 2), that of the tree's
    own noise by trigamma(weight / 2): the weight solves for what the first leaves over. Trees whose
    rollouts hardly vary at all say nothing about the others and are left out.
    """
    told = noise > 1e-6 * typical
    if np.count_nonzero(told) < 3:
        return np.inf
    half = freedom[told] / 2
    logs = np.log(noise[told]) - digamma(half) + np.log(half)
    excess = float(np.var(logs, ddof=1) - np.mean(polygamma(1, half)))
    if excess <= polygamma(1, _MOST_WEIGHT / 2):
        return np.inf
    return 2 * float(brentq(lambda x: polygamma(1, x) - excess, 1e-4, _MOST_WEIGHT / 2, xtol=1e-12))
