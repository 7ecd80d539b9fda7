"""Policies and luck: priors of their own, scorings that are left out, late choices, early stops."""

from __future__ import annotations

import pickle
from dataclasses import replace
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from ladder import BACKUP_MOMENTS, CLOSED_FORM, QUADRATURE, STANDARD_ERRORS

from distill import voc
from distill.allocation import Search
from distill.backup import Backup
from distill.errors import InputError
from distill.query import Query, scale_of
from distill.rehearse.catalogue import environment_problems, make_problem, synthetic_problems
from distill.rehearse.loop import Budget, decide, expected_loss, expected_maxima
from distill.rehearse.policies import ByRule, TopTwoThompson, WithPrior
from distill.rehearse.policy_specs import POLICIES, make_policy
from distill.rehearse.problems import TreeProblem
from distill.rehearse.remembered import Remembered
from distill.rehearse.search import action_values
from distill.rehearse.value_policies import ByScorer, ByValue
from distill.runtime import Scorer

FAST = Path(__file__).parents[2] / "models" / "cold-store-fast.onnx"
PROBLEM = TreeProblem(3, 3, 2, noise_var=2.0)
FOUR_LEAVES = TreeProblem(4)
FORTY = Budget(rollouts=40)


def run(policy, budget=FORTY, seed=0, problem=PROBLEM, **more):
    return decide(problem.draw(seed), policy, budget, np.random.default_rng(seed), **more)


# --- luck ------------------------------------------------------------------------------------------


def test_remembered_luck_is_the_problems_own():
    plain, remembered = TreeProblem(3, 2, 2), Remembered(TreeProblem(3, 2, 2))
    order = np.random.default_rng(0).integers(6, size=60).tolist()
    for _ in range(2):  # the second policy's draw as the first's
        a, b = plain.draw(4), remembered.draw(4)
        assert [a.roll(i) for i in order] == [b.roll(i) for i in order]
        assert np.array_equal(a.worth, b.worth)
        order.reverse()


def test_problems_go_by_their_names():
    for problem in [*synthetic_problems(), *environment_problems(), TreeProblem(2, 2, 3, 4.0, 2.5)]:
        assert make_problem(problem.name).name == problem.name
    for name in ("tree-4x4^1", "tree-4x4^1-noise1.2.3", "go"):
        with pytest.raises(InputError, match="problem: "):
            make_problem(name)
    tree = make_problem("tree-2x3^2-noise4-prior2").draw(0).tree
    assert (len(tree.action_nodes), tree.n_leaves, tree.var[0], tree.noise_var[0]) == (2, 18, 2.0, 4.0)


# --- what the outcome is measured by -----------------------------------------------------------------


def test_values_alone_are_those_of_pricing():
    for problem in (PROBLEM, TreeProblem(3, 2, 2, noise_var=None)):
        tree = problem.draw(0).tree
        assert np.array_equal(expected_maxima(tree), voc.price(tree, Query()).value)


@pytest.mark.parametrize("noise", [2.0, None])
def test_expected_loss_is_the_average_regret_of_truths_drawn_from_the_beliefs(noise):
    draw = TreeProblem(3, 3, 2, noise_var=noise).draw(1)
    search, rng = Search(draw.tree), np.random.default_rng(5)
    for leaf in range(9):
        search.observe(leaf, draw.roll(leaf))
    tree, n = search.tree(), 20_000
    if noise is None:
        truths = rng.beta(tree.alpha[:, None], tree.beta[:, None], size=(9, n))
    else:
        truths = tree.mean[:, None] + np.sqrt(tree.var)[:, None] * rng.standard_normal((9, n))
    worth = action_values(tree, truths)
    for action in range(3):
        losses = worth.max(axis=0) - worth[action]
        wanted = losses.mean(), STANDARD_ERRORS * losses.std() / np.sqrt(n)
        assert abs(expected_loss(tree, action) - wanted[0]) < wanted[1]


def test_expected_regret_has_the_mean_of_regret():
    done = [run(ByRule("thompson"), Budget(rollouts=12), seed) for seed in range(300)]
    apart = np.array([d.regret - d.expected_regret for d in done])
    assert abs(apart.mean()) < STANDARD_ERRORS * apart.std() / np.sqrt(len(apart))
    assert np.std([d.expected_regret for d in done]) < np.std([d.regret for d in done]) / 2


