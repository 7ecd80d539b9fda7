"""One decision in closed loop: budgets, clocks, luck shared by policies, and what regret means."""

from __future__ import annotations

import re
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, STANDARD_ERRORS

from distill import voc
from distill.allocation import Search
from distill.errors import InputError
from distill.rehearse.catalogue import environment_problems, make_problem, synthetic_problems
from distill.rehearse.gym_tables import GymTable
from distill.rehearse.loop import Budget, decide, decide_at_prices, posterior_means
from distill.rehearse.plans import plan
from distill.rehearse.policies import ByRule, Choice, TopTwoThompson, leaf_actions
from distill.rehearse.policy_specs import make_policy
from distill.rehearse.problems import SimulatorProblem, TreeProblem
from distill.rehearse.remembered import Remembered
from distill.rehearse.search import Settings, action_values
from distill.rehearse.value_policies import ByScorer, ByValue
from distill.runtime import Scorer

STATIC = {"horizon": 0.0}
MODELS = Path(__file__).parents[2] / "models"


class Clock:
    """A clock that only what takes time moves."""

    now = 0.0

    def __call__(self):
        return self.now


class Slow:
    """Gives every leaf its turn; each choice takes a while."""

    name = "slow"

    def __init__(self, clock: Clock, seconds: float) -> None:
        self.clock, self.seconds, self.seen = clock, seconds, []

    def begin(self, tree):
        self.n = tree.n_leaves

    def choose(self, _posterior, remaining, _rng):
        self.seen.append(remaining)
        self.clock.now += self.seconds
        return Choice(len(self.seen) % self.n)


def run(problem, policy, budget, seed=0, clock=time.perf_counter):
    rng = np.random.default_rng(seed)
    return decide(problem.draw(seed), policy, budget, rng, values=posterior_means, clock=clock)


@pytest.mark.parametrize("problem", synthetic_problems(), ids=lambda p: p.name)
def test_every_grid_cell_runs_and_spends_its_budget(problem):
    for policy in (
        ByRule("even"),
        ByRule("uct"),
        ByRule("thompson"),
        ByRule("static_rate"),
        TopTwoThompson(),
    ):
        done = run(problem, policy, Budget(rollouts=20))
        assert done.rollouts == 20
        assert not done.stopped
        assert 0 <= done.regret < 6  # six standard deviations of the prior


def test_the_same_seed_is_the_same_decision_and_luck():
    """The j-th rollout at a leaf does not depend on what was rolled out before it elsewhere."""
    for problem in (TreeProblem(3, 2, 2), TreeProblem(3, 2, 2, noise_var=None)):
        a, b, other = problem.draw(5), problem.draw(5), problem.draw(6)
        assert np.array_equal(a.worth, b.worth)
        assert not np.array_equal(a.worth, other.worth)
        forward = {i: [a.roll(i) for _ in range(30)] for i in range(6)}
        backward = {i: [b.roll(i) for _ in range(30)] for i in reversed(range(6))}
        assert forward == backward


def test_rollouts_average_to_the_truth():
    draw = TreeProblem(4, noise_var=4.0).draw(1)  # one leaf an action: worth is the leaf's value
    means = [np.mean([draw.roll(i) for _ in range(4000)]) for i in range(4)]
    assert np.max(np.abs(means - draw.worth)) < STANDARD_ERRORS * np.sqrt(4.0 / 4000)
    assert draw.regret(int(np.argmax(draw.worth))) == 0
    assert draw.regret(0) == pytest.approx(draw.worth.max() - draw.worth[0], rel=CLOSED_FORM)


def test_more_rollouts_less_regret():
    problem = TreeProblem(4, 4, 2, noise_var=4.0)
    few, many = (
        np.mean(
            [run(problem, ByRule("thompson"), Budget(rollouts=n), seed).regret_by_mean for seed in range(150)]
        )
        for n in (4, 512)
    )
    assert many < few / 2


