"""Decisions whose actions' worth is known: what a rehearsal lets policies search, and judges them by."""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from itertools import islice
from pathlib import Path
from typing import Final, NamedTuple, Protocol

import numpy as np

from distill import schema
from distill.errors import InputError, RefusedError
from distill.rehearse.agreement import check_steps, check_steps_are_sure
from distill.rehearse.guarded import check_simulator, guarded
from distill.rehearse.leaf_means import (
    LEAF_ROLLOUTS,
    LeafMeans,
    keep_means,
    kept_means,
    leaf_means,
    worth_error,
)
from distill.rehearse.optimum import solve
from distill.rehearse.priors import OddsPrior, Prior
from distill.rehearse.search import Search, Settings, action_values, prior_of
from distill.rehearse.simulator import Modelled, Simulator, State
from distill.tree import BeliefTree, Floats

__all__ = ["Draw", "Problem", "SimulatorProblem", "TreeProblem"]

_MOST_TRIES = 1000  # states looked at for one where the choice matters
_KEPT = 20  # solved parts of a simulator that are remembered
_FEWEST_LEAF_ROLLOUTS: Final = 100  # from which a standard error is worth its name
_MOST_ESTIMATES: Final = 50  # states whose worth is estimated for one where it tells the actions apart
_TOLD_APART: Final = 3.0  # standard errors between the best and the worst action


