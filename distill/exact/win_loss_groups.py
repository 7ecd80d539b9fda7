"""Win/loss trees whose chance nodes all lie above their decisions, as sums of maxima; floor 2.

Below the root a search meets chance first and chooses later: an action is a sum, over outcomes, of maxima
over leaves. Expectations pass through the sum, so

    V(action) = sum over its groups of V(group),  V(group) = E max over leaves of (low_j + width_j p_j),

in units of the root (discounts and probabilities multiplied in). A group competes with what the best other
action offers less what the action's other groups add. A tree of decision nodes has one group an action.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from distill import schema
from distill.errors import RefusedError
from distill.query import Priced, Query
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["Choice", "Group", "price_groups"]

_EPS = 2.0**-52


# A support narrower than this share of where it lies is a sure value: rounding leaves little of it.
_NARROW = 1e3 * 2.0**-52


@dataclass(frozen=True)
class Group:
    """Leaves of which the best will be taken: worth max(sure, low_j + width_j p_j), p_j ~ Beta(a_j, b_j).

    action : position of the root action. leaves : positions in the tree, (L,), as the columns. sure : the
    best of its leaves too narrow to tell from a sure value; -inf where there is none. size : the largest
    number that entered, for the rounding.
    """

    action: int
    leaves: Ints
    a: Floats
    b: Floats
    low: Floats
    width: Floats
    sure: float
    size: float

    def settled(self, shift: float) -> Group:
        """The group shifted, its narrow leaves made a sure value."""
        low = self.low + shift
        wide = self.width > _NARROW * np.abs(low)
        sure = float(np.max((low + self.width * (self.a / (self.a + self.b)))[~wide], initial=-math.inf))
        return Group(
            self.action, self.leaves[wide], self.a[wide], self.b[wide], low[wide], self.width[wide], sure,
            self.size + abs(shift),
        )  # fmt: skip


class Choice(Protocol):
    """A priced group: its V, a bound of V's error, and what trials on its leaves are worth."""

    value: float
    error: float

    def price(self, rival: float, slack: float, query: Query) -> tuple[Floats, Ints, Floats]:
        """(voc or rate, batch, error) of the group's leaves against a rival value known to `slack`."""
        ...


def price_groups(tree: BeliefTree, query: Query, choose: Callable[[Group], Choice], method: str) -> Priced:
    """Price every leaf of a win/loss tree, h > 0, with `choose` for the method of one group.

    Raises RefusedError where a chance node lies below a decision node that lies below the root.
    """
    groups, constant = _groups(tree)
    n_actions = len(constant)
    value, error = np.zeros(n_actions), np.zeros(n_actions)
    choices: list[Choice | None] = []
    centre = _centre(groups, constant)
    constant = constant - centre
    seated: set[int] = set()
    for i, group in enumerate(groups):
        first = group.action not in seated  # the action's constant goes to its first group
        seated.add(group.action)
        groups[i] = group = group.settled(float(constant[group.action]) if first else 0.0)
        choice = choose(group) if len(group.leaves) else None
        choices.append(choice)
        value[group.action] += group.sure if choice is None else choice.value
        error[group.action] += _EPS * group.size + (0.0 if choice is None else choice.error)
    n = tree.n_leaves
    voc, wrong = np.zeros(n), _ranges(tree)
    any_batch = 0 if query.remaining == 0 and query.rate else 1
    batch = np.full(n, any_batch if query.batch is None else query.batch, dtype=np.int64)
    for group, choice in zip(groups, choices, strict=True):
        if choice is None:
            continue
        x = group.action
        others = np.delete(np.arange(n_actions), x)
        rival, slack = -math.inf, float(error[x] - choice.error)
        if len(others):
            beside = [
                g.sure if c is None else c.value
                for g, c in zip(groups, choices, strict=True)
                if g.action == x and g is not group
            ]
            rival = math.fsum([float(value[others].max()), *(-v for v in beside)])
            slack += float(error[others].max())
        voc[group.leaves], batch[group.leaves], wrong[group.leaves] = choice.price(rival, slack, query)
    return Priced(voc, batch, value + centre, wrong, method)


def _centre(groups: list[Group], constant: Floats) -> float:
    """The best action's value with every leaf at its mean: numbers near it keep their digits."""
    static = constant.copy()
    for g in groups:
        mean = g.low + g.width * (g.a / (g.a + g.b))
        static[g.action] += float(mean.max())
    return float(static.max())


def _ranges(tree: BeliefTree) -> Floats:
    """What a leaf can move the root by at most: the error of calling its VOC 0."""
    assert tree.low is not None
    assert tree.high is not None
    gain = np.ones(tree.n_nodes)
    for c in range(1, tree.n_nodes):
        gain[c] = gain[tree.parent[c]] * tree.prob[c] * tree.discount[c]
    return np.asarray(gain[tree.leaf_nodes] * (tree.high - tree.low))


def _groups(tree: BeliefTree) -> tuple[list[Group], Floats]:
    """The groups, and the rewards that every outcome of an action earns before it chooses."""
    children: list[list[int]] = [[] for _ in range(tree.n_nodes)]
    parent, kind, prob = tree.parent.tolist(), tree.kind.tolist(), tree.prob.tolist()
    reward, discount = tree.reward.tolist(), tree.discount.tolist()
    for c in range(1, tree.n_nodes):
        if prob[c] > 0:
            children[parent[c]].append(c)
    leaf_of = {node: i for i, node in enumerate(tree.leaf_nodes.tolist())}
    actions = tree.action_nodes.tolist()
    constant = np.array([reward[a] for a in actions])
    groups: list[Group] = []
    for x, action in enumerate(actions):
        above = [(action, discount[action])]  # nodes that choose nothing yet, and their weights
        while above:
            node, weight = above.pop()
            if kind[node] == schema.CHANCE or len(children[node]) == 1:
                for c in reversed(children[node]):
                    constant[x] += weight * prob[c] * reward[c]
                    above.append((c, weight * prob[c] * discount[c]))
                continue
            found: list[tuple[int, float, float]] = []  # leaf, weight, rewards on the way
            below = [(node, weight, 0.0)]
            while below:
                v, w, earned = below.pop()
                if kind[v] == schema.LEAF:
                    found.append((leaf_of[v], w, earned))
                elif kind[v] == schema.CHANCE and len(children[v]) > 1:
                    raise RefusedError(
                        "win/loss leaves with h > 0: a chance node below a decision node below the root "
                        "has no exact method"
                    )
                else:
                    below.extend((c, w * discount[c], earned + w * reward[c]) for c in reversed(children[v]))
            groups.append(_group(tree, x, found))
    return groups, constant


def _group(tree: BeliefTree, action: int, found: list[tuple[int, float, float]]) -> Group:
    assert tree.alpha is not None
    assert tree.beta is not None
    assert tree.low is not None
    assert tree.high is not None
    leaves = np.array([leaf for leaf, _, _ in found], dtype=np.int64)
    weight, earned = np.array([w for _, w, _ in found]), np.array([r for _, _, r in found])
    a, b = tree.alpha[leaves], tree.beta[leaves]
    width = weight * (tree.high[leaves] - tree.low[leaves])
    low = earned + weight * tree.low[leaves]
    size = np.abs(earned) + np.abs(weight * tree.low[leaves])
    return Group(action, leaves, a, b, low, width, -math.inf, float(np.max(2 * size + 0.25 * width)))
