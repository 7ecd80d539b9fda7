"""Decisions with a known optimum: what a rehearsal lets policies search, and judges them by."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from itertools import product
from typing import Protocol

import numpy as np

from distill import schema
from distill.errors import InputError, RefusedError
from distill.rehearse.optimum import solve
from distill.rehearse.search import Prior, Search, Settings, estimate_prior
from distill.rehearse.simulator import Modelled, State
from distill.tree import BeliefTree, Floats

__all__ = ["Draw", "Problem", "SimulatorProblem", "TreeProblem", "action_values", "grid"]

_MOST_TRIES = 1000  # states looked at for one where the choice matters


@dataclass(frozen=True, eq=False)
class Draw:
    """One decision to search. The same seed gives every policy the same decision and the same luck.

    tree : beliefs before the first rollout.
    roll : leaf -> one return, in value units (for win/loss leaves 1 or 0). The j-th rollout at a leaf
        returns the same number whatever happened before it elsewhere.
    worth : shape (n_actions,), what each root action is truly worth, value units.
    """

    tree: BeliefTree
    roll: Callable[[int], float]
    worth: Floats

    def regret(self, action: int) -> float:
        """What acting so loses against the best root action, value units."""
        return float(self.worth.max() - self.worth[action])


class Problem(Protocol):
    """A distribution over decisions."""

    @property
    def name(self) -> str:
        """Stands in tables and files."""

    def draw(self, seed: int) -> Draw:
        """The decision of one seed."""


def action_values(tree: BeliefTree, leaf_values: Floats) -> Floats:
    """Root action values when leaf values are as given (shape (n_leaves,)); shape (n_actions,).

    >>> from distill.record import from_record
    >>> t = from_record({"format": "belief-tree/1", "parent": [-1, 0, 0],
    ...     "kind": ["decision", "leaf", "leaf"], "reward": [0, 1, 0],
    ...     "mean": [None, 0, 0], "var": [None, 1, 1], "noise_var": [None, 1, 1]})
    >>> action_values(t, np.array([2.0, 2.5]))
    array([3. , 2.5])
    """
    value = np.where(tree.kind == schema.DECISION, -np.inf, 0.0)
    value[tree.leaf_nodes] = leaf_values
    parent, decision = tree.parent.tolist(), (tree.kind == schema.DECISION).tolist()
    for v in range(tree.n_nodes - 1, 0, -1):
        q = tree.reward[v] + tree.discount[v] * value[v]
        p = parent[v]
        value[p] = max(value[p], q) if decision[p] else value[p] + tree.prob[v] * q
    actions = tree.action_nodes
    return np.asarray(tree.reward[actions] + tree.discount[actions] * value[actions])


@dataclass(frozen=True)
class TreeProblem:
    """Regular trees whose leaf values are drawn from the very prior that the search believes in.

    actions : at the root; each leads to `branching` ** (depth - 1) leaves. chance : every second level
    below the root is a chance node with Dirichlet(1) odds. Leaves are N(0, prior_var) with rollout
    noise `noise_var`, or, where `noise_var` is None, win/loss with a uniform prior on [0, 1].
    """

    actions: int
    branching: int = 1
    depth: int = 1
    noise_var: float | None = 1.0
    prior_var: float = 1.0
    chance: bool = False

    def __post_init__(self) -> None:
        for name in ("actions", "branching", "depth"):
            if getattr(self, name) < 1:
                raise InputError(name, "must be at least 1", getattr(self, name))
        for name in ("noise_var", "prior_var"):
            value = getattr(self, name)
            if value is not None and not value > 0:
                raise InputError(name, "must be above 0", value)

    @property
    def name(self) -> str:
        """Shape, noise and prior in one word."""
        kind = "winloss" if self.noise_var is None else f"noise{self.noise_var:g}"
        prior = "" if self.prior_var == 1 else f"-prior{self.prior_var:g}"
        shape = f"{self.actions}x{self.branching}^{self.depth - 1}"
        return f"tree-{shape}-{kind}{prior}{'-chance' if self.chance else ''}"

    def draw(self, seed: int) -> Draw:
        """A tree with hidden leaf values; rollouts add noise to them."""
        shape_rng, truth_rng, luck = (np.random.default_rng(s) for s in np.random.SeedSequence(seed).spawn(3))
        tree = self._tree(shape_rng)
        n = tree.n_leaves
        seeds = luck.integers(2**63, size=n)
        streams: dict[int, np.random.Generator] = {}

        def stream(leaf: int) -> np.random.Generator:
            if leaf not in streams:
                streams[leaf] = np.random.default_rng(seeds[leaf])
            return streams[leaf]

        if self.noise_var is None:
            odds = truth_rng.random(n)
            return Draw(tree, lambda i: float(stream(i).random() < odds[i]), action_values(tree, odds))
        truth = np.sqrt(self.prior_var) * truth_rng.standard_normal(n)
        sd = float(np.sqrt(self.noise_var))
        return Draw(
            tree,
            lambda i: float(truth[i] + sd * stream(i).standard_normal()),
            action_values(tree, truth),
        )

    def _tree(self, rng: np.random.Generator) -> BeliefTree:
        parent, kind, prob = [-1], [schema.DECISION], [1.0]
        level = [0]
        for step in range(self.depth):
            below = []
            for node in level:
                children = self.actions if step == 0 else self.branching
                odds = rng.dirichlet(np.ones(children)) if kind[node] == schema.CHANCE else np.ones(children)
                inner = schema.CHANCE if self.chance and step % 2 == 0 else schema.DECISION
                for c in range(children):
                    below.append(len(parent))
                    parent.append(node)
                    kind.append(inner if step < self.depth - 1 else schema.LEAF)
                    prob.append(float(odds[c]))
            level = below
        n, leaves = len(parent), len(level)
        edges = (np.array(parent), np.array(kind, dtype=np.int8), np.zeros(n), np.ones(n), np.array(prob))
        ones, zeros = np.ones(leaves), np.zeros(leaves)
        if self.noise_var is None:
            return BeliefTree(
                *edges, alpha=ones, beta=ones.copy(), low=zeros, high=ones.copy(), count=zeros.copy()
            )
        return BeliefTree(
            *edges, mean=zeros, var=self.prior_var * ones, noise_var=self.noise_var * ones, count=zeros.copy()
        )


def grid() -> list[TreeProblem]:
    """The synthetic grid: branching, depth, noise and chance, Gaussian and win/loss."""
    shapes = [(2, 8, 2), (4, 4, 2), (6, 2, 2), (3, 3, 3)]
    noises = [1.0, 4.0, 16.0, None]
    flat = [TreeProblem(a, b, d, noise) for (a, b, d), noise in product(shapes, noises)]
    chancy = [
        TreeProblem(a, b, d, noise, chance=True) for (a, b, d), noise in product([(4, 3, 3)], [4.0, None])
    ]
    return [*flat, *chancy]


@dataclass(eq=False)
class SimulatorProblem:
    """States of a simulator with an exact model; regret is against the exact optimum.

    States are met by random play; those where the best and the worst action differ by less than
    `least_gap` (value units) are passed over, since there is nothing to decide. `name` defaults to
    the simulator's. The prior comes from pilot rollouts on seeds that no draw uses.

    The optimum is that of the whole problem, while leaves are valued by rollouts of bounded length
    under the simulator's own advice: no policy can be expected to reach regret 0.
    """

    simulator: Modelled
    settings: Settings
    name: str = ""
    least_gap: float = 1e-6
    max_states: int = 200_000
    _prior: Prior | None = None
    _worth: dict[State, Mapping[State, Floats]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self.name = self.name or self.simulator.name

    @property
    def prior(self) -> Prior:
        """Empirical Bayes from pilot rollouts; computed once."""
        if self._prior is None:
            pilot = np.random.default_rng(np.random.SeedSequence(0, spawn_key=(1,)))
            self._prior = estimate_prior(self.simulator, self.settings, pilot, trees=100)
        return self._prior

    def draw(self, seed: int) -> Draw:
        """A state where the choice matters, its look-ahead tree, and rollouts of the simulator."""
        state_rng, tree_rng, luck = (
            np.random.default_rng(s) for s in np.random.SeedSequence(seed, spawn_key=(2,)).spawn(3)
        )
        state, worth = self._decision(state_rng)
        search = Search(self.simulator, state, self.settings, self.prior, tree_rng)
        seeds = luck.integers(2**63, size=search.lookahead.n_leaves)
        streams: dict[int, np.random.Generator] = {}

        def roll(leaf: int) -> float:
            if leaf not in streams:
                streams[leaf] = np.random.default_rng(seeds[leaf])
            return search.lookahead.rollout(self.simulator, leaf, streams[leaf], self.settings.length)

        return Draw(search.tree(), roll, worth)

    def _decision(self, rng: np.random.Generator) -> tuple[State, Floats]:
        for tried, (start, state) in enumerate(self._states(rng)):
            if tried == _MOST_TRIES:
                break
            worth = self._worth_of(start, state)
            if np.ptp(worth) >= self.least_gap:
                return state, worth
        raise RefusedError(f"{self.name}: no state of {_MOST_TRIES} where the choice matters")

    def _states(self, rng: np.random.Generator) -> Iterator[tuple[State, State]]:
        """(start of the episode, state): after a random number of random steps, over and over."""
        while True:
            start = state = self.simulator.start(rng)
            for _ in range(int(rng.integers(20))):
                choices: Sequence[int] = self.simulator.actions(state)
                after, _ = self.simulator.step(state, choices[int(rng.random() * len(choices))], rng)
                if self.simulator.is_terminal(after):
                    break
                state = after
            yield start, state

    def _worth_of(self, start: State, state: State) -> Floats:
        """Exact action values; a solved start answers for every state that it leads to."""
        for solved in self._worth.values():
            if state in solved:
                return solved[state]
        self._worth[start] = solve(self.simulator, [start], max_states=self.max_states).action_values
        return self._worth[start][state]
