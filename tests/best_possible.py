"""The least regret that any allocation of rollouts can have on small win/loss trees, and that of rules.

Dynamic programming over what may be seen (Bellman 1956, "A problem in the sequential design of
experiments"; Raiffa and Schlaifer 1961, chapter 1), by enumeration: no code of the package but the policies.
"""

from __future__ import annotations

from functools import cache

import numpy as np
from scipy.special import betainc

from distill.allocation import Search
from distill.rehearse.catalogue import make_problem

State = tuple[tuple[tuple[int, int], ...], ...]  # action -> leaf -> (wins, losses)

_X, _W = np.polynomial.legendre.leggauss(64)  # exact for polynomials up to degree 127
_X, _W = (_X + 1) / 2, _W / 2


def no_rollouts(actions: int, leaves: int) -> State:
    """Before the first rollout: uniform beliefs everywhere."""
    return (((0, 0),) * leaves,) * actions


@cache
def _below(wins: int, losses: int) -> np.ndarray:
    return betainc(1 + wins, 1 + losses, _X)


@cache
def expected_maximum(leaves: tuple[tuple[int, int], ...]) -> float:
    """E[max of independent beta variables]: 1 less the integral of the product of distributions."""
    return float(1 - _W @ np.prod([_below(*leaf) for leaf in leaves], axis=0))


def value_now(state: State) -> float:
    """What acting at once is worth: the best action's expected maximum."""
    return max(expected_maximum(tuple(sorted(action))) for action in state)


def all_known(state: State) -> float:
    """What acting would be worth if every leaf were known."""
    return expected_maximum(tuple(sorted(leaf for action in state for leaf in action)))


def after(state: State, action: int, leaf: int, won: bool) -> State:
    """The state after one more rollout."""
    wins, losses = state[action][leaf]
    leaves = list(state[action])
    leaves[leaf] = (wins + won, losses + (not won))
    return (*state[:action], tuple(leaves), *state[action + 1 :])


def odds(state: State, action: int, leaf: int) -> float:
    """Of winning the next rollout at a leaf."""
    wins, losses = state[action][leaf]
    return (wins + 1) / (wins + losses + 2)


def least_regret(actions: int, leaves: int, rollouts: int) -> float:
    """Regret of the best of all adaptive allocations, value units."""

    @cache
    def best(state: State, left: int) -> float:
        if not left:
            return value_now(state)
        found = []
        for a, below in enumerate(state):
            for leaf in range(len(below)):
                if below[leaf] in below[:leaf] or below in state[:a]:
                    continue  # the same as one that was looked at
                p = odds(state, a, leaf)
                ways = ((p, True), (1 - p, False))
                found.append(sum(q * best(ordered(after(state, a, leaf, won)), left - 1) for q, won in ways))
        return max(found)

    start = no_rollouts(actions, leaves)
    return all_known(start) - best(ordered(start), rollouts)


def ordered(state: State) -> State:
    """The same but for the order of leaves below an action, and of actions."""
    return tuple(sorted(tuple(sorted(action)) for action in state))


def regret_of(policy: object, actions: int, leaves: int, rollouts: int) -> float:
    """Regret of a policy without luck of its own, over all that its rollouts may return; value units."""
    tree = make_problem(f"tree-{actions}x{leaves}^1-winloss").draw(0).tree
    rng = np.random.default_rng(0)
    chances: dict[State, float] = {no_rollouts(actions, leaves): 1.0}
    for spent in range(rollouts):
        later: dict[State, float] = {}
        for state, chance in chances.items():
            policy.begin(tree)
            action, leaf = divmod(policy.choose(_posterior(tree, state), rollouts - spent, rng).leaf, leaves)
            p = odds(state, action, leaf)
            for q, won in ((p, True), (1 - p, False)):
                then = after(state, action, leaf, won)
                later[then] = later.get(then, 0.0) + chance * q
        chances = later
    start = all_known(no_rollouts(actions, leaves))
    return start - sum(chance * value_now(state) for state, chance in chances.items())


def _posterior(tree: object, state: State) -> Search:
    posterior = Search(tree)
    for leaf, (wins, losses) in enumerate(x for action in state for x in action):
        if wins + losses:
            posterior.observe(leaf, float(wins), wins + losses)
    return posterior
