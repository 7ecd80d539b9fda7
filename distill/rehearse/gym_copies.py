"""Any Gymnasium environment with discrete actions as a simulator: states are copies of the environment."""

from __future__ import annotations

import copy
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import gymnasium
import numpy as np

from distill.errors import InputError
from distill.rehearse.simulator import Action, State

__all__ = ["GymCopies", "Snapshot"]

# Stands in every snapshot, so that a copy neither takes a random stream along nor repeats one.
_NO_STREAM = np.random.default_rng(0)


@dataclass(frozen=True, eq=False)
class Snapshot:
    """An environment as it stands, not to be stepped; two snapshots are equal only if they are one."""

    env: Any
    observation: Any
    over: bool

    def __str__(self) -> str:
        return f"{self.observation}"


class GymCopies:
    """A Gymnasium environment without a model, stepped by copying all of its state.

    make : builds the environment, or its registered id. Its randomness must come from the
        environment's own `np_random`, as Gymnasium asks; anything else would not repeat under a seed.
    name : stands in traces and tables; by default the environment's id.

    A subclass may add `advise`, which reads `state.observation`. An episode is over when it terminates or is
    truncated. A step costs a deep copy, tens of microseconds for small environments; a rollout one for all
    its steps. Where steps are random, search plans of actions (`Settings(plans=True)`), or sample outcomes.

    >>> pole = GymCopies("CartPole-v1")
    >>> start = pole.start(np.random.default_rng(0))
    >>> pole.actions(start)
    (0, 1)
    >>> pole.step(start, 1, np.random.default_rng(1))[1]
    1.0
    """

    def __init__(
        self, make: str | Callable[[], gymnasium.Env[Any, Any]], *, discount: float = 1.0, name: str = ""
    ) -> None:
        if not 0 < discount <= 1:
            raise InputError("discount", "must be above 0 and at most 1", discount)
        if isinstance(make, str):
            name = name or make
            try:
                env = gymnasium.make(make, disable_env_checker=True)
            except gymnasium.error.Error as e:
                raise InputError("environment", f"must be one that Gymnasium makes ({e})", make) from None
        else:
            env = make()
        space = env.action_space
        if not isinstance(space, gymnasium.spaces.Discrete):
            raise InputError("action space", "must be discrete", space)
        self.name = name or (env.spec.id if env.spec is not None else type(env.unwrapped).__name__)
        self.discount = discount
        self._env = env
        self._actions = tuple(range(int(space.start), int(space.start) + int(space.n)))

    def start(self, rng: np.random.Generator) -> Snapshot:
        """A fresh episode."""
        env = copy.deepcopy(self._env)
        observation, _ = env.reset(seed=int(rng.integers(2**31)))
        env.unwrapped.np_random = _NO_STREAM
        return Snapshot(env, observation, False)

    def actions(self, state: State) -> tuple[Action, ...]:
        """The same actions everywhere."""
        del state
        return self._actions

    def step(self, state: State, action: Action, rng: np.random.Generator) -> tuple[Snapshot, float]:
        """One step of a copy, which draws from `rng`."""
        return self._step(_copy(state), action, rng)

    @property
    def private_copy(self) -> Callable[[State], Snapshot]:
        """Copies a state for a rollout of its own, which `step_private` may change: one copy for all steps.

        Not there where a subclass has steps of its own.
        """
        if type(self).step is not GymCopies.step:
            raise AttributeError("private_copy")
        return _copy

    def step_private(self, state: State, action: Action, rng: np.random.Generator) -> tuple[Snapshot, float]:
        """As `step`, with the given state used up."""
        assert isinstance(state, Snapshot)
        return self._step(state, action, rng)

    def _step(self, state: Snapshot, action: Action, rng: np.random.Generator) -> tuple[Snapshot, float]:
        env = state.env
        env.unwrapped.np_random = rng
        observation, reward, terminated, truncated, _ = env.step(action)
        env.unwrapped.np_random = _NO_STREAM
        return Snapshot(env, observation, bool(terminated or truncated)), float(reward)

    def is_terminal(self, state: State) -> bool:
        """Whether the episode is over."""
        assert isinstance(state, Snapshot)
        return state.over


def _copy(state: State) -> Snapshot:
    assert isinstance(state, Snapshot)
    return Snapshot(copy.deepcopy(state.env, {id(_NO_STREAM): _NO_STREAM}), state.observation, state.over)