@pytest.mark.parametrize("noise", [4.0, None])
def test_values_through_chance_are_the_backups(noise):
    """Within the backup's rung of the exact ones, where such are known, and of sampled ones elsewhere."""
    draw = TreeProblem(3, 3, 3, noise_var=noise, chance=True).draw(0)
    search = Search(draw.tree)
    for leaf in range(0, 27, 2):
        search.observe(leaf, draw.roll(leaf))
    tree = search.tree()
    found, n = expected_maxima(tree), 100_000
    if noise is None:
        odds = np.random.default_rng(1).beta(tree.alpha[:, None], tree.beta[:, None], size=(27, n))
        wanted, slack = action_values(tree, odds).mean(axis=1), STANDARD_ERRORS * 0.5 / np.sqrt(n)
    else:
        wanted, slack = voc.price(tree, Query()).value, 0.0
    assert np.max(np.abs(found - wanted)) < BACKUP_MOMENTS * scale_of(tree) + slack


def test_win_loss_trees_with_chance_can_be_acted_on():
    done = run(ByRule("thompson"), problem=make_problem("tree-3x2^2-winloss-chance"))
    assert done.regret >= 0
    assert np.isnan(done.expected_regret)


# --- the clock -------------------------------------------------------------------------------------


def test_busy_rollouts_take_their_time_on_the_real_clock():
    done = run(ByRule("even"), Budget.parse("20ms@1ms!busy"))
    assert 1 <= done.rollouts <= 20
    assert done.choosing < 0.02
    assert Budget.parse("20ms@1ms!busy") != Budget.parse("20ms@1ms")


@pytest.mark.parametrize("text", ["128", "20ms@100us", "2500ms@5000us", "3.2ms@20us!busy"])
def test_budgets_go_by_their_text(text):
    assert str(Budget.parse(text)) == text
    assert Budget.parse(str(Budget.parse(text))) == Budget.parse(text)


def test_budgets_that_make_no_sense_are_refused():
    for text in ("-3", "20ms", "20ms@0us", "20@1ms", "1e3", ""):
        with pytest.raises(InputError):
            Budget.parse(text)


# --- policies --------------------------------------------------------------------------------------


def test_a_prior_of_ones_own_changes_the_choices_not_what_is_acted_on():
    same = run(WithPrior(ByRule("static_rate"), 1.0))
    assert (
        same == run(ByRule("static_rate"), clock=lambda: 0.0)
        or same.regret == run(ByRule("static_rate")).regret
    )
    narrow = WithPrior(ByRule("static_rate"), 0.2)
    tree = PROBLEM.draw(0).tree
    narrow.begin(tree)
    posterior, rng = Search(tree), np.random.default_rng(0)
    for _ in range(30):
        choice = narrow.choose(posterior, 10, rng)
        narrow.observe(choice.leaf, 1.0, 1)
    assert np.array_equal(posterior.tree().mean, tree.mean)  # the tree's beliefs were not touched
    assert narrow._own.moments[1].max() <= 0.04 * tree.var.max() * (1 + CLOSED_FORM)
    win_loss = WithPrior(TopTwoThompson(), 2.0)
    win_loss.begin(TreeProblem(2, noise_var=None).draw(0).tree)
    assert win_loss._own.tree().alpha == pytest.approx([0.25, 0.25], rel=CLOSED_FORM)


def test_what_a_policy_asks_for_passes_through_its_prior():
    wide = WithPrior(ByScorer(Scorer({"input": "record"}), share=1e9), 2.0)
    done = run(wide, Budget.parse("10ms@1ms"), clock=lambda: 0.0)
    assert done.rollouts > 0
    assert wide._policy._rollout_seconds == pytest.approx(1e-3, rel=CLOSED_FORM)
    assert wide._policy._changed  # the last rollout waits for the next scoring
    inputs = wide._policy._up_to_date(wide._policy._inputs, wide._own)
    rows, own = inputs._backup.rows(), Backup(wide._own.tree()).rows()
    assert all(np.allclose(rows[name], own[name], rtol=CLOSED_FORM, atol=0) for name in own)
    assert not WithPrior(ByScorer(FAST), 2.0).suits(make_problem("tree-2x2^1-winloss").draw(0).tree)
    assert WithPrior(ByRule("thompson"), 2.0).suits(PROBLEM.draw(0).tree)