def test_slow_choices_cost_rollouts():
    """10 ms a rollout and as much a choice leave room for 10 of the 20 rollouts in 200 ms."""
    clock = Clock()
    slow = Slow(clock, 0.01)
    done = run(TreeProblem(3), slow, Budget(seconds=0.2, rollout_seconds=0.01), clock=clock)
    assert done.rollouts == 10
    assert done.choosing == pytest.approx(0.1, rel=CLOSED_FORM)
    assert slow.seen == [20, *range(9, 0, -1)]  # the first choice has shown what choosing costs


@pytest.mark.parametrize("own_beliefs", [False, True])
def test_one_set_of_beliefs_is_charged(own_beliefs, monkeypatch):
    """1 ms for the tree's beliefs, 2 ms for the policy's own: an agent pays for those that it keeps."""
    clock = Clock()
    slow = Slow(clock, 0.0)
    slow.own_beliefs = own_beliefs

    def takes(seconds):
        def observe(*_):
            clock.now += seconds

        return observe

    slow.observe = takes(0.002)
    monkeypatch.setattr(Search, "observe", takes(0.001))
    done = run(TreeProblem(3), slow, Budget(rollouts=10), clock=clock)
    assert done.choosing == pytest.approx(0.02 if own_beliefs else 0.03, rel=CLOSED_FORM)


def test_a_choice_longer_than_the_budget_buys_nothing():
    clock = Clock()
    budget = Budget(seconds=0.01, rollout_seconds=0.005)
    assert run(TreeProblem(3), Slow(clock, 0.02), budget, clock=clock).rollouts == 0


def test_the_real_clock_runs():
    done = run(TreeProblem(3), ByRule("even"), Budget(rollouts=5))
    assert 0 < done.choosing < 60


@settings(deadline=None, derandomize=True, max_examples=100)
@given(
    spent=st.integers(0, 50),
    cap=st.none() | st.integers(0, 60),
    seconds=st.floats(0.01, 1),
    choosing=st.floats(0, 1),
)
def test_left_never_exceeds_room(spent, cap, seconds, choosing):
    budget = Budget(rollouts=cap, seconds=seconds, rollout_seconds=0.01)
    elapsed = spent * 0.01 + choosing
    left, room = budget.left(spent, elapsed), budget.room(spent, elapsed)
    assert 0 <= left <= room
    assert (left == 0) == (room == 0)
    assert elapsed + room * 0.01 <= seconds + 1e-9 or room == 0
    assert cap is None or spent + room <= max(cap, spent)


def test_whole_rollouts_survive_rounding():
    assert Budget(seconds=0.3, rollout_seconds=0.1).room(0, 0.0) == 3
    assert Budget(seconds=1.0, rollout_seconds=0.1).room(7, 7 * 0.1) == 3


def test_value_policies_stop_and_commit():
    problem = TreeProblem(4, noise_var=1.0)
    every = ByValue(voc.price, **STATIC)
    batches = ByValue(voc.price, **STATIC, commit=True)
    thrifty = ByValue(voc.price, **STATIC, rollout_price=0.01)
    budget = Budget(rollouts=200)
    assert run(problem, every, budget).rollouts == 200
    assert run(problem, batches, budget).rollouts == 200
    done = run(problem, thrifty, budget)
    assert done.stopped
    assert 0 < done.rollouts < 200
    assert every.name == "exact_static_rate"


def test_static_value_by_price_and_by_rule_spend_alike():
    """The rule looks at batches 1, 2, 4, ...; with one rollout left both look at a single rollout."""
    for seed in range(20):
        draw = TreeProblem(4, 2, 2).draw(seed)
        posterior, rng = Search(draw.tree), np.random.default_rng(0)
        for leaf in range(8):
            posterior.observe(leaf, draw.roll(leaf))
        by_price = ByValue(voc.price, **STATIC).choose(posterior, 1, rng)
        assert by_price == ByRule("static_rate").choose(posterior, 1, rng)


