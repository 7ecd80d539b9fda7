"""Comparing policies: paired, resumable, with intervals that cover."""

from __future__ import annotations

import json
from dataclasses import replace

import numpy as np
import pyarrow.parquet as pq
import pytest
from ladder import CLOSED_FORM

from distill import voc
from distill.errors import InputError
from distill.rehearse.gym_tables import GymTable
from distill.rehearse.lookahead import Settings
from distill.rehearse.loop import Budget, posterior_means
from distill.rehearse.policies import ByRule
from distill.rehearse.problems import SimulatorProblem, TreeProblem
from distill.rehearse.rehearsal import Cell, compare, ends_of, rehearse
from distill.rehearse.simulator import Outcome
from distill.rehearse.value_policies import ByValue

PROBLEMS = [TreeProblem(3), TreeProblem(2, 2, 2, noise_var=None)]
POLICIES = [ByRule("even"), ByRule("thompson")]
BUDGETS = [Budget(rollouts=6), Budget(rollouts=24)]


def run(folder, policies=POLICIES, **settings):
    return rehearse(PROBLEMS, policies, BUDGETS, folder, values=posterior_means, **({"seeds": 12} | settings))


class Unwilling:
    """A policy that must not be asked."""

    name = "thompson"

    def begin(self, _tree):
        raise AssertionError


def test_cells_are_paired_and_resumed(tmp_path):
    seen = []
    cells = run(tmp_path, progress=lambda done, of: seen.append((done, of)))
    assert seen == [(2, 8), (4, 8), (6, 8), (8, 8)]  # both policies of a problem and budget at a time
    assert [(c.problem, c.budget, c.policy) for c in cells][:2] == [
        (PROBLEMS[0].name, BUDGETS[0], "even"),
        (PROBLEMS[0].name, BUDGETS[0], "thompson"),
    ]
    again = run(tmp_path, policies=[POLICIES[0], Unwilling()])  # read, not run
    for a, b in zip(cells, again, strict=True):
        for column in ("regret", "regret_by_mean", "rollouts", "choosing", "stopped", "choices", "fallbacks"):
            assert np.array_equal(getattr(a, column), getattr(b, column))


def test_a_killed_rehearsal_resumes_to_the_same_regrets(tmp_path):
    whole = run(tmp_path / "whole")
    run(tmp_path / "part")
    for lost in sorted((tmp_path / "part").glob("*.parquet"))[::2]:
        lost.unlink()
    for a, b in zip(whole, run(tmp_path / "part"), strict=True):
        assert np.array_equal(a.regret, b.regret)
        assert np.array_equal(a.rollouts, b.rollouts)


def test_another_rehearsals_folder_is_refused(tmp_path):
    run(tmp_path)
    with pytest.raises(InputError, match=r"rehearsal\.json: must hold .*to be continued"):
        run(tmp_path, seeds=11)
    with pytest.raises(InputError, match=r"rehearsal\.json: must hold .*to be continued"):
        run(tmp_path, seeds=14, first_seed=1)
    cell = next(tmp_path.glob("*.parquet"))
    cell.write_bytes(cell.read_bytes()[:100])
    with pytest.raises(InputError, match="must be a readable Parquet file"):
        run(tmp_path)


def test_more_seeds_play_only_the_further_decisions(tmp_path):
    """What is left is what one run with all the seeds leaves, files included, measured times apart."""
    asked = []

    class Told:
        name = "even"

        def __init__(self):
            self.rule = ByRule("even")

        def begin(self, tree):
            asked.append(tree)
            self.rule.begin(tree)

        def choose(self, *args):
            return self.rule.choose(*args)

    first = run(tmp_path / "raised", policies=[Told(), POLICIES[1]], seeds=5)
    lost = sorted((tmp_path / "raised").glob("*thompson*.parquet"))[0]
    lost.unlink()  # one policy plays from the start, the others go on
    asked.clear()
    raised = run(tmp_path / "raised", policies=[Told(), POLICIES[1]])
    assert len(asked) == len(PROBLEMS) * len(BUDGETS) * (1 + 12 - 5)  # the first one is for warming up
    whole = run(tmp_path / "whole")
    for few, a, b in zip(first, raised, whole, strict=True):
        for column in (
            "regret",
            "regret_by_mean",
            "expected_regret",
            "rollouts",
            "stopped",
            "choices",
            "fallbacks",
        ):
            assert np.array_equal(getattr(a, column), getattr(b, column), equal_nan=True)
            assert np.array_equal(getattr(few, column), getattr(a, column)[:5], equal_nan=True)
        assert len(a.choosing) == len(a.processor) == 12
    names = sorted(path.name for path in (tmp_path / "whole").iterdir())
    assert names == sorted(path.name for path in (tmp_path / "raised").iterdir())
    for name in names:
        if name.endswith(".parquet"):
            tables = [pq.read_table(tmp_path / where / name) for where in ("raised", "whole")]
            told = [table.drop_columns(["choosing", "processor"]) for table in tables]
            assert told[0].equals(told[1], check_metadata=True)
            assert tables[0]["seed"].to_pylist() == list(range(12))
            assert tables[0].schema.field("choosing").metadata[b"description"].startswith(b"s; ")
    assert (tmp_path / "raised/rehearsal.json").read_bytes() == (
        tmp_path / "whole/rehearsal.json"
    ).read_bytes()