def fake(voc_values, batch=8):
    """Scores that do not depend on the beliefs."""
    values = np.array(voc_values, dtype=float)

    class Fake(ByScorer):
        calls = 0

        def begin(self, tree):
            super().begin(tree)
            self._inputs = SimpleNamespace(score=self.answer, observe=lambda *_: None)

        def answer(self, _posterior, _remaining):
            self.calls += 1
            return SimpleNamespace(voc=values, batch=np.full(len(values), batch), pick=int(np.argmax(values)))

    return Fake


def choices(policy, n, remaining=50, problem=FOUR_LEAVES):
    tree = problem.draw(0).tree
    policy.begin(tree)
    posterior, rng = Search(tree), np.random.default_rng(0)
    return [policy.choose(posterior, remaining, rng) for _ in range(n)]


def test_where_nothing_is_worth_a_rollout_the_static_rate_chooses_the_next_four():
    policy = fake([0.0] * 4)(Scorer.closed_form())
    assert all(c.fell_back for c in choices(policy, 8))
    assert policy.calls == 2
    assert not any(c.fell_back for c in choices(fake([1e-9, 0, 0, 0])(Scorer.closed_form()), 8))


def test_scorings_that_are_dear_beside_a_rollout_are_left_out():
    """Four tell what a scoring takes, by the fastest but the first, which makes the buffers."""
    policy = fake([0.1, 0.4])(Scorer.closed_form(), share=0.5)
    policy.expect(1e-9)
    assert [c.fell_back for c in choices(policy, 7)] == [*4 * [False], *3 * [True]]
    policy.expect(10.0)
    assert not any(c.fell_back for c in choices(policy, 5))
    assert policy.calls == 9
    slow_first = fake([0.1, 0.4])(Scorer.closed_form(), share=0.5)
    slow_first._scorings[4] = 3
    slow_first._fastest[4] = 1e-9  # what came after a slow first one
    slow_first.expect(1e-3)
    assert not any(c.fell_back for c in choices(slow_first, 3))
    policy._fastest[4] = 1.0  # a busy spell of the machine
    policy.expect(1e-3)
    assert all(c.fell_back for c in choices(policy, 5))
    assert not any(c.fell_back for c in choices(policy, 5, problem=TreeProblem(3))[:1])  # not yet known


def test_the_scorer_chooses_the_last_rollouts():
    """Two rollouts a leaf of four, of which one is known: six."""
    tree = FOUR_LEAVES.draw(0).tree
    for policy, of, last in [
        (fake([0.1] * 4)(Scorer.closed_form(), late=2), tree, 8),
        (fake([0.1] * 4)(Scorer.closed_form(), late=2), replace(tree, var=np.array([1.0, 0, 4, 1])), 6),
        (fake([0.1] * 4)(Scorer.closed_form(), late=0.5), TreeProblem(4, noise_var=None).draw(0).tree, 2),
    ]:
        policy.begin(of)
        posterior, rng = Search(of), np.random.default_rng(0)
        by_scorer = [not policy.choose(posterior, left, rng).fell_back for left in range(12, 0, -1)]
        assert by_scorer == [left <= last for left in range(12, 0, -1)]
        assert policy.calls == last


def test_every_second_early_rollout_is_the_scorers_too():
    tree = FOUR_LEAVES.draw(0).tree
    policy = fake([0.1] * 4)(Scorer.closed_form(), late=0.5, every=2)
    policy.begin(tree)
    posterior, rng = Search(tree), np.random.default_rng(0)
    by_scorer = [not policy.choose(posterior, left, rng).fell_back for left in range(7, 0, -1)]
    assert by_scorer == [False, True, False, True, False, True, True]
    assert make_policy(f"scorer:{FAST}:late=0.5:every=2").name == "cold-store-fast-late0.5-every2"


