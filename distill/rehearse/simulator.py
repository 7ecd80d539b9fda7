"""What a simulator must offer to be searched, and rollouts through it."""

from __future__ import annotations

import math
from collections.abc import Hashable, Sequence
from typing import NamedTuple, Protocol, runtime_checkable

import numpy as np

from distill.errors import InputError

__all__ = [
    "Action", "Advised", "Modelled", "Outcome", "Simulator", "State", "outcomes_of", "rollout",
]  # fmt: skip

State = Hashable
Action = int

_PROB_SUM_SLACK = 1e-9  # the belief tree record's own rule


class Outcome(NamedTuple):
    """One way a step can end: its probability, the next state, the reward in value units."""

    prob: float
    state: State
    reward: float


@runtime_checkable
class Simulator(Protocol):
    """The least a simulator offers. States are hashable values; nothing is changed in place.

    name : stands in traces and tables.
    discount : 0 < discount <= 1, value of a reward one step later.

    A simulator may also offer `outcomes` (see Modelled) and `advise` (see Advised). `guarded.check_simulator`
    says whether an object is one.
    """

    name: str
    discount: float

    def start(self, rng: np.random.Generator) -> State:
        """A state in which an episode begins."""

    def actions(self, state: State) -> Sequence[Action]:
        """What can be done in a state that is not terminal; at least one, in a fixed order."""

    def step(self, state: State, action: Action, rng: np.random.Generator) -> tuple[State, float]:
        """Next state and reward of one action; all randomness comes from `rng`."""

    def is_terminal(self, state: State) -> bool:
        """Whether the episode is over; a terminal state is worth 0."""


@runtime_checkable
class Modelled(Simulator, Protocol):
    """A simulator that knows its exact model."""

    def outcomes(self, state: State, action: Action) -> Sequence[Outcome]:
        """Every way the action can end, each (state, reward) once; probabilities sum to 1."""


@runtime_checkable
class Advised(Protocol):
    """A simulator with a default policy for rollouts; without one they play uniformly at random."""

    def advise(self, state: State, rng: np.random.Generator) -> Action:
        """The action a rollout takes here; may be random."""


def outcomes_of(
    simulator: Simulator, state: State, action: Action, rng: np.random.Generator, samples: int = 1
) -> list[Outcome]:
    """The ways an action can end: from the exact model, or `samples` steps with their frequencies.

    Equal (state, reward) pairs are merged and impossible ones dropped. Sampled outcomes are those of
    sparse sampling (Kearns, Mansour and Ng 2002); one sample is exact where steps are deterministic.
    Raises InputError where a model's probabilities are negative or do not sum to 1 within 1e-9.
    """
    if isinstance(simulator, Modelled):
        found = simulator.outcomes(state, action)
    else:
        found = [Outcome(1 / samples, *simulator.step(state, action, rng)) for _ in range(samples)]
    merged: dict[tuple[State, float], float] = {}
    for prob, after, reward in found:
        if not prob >= 0:
            raise InputError(f"{simulator.name}: outcomes of action {action}", "prob must be >= 0", prob)
        if prob > 0:
            merged[after, reward] = merged.get((after, reward), 0.0) + prob
    total = math.fsum(merged.values())
    if not abs(total - 1) <= _PROB_SUM_SLACK:
        raise InputError(f"{simulator.name}: outcomes of action {action}", "prob must sum to 1", total)
    return [Outcome(prob, after, reward) for (after, reward), prob in merged.items()]


def rollout(
    simulator: Simulator,
    state: State,
    rng: np.random.Generator,
    *,
    length: int,
    plan: Sequence[Action] = (),
) -> float:
    """Discounted return of one simulated future, in value units.

    The actions of `plan` come first, as far as they are possible; then the simulator's own advice, or
    uniformly random actions. Ends at a terminal state or after `length` steps beyond the plan. A simulator
    that copies its states may offer `private_copy` and `step_private`, which change one copy all the way.
    """
    step = simulator.step
    if (private := getattr(simulator, "private_copy", None)) is not None:
        state, step = private(state), simulator.step_private  # type: ignore[attr-defined]
    total, weight = 0.0, 1.0
    for action in plan:
        if simulator.is_terminal(state):
            return total
        if action not in simulator.actions(state):
            break
        state, reward = step(state, action, rng)
        total += weight * reward
        weight *= simulator.discount
    advise = simulator.advise if isinstance(simulator, Advised) else None
    for _ in range(length):
        if simulator.is_terminal(state):
            break
        if advise is not None:
            action = advise(state, rng)
        else:
            choices = simulator.actions(state)
            action = choices[int(rng.random() * len(choices))]
        state, reward = step(state, action, rng)
        total += weight * reward
        weight *= simulator.discount
    return total
