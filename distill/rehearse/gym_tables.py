"""Gymnasium's tabular environments as simulators with their exact model."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import gymnasium
import numpy as np

from distill.errors import InputError
from distill.rehearse.optimum import Optimum, solve
from distill.rehearse.simulator import Action, Outcome, State

__all__ = ["ENVIRONMENTS", "GymTable"]

# name -> (Gymnasium id, its arguments). All are public and tabular.
ENVIRONMENTS: dict[str, tuple[str, dict[str, Any]]] = {
    "taxi": ("Taxi-v4", {}),
    "cliff_walking": ("CliffWalking-v1", {}),
    "cliff_walking_slippery": ("CliffWalking-v1", {"is_slippery": True}),
    "frozen_lake_4x4": ("FrozenLake-v1", {"map_name": "4x4", "is_slippery": True}),
    "frozen_lake_8x8": ("FrozenLake-v1", {"map_name": "8x8", "is_slippery": True}),
}

END = -1  # every transition that terminates leads here: some tables let a finished state go on


class GymTable:
    """A Gymnasium environment with a table `P`, as a Modelled and Advised simulator.

    States are the environment's whole numbers, and -1 once the episode is over. Time limits of
    wrappers do not apply. `skill` is the share of rollout steps that follow the optimal policy, found
    by exact dynamic programming; the rest are uniformly random. It stands in for the hand-written
    heuristic that an agent would bring; 0 plays at random.

    >>> cliff = GymTable("cliff_walking")
    >>> cliff.outcomes(36, 1)  # from the start straight over the cliff
    [Outcome(prob=1.0, state=36, reward=-100.0)]
    """

    def __init__(self, name: str, *, discount: float = 1.0, skill: float = 0.5) -> None:
        if name not in ENVIRONMENTS:
            raise InputError("simulator", f"must be one of {', '.join(ENVIRONMENTS)}", name)
        if not 0 < discount <= 1:
            raise InputError("discount", "must be above 0 and at most 1", discount)
        if not 0 <= skill <= 1:
            raise InputError("skill", "must be from 0 to 1", skill)
        self.name = name
        self.discount = discount
        self.skill = skill
        gym_id, arguments = ENVIRONMENTS[name]
        env: Any = gymnasium.make(gym_id, **arguments).unwrapped
        self._actions = tuple(range(int(env.action_space.n)))
        self._table = {
            (int(s), int(a)): _merged(ways)
            for s, per_action in env.P.items()
            for a, ways in per_action.items()
        }
        odds = np.asarray(env.initial_state_distrib, dtype=np.float64)
        self._starts = np.flatnonzero(odds).tolist()
        self._start_edges = np.cumsum(odds[odds > 0] / odds.sum())
        env.close()
        self._optimum: Optimum | None = None

    @property
    def starts(self) -> list[State]:
        """Every state in which an episode can begin."""
        return list(self._starts)

    def optimum(self) -> Optimum:
        """The exact optimum of every state that the table knows; computed once."""
        if self._optimum is None:
            self._optimum = solve(self, dict.fromkeys(s for s, _ in self._table))
        return self._optimum

    def start(self, rng: np.random.Generator) -> State:
        """A start state, by the environment's own distribution."""
        at = int(np.searchsorted(self._start_edges, rng.random(), side="right"))
        start: State = self._starts[min(at, len(self._starts) - 1)]
        return start

    def actions(self, state: State) -> Sequence[Action]:  # noqa: ARG002, the protocol asks for it
        """The same actions everywhere."""
        return self._actions

    def is_terminal(self, state: State) -> bool:
        """Whether the episode is over."""
        return state == END

    def outcomes(self, state: State, action: Action) -> list[Outcome]:
        """The table's row, equal ends merged."""
        return self._table[state, action]  # type: ignore[index]

    def step(self, state: State, action: Action, rng: np.random.Generator) -> tuple[State, float]:
        """One transition drawn from the table's row."""
        ways = self._table[state, action]  # type: ignore[index]
        if len(ways) == 1:
            return ways[0].state, ways[0].reward
        u = rng.random()
        for way in ways[:-1]:
            u -= way.prob
            if u < 0:
                return way.state, way.reward
        return ways[-1].state, ways[-1].reward

    def advise(self, state: State, rng: np.random.Generator) -> Action:
        """The optimal action with probability `skill`, else any action."""
        if self.skill > 0 and rng.random() < self.skill:
            return self.optimum().policy[state]
        return self._actions[int(rng.random() * len(self._actions))]


def _merged(ways: Sequence[tuple[float, int, float, bool]]) -> list[Outcome]:
    odds: dict[tuple[int, float], float] = {}
    for prob, state, reward, terminated in ways:
        end = (END if terminated else int(state), float(reward))
        odds[end] = odds.get(end, 0.0) + float(prob)
    return [Outcome(prob, state, reward) for (state, reward), prob in odds.items() if prob > 0]