@dataclass(frozen=True, eq=False)
class Draw:
    """One decision to search. The same seed gives every policy the same decision and the same luck.

    tree : beliefs before the first rollout.
    roll : leaf -> one return, in value units (for win/loss leaves 1 or 0). The j-th rollout at a leaf
        returns the same number whatever happened before it elsewhere.
    worth : shape (n_actions,), what each root action is truly worth, value units.
    believed : whether `worth` was drawn from the very beliefs of `tree`, so that they tell the odds of
        what a search leaves open.
    leaf_rollouts : at each leaf, from which `worth` was estimated; 0 where it is exact.
    worth_error : standard error of a regret that this estimate leaves, value units; 0 where it is exact.
    """

    tree: BeliefTree
    roll: Callable[[int], float]
    worth: Floats
    believed: bool = False
    leaf_rollouts: int = 0
    worth_error: float = 0.0

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
            return Draw(tree, lambda i: float(stream(i).random() < odds[i]), action_values(tree, odds), True)
        truth = np.sqrt(self.prior_var) * truth_rng.standard_normal(n)
        sd = float(np.sqrt(self.noise_var))
        return Draw(
            tree,
            lambda i: float(truth[i] + sd * stream(i).standard_normal()),
            action_values(tree, truth),
            True,
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


@dataclass(eq=False)
class SimulatorProblem:
    """States of a simulator. Regret is against the exact optimum where it has an exact model; else against
    what unlimited rollouts would choose in the tree that is searched.

    States are met by random play of fewer than `most_steps` steps; those where the best and the worst
    action differ by less than `least_gap` (value units) are passed over, since there is nothing to
    decide. `name` defaults to the simulator's. The prior comes from pilot rollouts on seeds that no draw
    uses.

    The optimum is that of the whole problem, while leaves are valued by rollouts of bounded length
    under the simulator's own advice: no policy can be expected to reach regret 0.

    leaf_rollouts : at each leaf, with luck of their own, from which the worth of actions is estimated before
        the search, once for all policies. None: 4,000 where there is no model, else the model is solved.
        States where the actions differ by less than 3 standard errors of a first estimate, by half as many
        other rollouts, are passed over too.
        Rollouts play by chance or advice from a leaf on, so this regret says nothing of what a better rollout
        policy or a deeper tree would find.
    checked : whether every answer of the simulator is looked at, and its steps against its model.

    Without a model, plans (`Settings(plans=True)`) take any simulator. Trees of states need steps without
    chance, or `samples` of 2 or more: a single sample would pass for the only outcome.

    Raises InputError where the simulator or the settings break a rule, RefusedError where no state with
    anything to decide is found.
    """

    simulator: Simulator
    settings: Settings
    name: str = ""
    least_gap: float = 1e-6
    max_states: int = 200_000
    most_steps: int = 20
    leaf_rollouts: int | None = None
    checked: bool = True
    _prior: Prior | OddsPrior | None = field(default=None, init=False)
    _solved: deque[Mapping[State, Floats]] = field(default_factory=lambda: deque(maxlen=_KEPT), init=False)
    _decisions: dict[int, tuple[State, Floats]] = field(default_factory=dict, init=False)
    _estimated: dict[int, _Estimated] = field(default_factory=dict, init=False)
    _folder: Path | None = field(default=None, init=False)

    def __post_init__(self) -> None:
        check_simulator(self.simulator)
        kind = f"simulator {type(self.simulator).__name__}"
        if not isinstance(self.settings, Settings):
            raise InputError(f"{kind}: settings", "must be a Settings of distill.rehearse", self.settings)
        self.name = self.name or self.simulator.name
        if self.checked:
            self.simulator = guarded(self.simulator)
        if self.leaf_rollouts is None:
            self.leaf_rollouts = 0 if isinstance(self.simulator, Modelled) else LEAF_ROLLOUTS
        elif not isinstance(self.leaf_rollouts, int) or self.leaf_rollouts < _FEWEST_LEAF_ROLLOUTS:
            rule = f"must be a whole number of at least {_FEWEST_LEAF_ROLLOUTS}"
            raise InputError(f"{kind}: leaf_rollouts", rule, self.leaf_rollouts)
        if self.checked and isinstance(self.simulator, Modelled):
            check_steps(self.simulator, kind)
        if not isinstance(self.simulator, Modelled) and not self.settings.plans and self.settings.samples < 2:
            check_steps_are_sure(self.simulator, kind)

    @property
    def prior(self) -> Prior | OddsPrior:
        """Empirical Bayes from pilot rollouts; computed once."""
        if self._prior is None:
            pilot = np.random.default_rng(np.random.SeedSequence(0, spawn_key=(1,)))
            self._prior = prior_of(self.simulator, self.settings, pilot, trees=100)
        return self._prior

    def keep_in(self, folder: Path) -> None:
        """Estimates of worth go to this folder, and are read from there where they are of the same tree."""
        self._folder = folder

    def draw(self, seed: int) -> Draw:
        """A state where the choice matters, its look-ahead tree, and rollouts of the simulator."""
        state_rng, tree_rng, luck = (
            np.random.default_rng(s) for s in np.random.SeedSequence(seed, spawn_key=(2,)).spawn(3)
        )
        error = 0.0
        if self.leaf_rollouts:
            if seed not in self._estimated:
                self._estimated[seed] = self._estimate(seed, state_rng)
            search, worth, error = self._estimated[seed]
        else:
            if seed not in self._decisions:  # every policy asks for it, and to solve is dear
                self._decisions[seed] = self._decision(state_rng)
            state, worth = self._decisions[seed]
            search = Search(self.simulator, state, self.settings, self.prior, tree_rng)
        seeds = luck.integers(2**63, size=search.lookahead.n_leaves)
        streams: dict[int, np.random.Generator] = {}

        def roll(leaf: int) -> float:
            if leaf not in streams:
                streams[leaf] = np.random.default_rng(seeds[leaf])
            return search.rolled(leaf, streams[leaf])

        return Draw(search.tree(), roll, worth, leaf_rollouts=self.leaf_rollouts or 0, worth_error=error)

    def _decision(self, rng: np.random.Generator) -> tuple[State, Floats]:
        for state in islice(self._states(rng), _MOST_TRIES):
            worth = self._worth_of(state)
            if np.ptp(worth) >= self.least_gap:
                return state, worth
        raise RefusedError(f"{self.name}: no state of {_MOST_TRIES} where the choice matters")

    def _estimate(self, seed: int, rng: np.random.Generator) -> _Estimated:
        """The first state met whose actions these many rollouts tell apart, with its tree."""
        assert self.leaf_rollouts
        looked = 0
        for number, state in enumerate(islice(self._states(rng), _MOST_TRIES)):
            if len(self.simulator.actions(state)) < 2:
                continue
            tree_luck, screen_luck, judge_luck = np.random.SeedSequence(seed, spawn_key=(4, number)).spawn(3)
            tree_rng = np.random.default_rng(tree_luck)
            search = Search(self.simulator, state, self.settings, self.prior, tree_rng)
            tree, name = search.tree(), f"{seed}-{number}"
            # Other rollouts than those that judge: a gap that is large by their luck would be taken for one.
            screen = self._means(search, self.leaf_rollouts // 2, screen_luck, f"{name}-screen")
            if np.ptp(screen.worth(tree)) >= max(self.least_gap, _TOLD_APART * worth_error(tree, screen)):
                means = self._means(search, self.leaf_rollouts, judge_luck, name)
                return _Estimated(search, means.worth(tree), worth_error(tree, means))
            looked += 1
            if looked == _MOST_ESTIMATES:
                break
        rule = f"no state of {looked} where {self.leaf_rollouts:,} rollouts a leaf tell the actions apart"
        raise RefusedError(f"{self.name}: {rule}")

    def _means(self, search: Search, rollouts: int, luck: np.random.SeedSequence, name: str) -> LeafMeans:
        """From the folder where it has them, and into it where not."""
        if self._folder is None:
            return leaf_means(search, rollouts, luck)
        path = self._folder / f"{name}.json"
        means = kept_means(path, search, rollouts)
        if means is None:
            means = leaf_means(search, rollouts, luck)
            keep_means(path, search, rollouts, means)
        return means

    def _states(self, rng: np.random.Generator) -> Iterator[State]:
        """States after a random number of random steps from a start, over and over."""
        while True:
            state = self.simulator.start(rng)
            for _ in range(int(rng.integers(self.most_steps))):
                choices: Sequence[int] = self.simulator.actions(state)
                after, _ = self.simulator.step(state, choices[int(rng.random() * len(choices))], rng)
                if self.simulator.is_terminal(after):
                    break
                state = after
            yield state

    def _worth_of(self, state: State) -> Floats:
        """Exact action values; what was solved for one state answers for all that it leads to."""
        for known in self._solved:
            if state in known:
                return known[state]
        assert isinstance(self.simulator, Modelled)
        try:
            solved = solve(self.simulator, [state], max_states=self.max_states)
        except RefusedError as e:
            hint = f"leaf_rollouts={LEAF_ROLLOUTS} tells regret against rollouts, without the optimum"
            raise type(e)(f"{e}; {hint}") from e
        self._solved.append(solved.action_values)
        return self._solved[-1][state]


class _Estimated(NamedTuple):
    """A decision whose worth comes from rollouts at its leaves. The search is never spent on."""

    search: Search
    worth: Floats
    error: float