def test_late_scorers_look_whether_to_stop_every_eighth_rollout():
    policy = fake([0.005, 0, 0, 0])(Scorer.closed_form(), late=1, stop=0.01)
    policy.begin(FOUR_LEAVES.draw(0).tree)
    worth = SimpleNamespace(voc=np.array([0.5]))
    policy._inputs.closed_form = lambda *_: worth
    posterior, rng = Search(FOUR_LEAVES.draw(0).tree), np.random.default_rng(0)
    assert all(policy.choose(posterior, 50, rng).fell_back for _ in range(16))
    assert policy.calls == 2
    worth.voc = np.array([0.001])
    assert policy.choose(posterior, 50, rng) is None


def test_stops_are_in_units_of_the_scale():
    wide = TreeProblem(4, prior_var=100.0)  # scale 10
    assert choices(fake([0.05, 0, 0, 0])(Scorer.closed_form(), stop=0.01), 1, problem=wide) == [None]
    assert choices(fake([0.15, 0, 0, 0])(Scorer.closed_form(), stop=0.01), 1, problem=wide) != [None]
    exact = ByValue(voc.price, horizon=0.0, stop=0.01)
    stopped, on = (
        run(p, Budget(rollouts=300), problem=wide) for p in (exact, ByValue(voc.price, horizon=0.0))
    )
    assert stopped.rollouts < on.rollouts == 300
    assert exact.name == "exact_static_rate-stop0.01"


def test_a_scorer_beside_the_closed_form_stops_when_that_agrees():
    fresh = fake([1e-6, 0, 0, 0])(Scorer.closed_form(), late=100.0, stop=1e-3)
    fresh_inputs = SimpleNamespace(
        score=fresh.answer,
        closed_form=lambda *_: SimpleNamespace(voc=np.array([0.5])),
        observe=lambda *_: None,
    )
    tree = FOUR_LEAVES.draw(0).tree
    fresh.begin(tree)
    fresh._inputs = fresh_inputs
    assert fresh.choose(Search(tree), 50, np.random.default_rng(0)).leaf == 0
    fresh.begin(tree)
    fresh_inputs.closed_form = lambda *_: SimpleNamespace(voc=np.array([1e-4]))
    fresh._inputs = fresh_inputs
    assert fresh.choose(Search(tree), 50, np.random.default_rng(0)) is None


def test_a_scorer_by_path_travels_between_processes():
    policy = make_policy(f"scorer:{FAST}:every=2")
    first = run(policy)
    again = pickle.loads(pickle.dumps(policy))  # what worker processes do
    assert again.name == policy.name == "cold-store-fast-every2"
    assert run(again).regret == first.regret
    with pytest.raises(InputError, match="scorer: must be given as a path"):
        pickle.dumps(ByScorer(Scorer.closed_form()))


def test_every_policy_can_be_named():
    for name in POLICIES:
        policy = make_policy(f"scorer:{FAST}" if name == "scorer" else name)
        done = run(policy, Budget(rollouts=4))
        assert done.rollouts == 4
        assert policy.name
    assert make_policy("exact-horizon:h=2:rate=no").name == "exact_horizon2_voc"


def test_static_voc_is_the_knowledge_gradient():
    """The rule with one rollout in view against the exact static value of one rollout."""
    for seed in range(10):
        draw = PROBLEM.draw(seed)
        posterior, rng = Search(draw.tree), np.random.default_rng(0)
        for leaf in range(9):
            posterior.observe(leaf, draw.roll(leaf))
        exact = voc.price(posterior.tree(), Query(horizon=0.0, batch=1)).voc
        chosen = ByRule("static_voc").choose(posterior, 50, rng).leaf
        assert exact[chosen] >= exact.max() * (1 - QUADRATURE)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: WithPrior(ByRule("thompson"), 0.0), "prior: must be from 1e-06 to"),
        (lambda: ByScorer(FAST, every=-1), "every: must be >= 0"),
        (lambda: ByScorer(FAST, late=-1.0), "late: must be >= 0 and finite"),
        (lambda: ByScorer(FAST, share=float("inf")), "share: must be >= 0 and finite"),
        (lambda: ByScorer(FAST, stop=-0.1), "stop: must be >= 0"),
    ],
)
def test_bad_settings_name_the_rule(make, message):
    with pytest.raises(InputError, match=message):
        make()
