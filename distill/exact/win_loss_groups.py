"""Win/loss trees as sums of groups; floor 2.

Below the root a search meets chance first and chooses later: an action is a sum, over outcomes, of maxima.
Expectations pass through the sum, so

    V(action) = sum over its groups of V(group),  V(group) = E max over leaves of (low_j + width_j p_j),

in units of the root (discounts and probabilities multiplied in). A group competes with what the best other
action offers less what the action's other groups add. A tree of decision nodes has one group an action. A
group with chance nodes below its choice is a maximum of more than leaves (`win_loss_later`).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from distill import schema
from distill.exact.win_loss_later import NARROW, Later, Shape
from distill.query import Priced, Query
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["Choice", "Group", "price_groups"]

_EPS = 2.0**-52


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
        wide = self.width > NARROW * np.abs(low)
        sure = float(np.max((low + self.width * (self.a / (self.a + self.b)))[~wide], initial=-math.inf))
        return Group(
            self.action, self.leaves[wide], self.a[wide], self.b[wide], low[wide], self.width[wide], sure,
            self.size + abs(shift),
        )  # fmt: skip

    def static(self) -> float:
        """Its value with every leaf at its mean."""
        return float(np.max(self.low + self.width * (self.a / (self.a + self.b))))


class Choice(Protocol):
    """A priced group: its V, a bound of V's error, and what trials on its leaves are worth."""

    value: float
    error: float

    def price(self, rival: float, slack: float, query: Query) -> tuple[Floats, Ints, Floats]:
        """(voc or rate, batch, error) of the group's leaves against a rival value known to `slack`."""
        ...


def price_groups(
    tree: BeliefTree, query: Query, choose: Callable[[Group | Later], Choice], method: str
) -> Priced:
    """Price every leaf of a win/loss tree, h > 0, with `choose` for the method of one group."""
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


def _centre(groups: list[Group | Later], constant: Floats) -> float:
    """The best action's value with every leaf at its mean: numbers near it keep their digits."""
    static = constant.copy()
    for g in groups:
        static[g.action] += g.static()
    return float(static.max())


def _ranges(tree: BeliefTree) -> Floats:
    """What a leaf can move the root by at most: the error of calling its VOC 0."""
    assert tree.low is not None
    assert tree.high is not None
    gain = np.ones(tree.n_nodes)
    for c in range(1, tree.n_nodes):
        gain[c] = gain[tree.parent[c]] * tree.prob[c] * tree.discount[c]
    return np.asarray(gain[tree.leaf_nodes] * (tree.high - tree.low))


def _groups(tree: BeliefTree) -> tuple[list[Group | Later], Floats]:
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
    groups: list[Group | Later] = []
    for x, action in enumerate(actions):
        above = [(action, discount[action])]  # nodes that choose nothing yet, and their weights
        while above:
            node, weight = above.pop()
            if kind[node] == schema.CHANCE or len(children[node]) == 1:
                for c in reversed(children[node]):
                    constant[x] += weight * prob[c] * reward[c]
                    above.append((c, weight * prob[c] * discount[c]))
                continue
            shape = Shape()
            found: list[tuple[int, float, float, bool]] = []
            # node, its place in the shape, weight, rewards on the way, whether it carries what all earn
            below = [(node, -1, weight, 0.0, True)]
            while below:
                v, place, w, earned, carries = below.pop()
                down, only = children[v], len(children[v]) == 1
                if kind[v] == schema.LEAF:
                    shape.add(place, False, len(found))
                    found.append((leaf_of[v], w, earned, carries))
                    continue
                total = kind[v] == schema.CHANCE
                if not only and (place < 0 or shape.total[place] != total):
                    place = shape.add(place, total)
                share = [w * prob[c] if total else w for c in down]
                for m in reversed(range(len(down))):
                    c, first = down[m], m == 0 or not total
                    earns = (earned if first else 0.0) + share[m] * reward[c]
                    below.append((c, place, share[m] * discount[c], earns, carries and first))
            groups.append(_group(tree, x, found, shape))
    return groups, constant


def _group(
    tree: BeliefTree, action: int, found: list[tuple[int, float, float, bool]], shape: Shape
) -> Group | Later:
    assert tree.alpha is not None
    assert tree.beta is not None
    assert tree.low is not None
    assert tree.high is not None
    leaves = np.array([leaf for leaf, _, _, _ in found], dtype=np.int64)
    weight, earned = np.array([w for _, w, _, _ in found]), np.array([r for _, _, r, _ in found])
    a, b = tree.alpha[leaves], tree.beta[leaves]
    width = weight * (tree.high[leaves] - tree.low[leaves])
    low = earned + weight * tree.low[leaves]
    size = 2 * (np.abs(earned) + np.abs(weight * tree.low[leaves])) + 0.25 * width
    if any(shape.total):
        carries = np.array([c for _, _, _, c in found])
        return Later(action, leaves, a, b, low, width, carries, shape, float(size.sum()))
    return Group(action, leaves, a, b, low, width, -math.inf, float(size.max()))
