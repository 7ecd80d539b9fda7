"""A tree of decision and chance nodes in its shortest form: maxima and sums by turns; floor 2.

In units of the root, with weight W_v the product of discounts and probabilities down to v, an edge into c
under parent v contributes  W_v p_c r_c + (W_v p_c g_c) V(c)  and every node is either the maximum or the sum
of its children's contributions. Then

    a maximum of a maximum is one maximum, a sum of a sum one sum;
    a sum of normals is one normal; sure values become a sum's constant or a maximum's floor;
    a node with one child is that child.

What is left of a root action is a constant, normals and maxima that are added up: expectations pass through
the sum, so only maxima at the top of an action, and what lies below them, need distributions at all.
Every node keeps its location in `shift`, so that distributions below sit near 0 however large the values.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from distill import schema
from distill.tree import BeliefTree, Floats

__all__ = ["Constant", "Max", "Normal", "Sum", "max_sum_form", "path_weights"]


@dataclass
class Constant:
    """A sure value."""

    shift: float


@dataclass
class Normal:
    """shift + a zero-mean normal: the sum of the leaves' deviations."""

    shift: float
    leaves: list[int]


@dataclass
class Max:
    """shift + max(floor, members)."""

    shift: float
    floor: float
    members: list[Normal | Sum]


@dataclass
class Sum:
    """shift + sum of the maxima (their shift 0) + the leaves' deviations (a zero-mean normal)."""

    shift: float
    leaves: list[int]
    maxima: list[Max] = field(default_factory=list)


Node = Constant | Normal | Max | Sum


def path_weights(tree: BeliefTree) -> tuple[Floats, Floats]:
    """W (product of discounts and probabilities from the root) and the reward W_parent p r, per node."""
    weight, reward = np.ones(tree.n_nodes), np.zeros(tree.n_nodes)
    parent, prob = tree.parent.tolist(), tree.prob.tolist()
    for c in range(1, tree.n_nodes):
        down = weight[parent[c]] * prob[c]
        reward[c] = down * tree.reward[c]
        weight[c] = down * tree.discount[c]
    return weight, reward


def max_sum_form(tree: BeliefTree) -> list[Node]:
    """The root actions, in child order. Leaves that cannot vary (W^2 var = 0) have become constants."""
    assert tree.mean is not None
    assert tree.var is not None
    weight, reward = path_weights(tree)
    children: list[list[Node]] = [[] for _ in range(tree.n_nodes)]
    leaf = tree.n_leaves
    kind, parent = tree.kind.tolist(), tree.parent.tolist()
    actions: list[Node] = []
    for v in range(tree.n_nodes - 1, 0, -1):  # children come after parents
        node: Node
        if kind[v] == schema.LEAF:
            leaf -= 1
            value = float(weight[v] * tree.mean[leaf])
            sure = weight[v] * math.sqrt(tree.var[leaf]) == 0.0
            node = Constant(value) if sure else Normal(value, [leaf])
        elif kind[v] == schema.CHANCE:
            node = _sum(children[v][::-1])
        else:
            node = _max(children[v][::-1])
        children[v] = []
        node.shift += float(reward[v])
        if parent[v] == 0:
            actions.append(node)
        else:
            children[parent[v]].append(node)
    return actions[::-1]


def _max(children: Sequence[Node]) -> Node:
    floor = -math.inf
    members: list[Normal | Sum] = []
    for child in children:
        if isinstance(child, Constant):
            floor = max(floor, child.shift)
        elif isinstance(child, Max):
            floor = max(floor, child.shift + child.floor)
            for member in child.members:
                member.shift += child.shift
            members.extend(child.members)
        else:
            members.append(child)
    if not members:
        return Constant(floor)
    if len(members) == 1 and floor == -math.inf:
        return members[0]
    center = max(floor, *(member.shift for member in members))
    for member in members:
        member.shift -= center
    return Max(center, floor - center, members)


def _sum(children: Sequence[Node]) -> Node:
    shift = math.fsum(child.shift for child in children)
    leaves: list[int] = []
    maxima: list[Max] = []
    for child in children:
        if isinstance(child, (Normal, Sum)):
            leaves.extend(child.leaves)
        if isinstance(child, Max):
            child.shift = 0.0
            maxima.append(child)
        elif isinstance(child, Sum):
            maxima.extend(child.maxima)
    if not maxima:
        return Normal(shift, leaves) if leaves else Constant(shift)
    if len(maxima) == 1 and not leaves:
        return Max(shift, maxima[0].floor, maxima[0].members)
    return Sum(shift, leaves, maxima)
