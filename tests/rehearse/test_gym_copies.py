"""Environments without a model: copies must neither touch their origin nor share luck."""

from __future__ import annotations

import gymnasium
import numpy as np
import pytest
from ladder import STANDARD_ERRORS

from distill.errors import InputError
from distill.rehearse.gym_copies import GymCopies
from distill.rehearse.gym_tables import GymTable
from distill.rehearse.record import record_traces
from distill.rehearse.search import Settings
from distill.traces import read_trees


@pytest.mark.parametrize("env", ["CartPole-v1", "Blackjack-v1", "FrozenLake-v1"])
def test_steps_repeat_and_leave_their_state_alone(env):
    world = GymCopies(env)
    state = world.start(np.random.default_rng(3))

    def play(seed):
        rng, at, out = np.random.default_rng(seed), state, []
        for _ in range(8):
            if world.is_terminal(at):
                break
            at, reward = world.step(at, world.actions(at)[int(rng.integers(2))], rng)
            out.append((str(at), reward))
        return out

    first = play(1)
    assert play(1) == first
    assert len({str(play(seed)) for seed in range(30)}) > 1


def test_two_steps_from_one_state_have_luck_of_their_own():
    lake = GymCopies("FrozenLake-v1")
    rng = np.random.default_rng(0)
    start = lake.start(rng)
    ends = [lake.step(start, 1, rng)[0].observation for _ in range(1000)]
    model = {w.state: w.prob for w in GymTable("frozen_lake_4x4").outcomes(0, 1)}
    for end, odds in model.items():
        share = np.mean(np.array(ends) == end)
        assert abs(share - odds) < STANDARD_ERRORS * np.sqrt(odds * (1 - odds) / 1000)
    assert set(ends) == set(model)


def test_time_limits_end_an_episode():
    world = GymCopies(lambda: gymnasium.make("CliffWalking-v1", max_episode_steps=3), name="short")
    rng = np.random.default_rng(0)
    state = world.start(rng)
    for over in (False, False, True):
        state, _ = world.step(state, 0, rng)
        assert world.is_terminal(state) is over


def test_the_search_records_traces_of_an_environment_without_model(tmp_path):
    for n in "ab":
        record_traces(
            GymCopies("CartPole-v1", discount=0.95),
            tmp_path / f"{n}.jsonl",
            decisions=2,
            rollouts=8,
            settings=Settings(depth=2, length=15),
        )
    trees = [tree for _, tree in read_trees(tmp_path / "a.jsonl")]
    assert (tmp_path / "a.jsonl").read_bytes() == (tmp_path / "b.jsonl").read_bytes()
    assert {tree.n_leaves for tree in trees} == {4}
    assert trees[0].extra["environment"] == "CartPole-v1"
    assert trees[0].reward[1:] == pytest.approx(1.0)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"make": "Pendulum-v1"}, "action space: must be discrete"),
        ({"make": "NoSuchThing-v0"}, "environment: must be one that Gymnasium makes"),
        ({"make": "CartPole-v1", "discount": 0.0}, "discount: must be above 0"),
    ],
)
def test_bad_arguments_name_the_rule(arguments, message):
    with pytest.raises(InputError, match=message):
        GymCopies(**arguments)