def test_a_raise_that_was_killed_goes_on_and_files_of_before_are_taken(tmp_path):
    """Some cells have all decisions, others have not; older files have no processor's time."""
    whole = run(tmp_path / "whole")
    run(tmp_path / "few", seeds=5)
    for number, path in enumerate(sorted((tmp_path / "few").glob("*.parquet"))):
        if number % 2:
            path.write_bytes((tmp_path / "whole" / path.name).read_bytes())
        else:
            table = pq.read_table(path)
            pq.write_table(table.drop_columns(["processor"]), path)
    settings = (tmp_path / "whole/rehearsal.json").read_bytes()
    (tmp_path / "few/rehearsal.json").write_bytes(settings)
    for a, b in zip(whole, run(tmp_path / "few"), strict=True):
        assert np.array_equal(a.regret, b.regret)
        assert len(b.processor) == 12
    path = next((tmp_path / "few").glob("*.parquet"))
    table = pq.read_table(path)
    pq.write_table(table.slice(1), path)
    with pytest.raises(InputError, match="must hold the decisions of seeds 0 and on"):
        run(tmp_path / "few")


def test_decisions_of_a_changed_problem_are_not_taken_for_those_of_the_one_before(tmp_path):
    """A simulator is edited and rehearsed again under its name: its rewards, or how far the search looks."""

    def rehearsed(factor, settings):
        kind = GymTable("taxi", discount=0.98)
        step, outcomes = kind.step, kind.outcomes

        def dearer(state, action, rng):
            after, reward = step(state, action, rng)
            return after, factor * reward

        kind.step = dearer
        kind.outcomes = lambda s, a: [Outcome(p, t, factor * r) for p, t, r in outcomes(s, a)]
        problem = SimulatorProblem(kind, settings)
        return rehearse([problem], [POLICIES[0]], BUDGETS[:1], tmp_path, seeds=3)[0].regret

    near = Settings(depth=1, length=10)
    first = rehearsed(1.0, near)
    assert np.array_equal(rehearsed(1.0, near), first)
    for factor, settings in (
        (10.0, near),
        (1.0, Settings(depth=2, length=10)),
        (1.0, Settings(depth=1, length=9)),
    ):
        with pytest.raises(InputError, match="holds decisions of another problem named taxi"):
            rehearsed(factor, settings)


def test_repeated_names_and_single_seeds_are_refused(tmp_path):
    with pytest.raises(InputError, match="policy: must have a name of its own; got 'even'"):
        run(tmp_path, policies=[ByRule("even"), ByRule("even")])
    with pytest.raises(InputError, match="seeds: must be at least 2; got 1"):
        run(tmp_path, seeds=1)


def cell(policy, regret, budget=BUDGETS[0], **columns):
    regret = np.asarray(regret, dtype=float)
    zeros = np.zeros(len(regret))
    given = {
        "regret_by_mean": regret,
        "expected_regret": regret,
        "rollouts": zeros,
        "choosing": zeros,
        "stopped": zeros,
    }
    given |= {"choices": zeros, "fallbacks": zeros} | columns
    return Cell("p", budget, policy, regret, **given)