def test_a_scorer_drives_the_loop():
    """The closed form as a scorer, against the same value priced exactly: the same rollouts."""
    problem = TreeProblem(3, 3, 2, noise_var=2.0)
    for seed in range(5):
        by_scorer = run(problem, ByScorer(Scorer.closed_form()), Budget(rollouts=40), seed)
        by_price = run(problem, ByValue(voc.price, **STATIC), Budget(rollouts=40), seed)
        assert by_scorer.rollouts == by_price.rollouts == 40
        assert by_scorer.regret == by_price.regret


def test_top_two_spreads_over_root_actions():
    """With one sure winner Thompson stays with it, top-two looks at a rival half of the time."""
    draw = TreeProblem(3, noise_var=1.0).draw(0)
    tree = draw.tree
    sure = Search(replace(tree, mean=np.array([3.0, 0.0, 0.0]), var=np.full(3, 1.0)))
    rng = np.random.default_rng(0)
    policy = TopTwoThompson(tries=1000)
    policy.begin(tree)
    picks = np.array([policy.choose(sure, 1, rng).leaf for _ in range(1000)])
    assert abs(np.mean(picks == 0) - 0.5) < STANDARD_ERRORS * np.sqrt(0.25 / 1000)


def test_leaf_actions_on_a_deep_tree():
    tree = TreeProblem(3, 2, 3).draw(0).tree
    assert leaf_actions(tree).tolist() == [0] * 4 + [1] * 4 + [2] * 4


def test_action_values_pass_chance_and_decisions():
    problem = TreeProblem(2, 2, 3, chance=True)
    draw = problem.draw(3)
    t, x = draw.tree, np.arange(8.0)
    by_hand = [
        t.prob[3 + 2 * a] * max(x[4 * a], x[4 * a + 1]) + t.prob[4 + 2 * a] * max(x[4 * a + 2], x[4 * a + 3])
        for a in range(2)
    ]
    assert action_values(t, x) == pytest.approx(by_hand, rel=CLOSED_FORM)


def test_simulator_problems_know_their_optimum():
    table = GymTable("cliff_walking", discount=0.98, skill=0.9)
    problem = SimulatorProblem(table, Settings(depth=2, length=30))
    assert problem.name == "cliff_walking"
    worths = list(table.optimum().action_values.values())
    regrets = []
    for seed in range(12):
        draw = problem.draw(seed)
        assert any(np.array_equal(draw.worth, w) or draw.worth == pytest.approx(w) for w in worths)
        assert np.ptp(draw.worth) > 0
        assert problem.draw(seed).roll(2) == draw.roll(2)
        regrets.append(run(problem, ByRule("even"), Budget(rollouts=200), seed).regret)
    assert np.mean(regrets) < 3  # against about 25 of the average action; the cliff costs 100


@pytest.mark.parametrize("problem", environment_problems(), ids=lambda p: p.name)
def test_every_environment_can_be_rehearsed(problem):
    """Rollouts spread evenly find an action that is better than a random one."""
    regrets, random_regrets = [], []
    for seed in range(8):
        draw = problem.draw(seed)
        random_regrets.append(float(draw.worth.max() - draw.worth.mean()))
        regrets.append(run(problem, ByRule("even"), Budget(rollouts=200), seed).regret_by_mean)
    assert np.mean(regrets) < np.mean(random_regrets)


