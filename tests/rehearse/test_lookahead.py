"""Look-ahead trees against exact optima: sure values at the leaves must back up to the optimum."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, STANDARD_ERRORS

from distill import schema
from distill.errors import InputError, RefusedError
from distill.record import from_record, to_record
from distill.rehearse.cold_store import ColdStore
from distill.rehearse.gym_tables import ENVIRONMENTS, GymTable
from distill.rehearse.lookahead import Lookahead, look_ahead, plan_ahead
from distill.rehearse.optimum import solve
from distill.rehearse.simulator import Outcome, rollout
from distill.tree import BeliefTree


def backed_up(tree: Lookahead, leaf_values: np.ndarray) -> list[float]:
    """Root action values, by recursion over children."""
    leaf_of = {int(v): i for i, v in enumerate(np.flatnonzero(tree.kind == schema.LEAF))}
    children = [np.flatnonzero(tree.parent == v) for v in range(len(tree.parent))]

    def value(v):
        if v in leaf_of:
            return leaf_values[leaf_of[v]]
        q = [tree.prob[c] * (tree.reward[c] + tree.discount[c] * value(c)) for c in children[v]]
        return max(q) if tree.kind[v] == schema.DECISION else sum(q)

    return [tree.reward[c] + tree.discount[c] * value(c) for c in children[0]]


@pytest.mark.parametrize("name", ENVIRONMENTS)
@pytest.mark.parametrize("depth", [1, 2])
def test_exact_leaves_give_exact_action_values(name, depth):
    table = GymTable(name, discount=0.97)
    optimum = table.optimum()
    rng = np.random.default_rng(0)
    for state in list(optimum.action_values)[::13]:
        tree = look_ahead(table, state, depth, rng)
        values = np.array([optimum.values.get(s, 0.0) for s in tree.starts])
        assert backed_up(tree, values) == pytest.approx(optimum.action_values[state], rel=CLOSED_FORM)
        assert np.all(values[tree.sure] == 0)


class RandomGraph:
    """A random small world, sure or not, with states that many paths share."""

    name = "graph"

    def __init__(self, seed: int, ways: int) -> None:
        rng = np.random.default_rng(seed)
        self.discount = float(rng.uniform(0.5, 1))
        n, actions = 8, int(rng.integers(1, 4))
        self.ends = set(rng.permutation(n)[:2].tolist()) - {0}
        self.table = {
            (s, a): [
                Outcome(float(p), int(rng.integers(n)), float(rng.normal()))
                for p in rng.dirichlet([1] * ways)
            ]
            for s in range(n)
            for a in range(actions)
        }
        self.n_actions = actions

    def start(self, _rng):
        return 0

    def actions(self, _state):
        return range(self.n_actions)

    def outcomes(self, state, action):
        return self.table[state, action]

    def step(self, state, action, _rng):
        return self.table[state, action][0][1:]

    def is_terminal(self, state):
        return state in self.ends


@settings(deadline=None, derandomize=True, max_examples=60)
@given(seed=st.integers(0, 10**6), ways=st.integers(1, 2), depth=st.integers(1, 4))
def test_merged_plans_change_no_root_action(seed, ways, depth):
    """Against the unmerged tree, by plain recursion over the model, with random leaf values a state."""
    world = RandomGraph(seed, ways)
    worth = np.random.default_rng(seed).normal(size=8)
    worth[list(world.ends)] = 0.0

    def q(state, action, left):
        return sum(
            p * (r + world.discount * v(after, left - 1)) for p, after, r in world.outcomes(state, action)
        )

    def v(state, left):
        if left == 0 or world.is_terminal(state):
            return worth[state]
        return max(q(state, a, left) for a in world.actions(state))

    tree = look_ahead(world, 0, depth, np.random.default_rng(0))
    expected = [q(0, a, depth) for a in world.actions(0)]
    assert backed_up(tree, worth[list(tree.starts)]) == pytest.approx(
        expected, rel=CLOSED_FORM, abs=CLOSED_FORM
    )
    if ways == 1:
        assert tree.n_leaves <= world.n_actions * 8 * depth


def test_a_tree_is_a_valid_record():
    tree = look_ahead(GymTable("frozen_lake_4x4"), 0, 2, np.random.default_rng(0))
    ones = np.ones(tree.n_leaves)
    belief = BeliefTree(
        tree.parent, tree.kind, tree.reward, tree.discount, tree.prob, mean=ones, var=ones, noise_var=ones
    )
    assert to_record(from_record(to_record(belief))) == to_record(belief)
    assert belief.has_chance


def test_plans_without_chance_are_worth_what_states_are():
    """With no doors, an open-loop plan and the path that it takes have the same value under one policy."""
    store = ColdStore(jobs=4, doors=(), skill=1.0)
    rng = np.random.default_rng(3)
    state = store.start(rng)
    plans, states = plan_ahead(store, state, 2, rng), look_ahead(store, state, 2, rng)
    assert plans.actions == states.actions
    by_plan = [plans.rollout(store, i, rng, 50) for i in range(plans.n_leaves)]
    by_state = [states.rollout(store, i, rng, 50) for i in range(states.n_leaves)]
    assert backed_up(plans, np.array(by_plan)) == pytest.approx(
        backed_up(states, np.array(by_state)), rel=CLOSED_FORM
    )


def test_plans_are_worth_no_more_than_the_optimum():
    store = ColdStore(jobs=3, skill=1.0)
    rng = np.random.default_rng(5)
    state = store.start(rng)
    plans = plan_ahead(store, state, 3, rng)
    assert set(plans.starts) == {state}
    returns = np.array([[plans.rollout(store, i, rng, 9) for _ in range(200)] for i in range(plans.n_leaves)])
    slack = STANDARD_ERRORS * returns.std(axis=1) / np.sqrt(200)
    assert np.all(returns.mean(axis=1) - slack <= solve(store, [state]).values[state] + 1e-12)


def test_rollouts_have_the_right_mean():
    """A rollout by the optimal policy averages to the optimal value."""
    lake = GymTable("frozen_lake_4x4", discount=0.9, skill=1.0)
    rng = np.random.default_rng(7)
    returns = [rollout(lake, 0, rng, length=300) for _ in range(3000)]
    error = np.std(returns) / np.sqrt(len(returns))
    assert abs(np.mean(returns) - lake.optimum().values[0]) < STANDARD_ERRORS * error


def test_bad_arguments_and_sizes_are_named():
    taxi, rng = GymTable("taxi"), np.random.default_rng(0)
    with pytest.raises(InputError, match="depth: must be at least 1; got 0"):
        look_ahead(taxi, taxi.starts[0], 0, rng)
    with pytest.raises(InputError, match="must not be terminal"):
        look_ahead(taxi, -1, 1, rng)
    with pytest.raises(RefusedError, match="over 20 leaves"):
        look_ahead(taxi, taxi.starts[5], 3, rng, max_leaves=20)
    with pytest.raises(RefusedError, match="over 20 leaves"):
        plan_ahead(taxi, taxi.starts[5], 3, rng, max_leaves=20)
    graph = RandomGraph(1, 1)
    graph.table[0, 0] = [Outcome(0.5, 1, 0.0), Outcome(0.4, 2, 0.0)]
    with pytest.raises(InputError, match=r"graph: outcomes of action 0: prob must sum to 1; got 0\.9"):
        look_ahead(graph, 0, 1, rng)