def test_pairing_cancels_what_is_common():
    """Half the rival's regret on every decision: the ratio is 0.5 with no width, however regrets vary."""
    hard = np.random.default_rng(0).exponential(size=200)
    cells = [cell("ours", hard / 2), cell("good", hard), cell("bad", 2 * hard)]
    (found,) = compare(cells, "ours", ["bad", "good"])
    assert found.rival == "good"
    assert (found.ratio, found.low, found.high) == pytest.approx((0.5, 0.5, 0.5), rel=CLOSED_FORM)


def test_intervals_cover_the_true_ratio():
    """95 % intervals for a true ratio of 0.8, 200 times: binomial(200, 0.95) stays within 4 sd, +- 12."""
    rng, covered = np.random.default_rng(1), 0
    for _ in range(200):
        cells = [cell("ours", 0.8 * rng.exponential(size=100)), cell("rival", rng.exponential(size=100))]
        (found,) = compare(cells, "ours", ["rival"])
        covered += found.low <= 0.8 <= found.high
    assert 178 <= covered <= 200


def test_resamples_without_a_ratio_widen_the_interval_and_end_it_where_they_are_many():
    """Regret in 5 of 40 decisions: in (35/40)^40, half a per cent, of resamples the rival has none."""
    some, once = np.zeros(40), np.zeros(40)
    some[:5], once[:1] = 1.0, 1.0
    (found,) = compare([cell("ours", some / 2), cell("rival", some)], "ours", ["rival"])
    assert (found.low, found.ratio, found.high) == (0.5, 0.5, 0.5)
    (found,) = compare([cell("ours", some[::-1]), cell("rival", some)], "ours", ["rival"])
    assert found.low < 0.3 < 1 < 3 < found.high < np.inf
    (found,) = compare([cell("ours", once), cell("rival", once)], "ours", ["rival"])
    assert found.ratio == 1
    assert np.isnan([found.low, found.high]).all()
    assert ends_of(np.log([0.5] * 99 + [1e-300]), -np.inf)[1] == pytest.approx(np.log(0.5), rel=CLOSED_FORM)


def test_no_regret_gives_no_ratio():
    (found,) = compare([cell("ours", [0, 0]), cell("rival", [0, 0])], "ours", ["rival"])
    assert np.isnan([found.ratio, found.low, found.high]).all()
    with pytest.raises(InputError, match="missing in p; got 'other'"):
        compare([cell("ours", [0, 0])], "ours", ["other"])


def test_a_cell_says_how_often_its_policy_did_not_choose(tmp_path):
    """Values that are all 0 leave every choice to the static rate: same regrets, and it shows."""

    def nothing(tree, query):
        return replace(voc.price(tree, query), voc=np.zeros(tree.n_leaves), error=np.zeros(tree.n_leaves))

    policies = [
        ByValue(nothing, horizon=0.0, name="blind"),
        ByValue(voc.price, horizon=0.0, name="seeing"),
        ByRule("static_rate"),
    ]
    settings = {"seeds": 12, "values": posterior_means}
    cells = rehearse([TreeProblem(3)], policies, [Budget(rollouts=24)], tmp_path, **settings)
    blind, seeing, rule = cells
    assert [c.fallback_share for c in cells] == [1.0, 0.0, 0.0]
    assert np.array_equal(blind.regret, rule.regret)
    assert np.all(seeing.choices == 24)


def test_choosing_share():
    timed = Budget(seconds=1.0, rollout_seconds=0.01)
    busy = cell("a", [0, 0], timed, rollouts=np.array([10.0, 20.0]), choosing=np.array([0.05, 0.05]))
    assert busy.choosing_share == pytest.approx(0.1 / 0.4, rel=CLOSED_FORM)
    assert np.isnan(cell("a", [0, 0]).choosing_share)


@pytest.mark.slow
def test_static_rate_beats_even_on_gaussian_trees(tmp_path):
    """Knowledge gradients were made for this: 4 actions, 128 rollouts; a wide, sure gap."""
    problem = TreeProblem(4, 4, 2, noise_var=4.0)
    policies = [ByRule("even"), ByValue(voc.price, horizon=0.0)]
    cells = rehearse([problem], policies, [Budget(rollouts=128)], tmp_path, seeds=400, values=posterior_means)
    (found,) = compare(cells, "exact_static_rate", ["even"])
    assert found.high < 1


def test_the_folder_says_what_it_holds(tmp_path):
    run(tmp_path)
    assert json.loads((tmp_path / "rehearsal.json").read_text())["seeds"] == 12