@pytest.mark.slow
@pytest.mark.parametrize("name", [p for p in plan("full").problems if not p.startswith("tree-")])
def test_environments_of_the_full_plan_leave_a_search_something_to_find(name):
    """A search that favours no leaf at least halves the regret of acting before the first rollout."""
    problem, even = Remembered(make_problem(name)), ByRule("even")
    regrets = {n: [] for n in (0, 2048)}
    for n, found in regrets.items():
        for seed in range(100):
            rng = np.random.default_rng(seed)
            found.append(decide(problem.draw(seed), even, Budget(rollouts=n), rng).regret)
    assert np.mean(regrets[2048]) < np.mean(regrets[0]) / 2


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: Budget(), "budget: must limit rollouts or seconds"),
        (lambda: Budget(rollouts=-1), "rollouts: must be >= 0; got -1"),
        (lambda: Budget(seconds=1.0), "rollout_seconds: must be above 0"),
        (lambda: TreeProblem(0), "actions: must be at least 1; got 0"),
        (lambda: TreeProblem(2, noise_var=0.0), "noise_var: must be above 0; got 0.0"),
        (lambda: ByValue(voc.price, rollout_price=-1.0), "rollout_price: must be >= 0 and finite; got -1.0"),
        (lambda: TopTwoThompson(0.0), "share: must be above 0"),
        (lambda: run(TreeProblem(2), ByRule("best"), Budget(rollouts=1)), "rule: must be one of even"),
    ],
)
def test_bad_arguments_name_the_rule(make, message):
    with pytest.raises(InputError, match=message):
        make()


# --- stopping at many prices -----------------------------------------------------------------------

PRICES = (0.1, 0.01, 1e-3, 1e-4, 1e-6, 1e-9)


@pytest.mark.parametrize("problem", ["tree-3x2^1-noise1", "tree-3x2^1-winloss", "tree-2x2^2-noise1-chance"])
@pytest.mark.parametrize("use", ["", ":late=0.5", ":late=0.5:every=2", ":late=1:prior=1.4"])
def test_one_search_passes_the_ends_at_all_prices(problem, use):
    """The search without a price, looked at on its way, against as many searches that really stop."""
    file = {"noise1": "cold-store-fast", "winloss": "on-time", "chance": "crossing-traffic"}
    text = f"scorer:{MODELS}/{file[problem.rpartition('-')[2]]}.onnx{use}"
    stopped = set()
    for seed in range(3):
        draw = make_problem(problem).draw
        rng = np.random.default_rng(seed)
        *ends, last = decide_at_prices(draw(seed), make_policy(text), Budget(rollouts=120), rng, PRICES)
        for price, end in zip((*PRICES, 0.0), (*ends, last), strict=True):
            policy = make_policy(f"{text}:stop={price}")
            played = decide(draw(seed), policy, Budget(rollouts=120), np.random.default_rng(seed))
            assert replace(end, choosing=0.0, expected_regret=0.0) == replace(
                played, choosing=0.0, expected_regret=0.0
            )
            assert np.array_equal(end.expected_regret, played.expected_regret, equal_nan=True)
            stopped.add(played.rollouts)
    assert len(stopped) > 3


def test_exact_values_pass_their_prices_too():
    problem = make_problem("tree-2x2^1-noise1")
    rng = np.random.default_rng(0)
    exact = make_policy("exact-dynamic-rate")
    *ends, last = decide_at_prices(problem.draw(0), exact, Budget(rollouts=60), rng, PRICES)
    for price, end in zip(PRICES, ends, strict=True):
        policy = make_policy(f"exact-dynamic-rate:stop={price}")
        played = decide(problem.draw(0), policy, Budget(rollouts=60), np.random.default_rng(0))
        assert (end.rollouts, end.stopped, end.regret) == (played.rollouts, played.stopped, played.regret)
    assert not last.stopped
    assert ends[0].rollouts < last.rollouts == 60


@pytest.mark.parametrize(
    ("policy", "prices", "message"),
    [
        (f"scorer:{MODELS}/on-time.onnx", (0.1, 0.1), "prices: must fall from one to the next"),
        ("uct", (0.1,), "policy uct-1: has no price to stop at"),
        ("thompson:prior=2", (0.1,), "policy thompson-prior2: has no price to stop at"),
    ],
)
def test_prices_that_cannot_be_passed_are_refused(policy, prices, message):
    draw = make_problem("tree-2x2^1-winloss").draw(0)
    with pytest.raises(InputError, match=re.escape(message)):
        decide_at_prices(draw, make_policy(policy), Budget(rollouts=4), np.random.default_rng(0), prices)
