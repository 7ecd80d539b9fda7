"""The tree that a search looks at: everything that can happen from the present state, to a fixed depth."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from distill import schema
from distill.errors import InputError, RefusedError
from distill.rehearse.simulator import Action, Outcome, Simulator, State, outcomes_of, rollout
from distill.tree import Floats, Ints

__all__ = ["Lookahead", "Settings", "look_ahead", "plan_ahead"]


@dataclass(frozen=True, eq=False)
class Lookahead:
    """A tree without beliefs. Node columns are those of `BeliefTree`; per leaf, in node order:

    starts : the state in which a rollout at the leaf begins.
    plans : the actions that it takes first.
    sure : shape (n_leaves,), whether the leaf is terminal: its value is known to be 0.
    actions : the root actions in child order.
    """

    parent: Ints
    kind: NDArray[np.int8]
    reward: Floats
    discount: Floats
    prob: Floats
    starts: tuple[State, ...]
    plans: tuple[tuple[Action, ...], ...]
    sure: NDArray[np.bool_]
    actions: tuple[Action, ...]

    @property
    def n_leaves(self) -> int:
        """Number of leaves."""
        return len(self.starts)

    def rollout(self, simulator: Simulator, leaf: int, rng: np.random.Generator, length: int) -> float:
        """One sample of the leaf's value: the return of a rollout of bounded length, value units."""
        return rollout(simulator, self.starts[leaf], rng, length=length, plan=self.plans[leaf])


@dataclass(eq=False)
class _Node:
    """A node while the tree grows; it begins as a leaf.

    `anchor` is the node from which a plan without chance leads here; the plan collects `offset`, and
    what follows counts `weight`, both in value units at the anchor.
    """

    state: State
    reward: float = 0.0
    discount: float = 1.0
    prob: float = 1.0
    kind: int = schema.LEAF
    children: list[_Node] = field(default_factory=list)
    plan: tuple[Action, ...] = ()
    sure: bool = False
    parent: _Node | None = None
    anchor: _Node | None = None
    offset: float = 0.0
    weight: float = 1.0

    def add(self, child: _Node) -> _Node:
        child.parent = self
        self.children.append(child)
        return child


def look_ahead(
    simulator: Simulator,
    state: State,
    depth: int,
    rng: np.random.Generator,
    *,
    samples: int = 1,
    max_leaves: int = 4096,
) -> Lookahead:
    """Decision and chance nodes to `depth` steps; leaves are states, valued by rollouts from there.

    An action with one possible outcome is an edge; one with several is an edge to a chance node. Two
    plans without chance that lead from the same root action (or from the same outcome of a chance
    node) to the same state after the same number of steps are worth the same from there on, so only
    the one that collects more is kept: that changes no root action's value. A state that two root
    actions share stays two leaves, each with rollouts of its own.

    samples : steps drawn per action where the simulator has no model. Raises InputError for a depth
    below 1 or a terminal state, RefusedError where the tree would exceed `max_leaves`.
    """
    root = _root(simulator, state, depth)
    frontier = [root]
    for _ in range(depth):
        best: dict[tuple[_Node, State], _Node] = {}
        grown: list[_Node] = []
        for node in frontier:
            node.kind = schema.DECISION
            for action in simulator.actions(node.state):
                ways = outcomes_of(simulator, node.state, action, rng, samples)
                if len(ways) == 1:
                    _extend(node, ways[0], simulator.discount, best)
                else:
                    chance = node.add(_Node(None, kind=schema.CHANCE))
                    grown += [
                        chance.add(_Node(way.state, way.reward, simulator.discount, way.prob)) for way in ways
                    ]
        grown += best.values()
        if len(grown) > max_leaves:
            raise RefusedError(
                f"{simulator.name}: a look-ahead of depth {depth} has over {max_leaves} leaves"
            )
        for node in grown:
            node.anchor = node.anchor or node
            node.sure = simulator.is_terminal(node.state)
        frontier = [node for node in grown if not node.sure]
    return _finish(root, simulator.actions(state))


def _extend(node: _Node, way: Outcome, discount: float, best: dict[tuple[_Node, State], _Node]) -> None:
    """Add the child of a sure step, unless a plan from the same anchor to the same state beats it."""
    child = _Node(way.state, way.reward, discount)
    if node.parent is None:  # a root action: rivals of others are none of its business
        best[child, child.state] = node.add(child)
        return
    assert node.anchor is not None
    child.anchor = node.anchor
    child.offset = node.offset + node.weight * way.reward
    child.weight = node.weight * discount
    rival = best.get((child.anchor, child.state))
    if rival is not None:
        if child.offset <= rival.offset:
            return
        assert rival.parent is not None
        rival.parent.children.remove(rival)
    best[child.anchor, child.state] = node.add(child)


