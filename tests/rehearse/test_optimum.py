"""Exact optima against published values, an independent search, and brute enumeration."""

from __future__ import annotations

from collections import deque

import gymnasium
import numpy as np
import pytest
from ladder import CLOSED_FORM, PUBLISHED

from distill.errors import RefusedError
from distill.rehearse.gym_tables import END, ENVIRONMENTS, GymTable
from distill.rehearse.optimum import solve
from distill.rehearse.simulator import Outcome


def start_value(name: str, discount: float) -> float:
    table = GymTable(name, discount=discount)
    values = table.optimum().values
    return float(np.mean([values[s] for s in table.starts]))


def test_cliff_walking_takes_thirteen_steps():
    # Sutton and Barto, Reinforcement Learning (2018), example 6.6: up, eleven to the right, down; -1 each.
    assert start_value("cliff_walking", 1.0) == pytest.approx(-13, rel=CLOSED_FORM)


@pytest.mark.parametrize(
    ("name", "discount", "published", "place"),
    [
        # Quoted from memory: figures that circulate in many tutorials on these environments.
        ("frozen_lake_4x4", 0.99, 0.5420, 1e-4),
        ("frozen_lake_4x4", 1.0, 0.8235, 1e-4),
        ("taxi", 1.0, 7.93, 1e-2),
    ],
)
def test_values_that_circulate(name, discount, published, place):
    assert abs(start_value(name, discount) - published) <= PUBLISHED * place


def test_frozen_lake_is_fourteen_seventeenths():
    # The smallest fraction that rounds to the 0.8235 above; equality to rounding is no accident.
    assert start_value("frozen_lake_4x4", 1.0) == pytest.approx(14 / 17, rel=CLOSED_FORM)


def test_taxi_against_breadth_first_search():
    """Without discount a ride is worth 21 less one a step; steps by search over the environment itself."""
    env = gymnasium.make("Taxi-v4").unwrapped
    values = GymTable("taxi").optimum().values
    for start in range(0, 500, 7):
        if env.initial_state_distrib[start] == 0:
            continue
        steps, queue = {start: 0}, deque([start])
        ride = None
        while ride is None:
            state = queue.popleft()
            for action in range(6):
                ((_, after, reward, done),) = env.P[state][action]
                if done:
                    ride = steps[state] + 1
                elif reward == -1 and after not in steps:
                    steps[after] = steps[state] + 1
                    queue.append(after)
        assert values[start] == pytest.approx(21 - ride, rel=CLOSED_FORM)


@pytest.mark.parametrize("name", ENVIRONMENTS)
@pytest.mark.parametrize("discount", [0.9, 1.0])
def test_values_satisfy_bellmans_equation(name, discount):
    """The equation written out over Gymnasium's own table, not over ours."""
    gym_id, arguments = ENVIRONMENTS[name]
    env = gymnasium.make(gym_id, **arguments).unwrapped
    optimum = GymTable(name, discount=discount).optimum()
    for state, per_action in env.P.items():
        q = [
            sum(
                p * (r + discount * (0.0 if done else optimum.values[int(after)]))
                for p, after, r, done in ways
            )
            for ways in per_action.values()
        ]
        assert optimum.values[int(state)] == pytest.approx(max(q), rel=CLOSED_FORM, abs=CLOSED_FORM)
        assert q[optimum.policy[int(state)]] == pytest.approx(max(q), rel=CLOSED_FORM, abs=CLOSED_FORM)
        assert optimum.action_values[int(state)] == pytest.approx(q, rel=CLOSED_FORM, abs=CLOSED_FORM)
    assert optimum.values.get(END, 0.0) == 0.0


class Loop:
    """Two states that lead to each other and nowhere else."""

    name = "loop"

    def __init__(self, discount: float) -> None:
        self.discount = discount

    def start(self, _rng):
        return 0

    def actions(self, _state):
        return (0,)

    def step(self, state, _action, _rng):
        return 1 - state, 1.0

    def is_terminal(self, _state):
        return False

    def outcomes(self, state, _action):
        return [Outcome(1.0, 1 - state, 1.0)]


def test_endless_play_is_refused_without_discount():
    assert solve(Loop(0.5), [0]).values == pytest.approx({0: 2.0, 1: 2.0}, rel=CLOSED_FORM)
    with pytest.raises(RefusedError, match="loop: some play never ends"):
        solve(Loop(1.0), [0])


def test_too_many_states_are_refused():
    with pytest.raises(RefusedError, match="more than 100 reachable states"):
        solve(GymTable("taxi"), GymTable("taxi").starts[:1], max_states=100)