def plan_ahead(
    simulator: Simulator, state: State, depth: int, rng: np.random.Generator, *, max_leaves: int = 4096
) -> Lookahead:
    """Plans of `depth` actions as leaves, whatever chance does: decision nodes only.

    A leaf is a sequence of actions from `state`; its rollouts play it from there, so a leaf's value
    holds all rewards and the edges none (open-loop planning, Bubeck and Munos 2010). Such plans do not
    react to what happens on the way; their values lie below the true ones where reacting pays. What is
    possible after an action is read off one sampled step. Errors as for `look_ahead`.
    """
    root = _root(simulator, state, depth)
    frontier = [root]
    for _ in range(depth):
        grown = []
        for node in frontier:
            if simulator.is_terminal(node.state):
                continue
            node.kind = schema.DECISION
            for action in simulator.actions(node.state):
                after, _ = simulator.step(node.state, action, rng)
                grown.append(node.add(_Node(after, plan=(*node.plan, action))))
        if len(grown) > max_leaves:
            raise RefusedError(f"{simulator.name}: plans of {depth} actions give over {max_leaves} leaves")
        frontier = grown
    tree = _finish(root, simulator.actions(state))
    return Lookahead(**{**vars(tree), "starts": (state,) * tree.n_leaves})


@dataclass(frozen=True)
class Settings:
    """How a search looks ahead.

    depth : steps of look-ahead. length : most steps of a rollout beyond its leaf.
    plans : leaves are plans of actions (`plan_ahead`) instead of states (`look_ahead`).
    samples : outcomes drawn per action where the simulator has no model and steps are random.
    opening : (leaves, rollouts each) spent before the search to set this tree's prior mean and noise.
        They are the prior's alone: the search's budget and its beliefs at leaves do not count them.
    win_loss : (low, high) where every rollout returns one of these two numbers: leaves then have
        win/loss beliefs. None: Gaussian ones.

    Raises InputError where one is of another type or range.
    """

    depth: int = 2
    length: int = 30
    plans: bool = False
    samples: int = 1
    opening: tuple[int, int] = (4, 4)
    win_loss: tuple[float, float] | None = None

    def __post_init__(self) -> None:
        for name, least in (("depth", 1), ("length", 0), ("samples", 1)):
            if not _is_whole(value := getattr(self, name), least):
                raise InputError(f"settings: {name}", f"must be a whole number of at least {least}", value)
        if not isinstance(self.plans, bool):
            raise InputError("settings: plans", "must be True or False", self.plans)
        pair = self.opening
        if not isinstance(pair, (tuple, list)) or len(pair) != 2 or not all(_is_whole(x, 0) for x in pair):
            raise InputError("settings: opening", "must be (leaves, rollouts each), whole numbers", pair)
        if self.win_loss is not None and not _rises(self.win_loss):
            raise InputError("win_loss", "must be a low and a higher number", self.win_loss)

    def tree(self, simulator: Simulator, state: State, rng: np.random.Generator) -> Lookahead:
        """The look-ahead tree from a state."""
        if self.plans:
            return plan_ahead(simulator, state, self.depth, rng)
        return look_ahead(simulator, state, self.depth, rng, samples=self.samples)


def _is_whole(x: object, least: int) -> bool:
    return isinstance(x, (int, np.integer)) and not isinstance(x, bool) and bool(x >= least)


def _rises(pair: object) -> bool:
    if not isinstance(pair, (tuple, list)) or len(pair) != 2:
        return False
    low, high = pair
    numbers = all(isinstance(x, (int, float, np.integer, np.floating)) for x in pair)
    return numbers and bool(-np.inf < low < high < np.inf)


def _root(simulator: Simulator, state: State, depth: int) -> _Node:
    if depth < 1:
        raise InputError("depth", "must be at least 1", depth)
    if simulator.is_terminal(state):
        raise InputError(f"{simulator.name}: state", "must not be terminal to be searched", state)
    return _Node(state)


def _finish(root: _Node, actions: object) -> Lookahead:
    """The nodes as flat arrays, parents before children, without those that lost all their children."""
    order: list[_Node] = [root]
    number: dict[_Node, int] = {root: 0}
    alive = _alive(root)
    for node in order:  # grows as it goes: breadth first
        for child in node.children:
            if child in alive:
                number[child] = len(order)
                order.append(child)
    leaves = [node for node in order if node.kind == schema.LEAF]
    return Lookahead(
        parent=np.array([-1 if n.parent is None else number[n.parent] for n in order], dtype=np.int64),
        kind=np.array([n.kind for n in order], dtype=np.int8),
        reward=np.array([n.reward for n in order], dtype=np.float64),
        discount=np.array([n.discount for n in order], dtype=np.float64),
        prob=np.array([n.prob for n in order], dtype=np.float64),
        starts=tuple(n.state for n in leaves),
        plans=tuple(n.plan for n in leaves),
        sure=np.array([n.sure for n in leaves], dtype=bool),
        actions=tuple(actions),  # type: ignore[arg-type]
    )


def _alive(root: _Node) -> set[_Node]:
    """Nodes that have a leaf below them. A root action always has: nothing can beat its own plans."""
    below: list[_Node] = [root]
    for node in below:
        below += node.children
    alive: set[_Node] = set()
    for node in reversed(below):
        if node.kind == schema.LEAF or any(c in alive for c in node.children):
            alive.add(node)
    return alive
