"""Simulators without a model: judged by many rollouts at each leaf, said everywhere, and estimated once."""

from __future__ import annotations

import json
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq
import pytest
from ladder import CLOSED_FORM, STANDARD_ERRORS

from distill.cli import run as command_line
from distill.errors import InputError, RefusedError
from distill.rehearse import problems as problems_module
from distill.rehearse.against import EXACT, against_sentences
from distill.rehearse.campaign import Campaign, run
from distill.rehearse.catalogue import make_problem
from distill.rehearse.gym_copies import GymCopies
from distill.rehearse.lookahead import Settings
from distill.rehearse.problems import SimulatorProblem
from distill.rehearse.results import summarise
from distill.rehearse.results_tables import short_table
from distill.rehearse.search import action_values
from distill.rehearse.simulator import Outcome, rollout
from distill.report.rehearsal_page import rehearsal_page

MODELS = Path(__file__).parents[2] / "models"
DOCK = '''
"""Two dock doors of a cold store; trucks come by chance, and nobody wrote down an exact model."""

from distill.rehearse.lookahead import Settings
from distill.rehearse.problems import SimulatorProblem


class Dock:
    name, discount = "dock", 0.97

    def start(self, rng):
        return (int(rng.integers(4)), int(rng.integers(4)), 0)

    def actions(self, state):
        return (0, 1, 2)  # serve the left door, the right one, or wait

    def is_terminal(self, state):
        return state[2] >= 6

    def step(self, state, action, rng):
        queues, pay = list(state[:2]), 0.0
        if action < 2 and queues[action]:
            queues[action] -= 1
            pay = 1.0 + action
        for door, odds in enumerate((0.5, 0.25)):
            queues[door] = min(queues[door] + int(rng.random() < odds), 5)
        return (*queues, state[2] + 1), pay - 0.2 * sum(queues)


def problem():
    return SimulatorProblem(Dock(), Settings(depth=1, length=4, plans=True), leaf_rollouts=400)


def plain():
    return Dock(), Settings(depth=1, length=4, plans=True)


def states():
    return Dock(), Settings(depth=1, length=4)


def sampled():
    return SimulatorProblem(Dock(), Settings(depth=1, length=4, samples=3), leaf_rollouts=100)
'''


@pytest.fixture
def dock(tmp_path, monkeypatch):
    (tmp_path / "dock.py").write_text(DOCK)
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr(sys, "path", list(sys.path))
    yield tmp_path
    sys.modules.pop("dock", None)


class Toss:
    """Two coins: a toss pays, then one more of a random coin; the value of a plan is known by hand."""

    name, discount, odds = "toss", 0.5, (0.3, 0.6)

    def start(self, rng):  # noqa: ARG002
        return 0

    def actions(self, state):  # noqa: ARG002
        return (0, 1)

    def is_terminal(self, state):
        return state == 2

    def step(self, state, action, rng):
        return state + 1, float(rng.random() < self.odds[action])


HAND = [0.3 + 0.5 * 0.45, 0.6 + 0.5 * 0.45]  # the first toss, then a random one at half the weight


def test_means_are_those_of_rollouts_and_their_error_is_the_one_that_they_have():
    """Against values by hand; and the error of a regret against its spread over 80 estimates."""
    settings = Settings(depth=1, length=5, plans=True)
    problem = SimulatorProblem(Toss(), settings, most_steps=1, leaf_rollouts=4000)
    draw = problem.draw(0)
    assert (draw.leaf_rollouts, draw.believed) == (4000, False)
    per_rollout = [0.3 * 0.7 + 0.25 * 0.45 * 0.55, 0.6 * 0.4 + 0.25 * 0.45 * 0.55]
    assert draw.worth_error == pytest.approx(np.sqrt(sum(per_rollout) / 4000), rel=0.1)
    assert np.all(np.abs(draw.worth - HAND) < STANDARD_ERRORS * np.sqrt(np.array(per_rollout) / 4000))
    few = replace(problem, leaf_rollouts=100)
    gaps = [np.diff(few.draw(seed).worth)[0] for seed in range(80)]
    said = few.draw(0).worth_error
    # The spread of n normals has a relative standard error of 1 / sqrt(2 n).
    assert abs(np.std(gaps) / said - 1) < STANDARD_ERRORS / np.sqrt(2 * 80) + 0.1


def test_the_estimate_of_a_draw_is_none_of_its_luck_and_the_same_for_all():
    """The first 400 returns that a policy is dealt are others than those that it is judged by."""
    settings = Settings(depth=1, length=5, plans=True)
    problem = SimulatorProblem(Toss(), settings, most_steps=1, leaf_rollouts=400)
    draw = problem.draw(5)
    dealt = np.array([[draw.roll(leaf) for _ in range(400)] for leaf in range(2)]).mean(axis=1)
    assert np.all(dealt != draw.worth)
    again = SimulatorProblem(Toss(), settings, most_steps=1, leaf_rollouts=400).draw(5)
    assert np.array_equal(again.worth, draw.worth)
    assert draw.regret(int(np.argmax(draw.worth))) == 0
    assert draw.regret(0) == pytest.approx(draw.worth[1] - draw.worth[0], rel=CLOSED_FORM)


def test_win_loss_leaves_and_chance_nodes_are_backed_up_as_the_search_does():
    kind = type("Once", (Toss,), {"is_terminal": lambda _, state: state == 1})
    wins = SimulatorProblem(kind(), Settings(depth=1, plans=True, win_loss=(0.0, 1.0)), leaf_rollouts=1000)
    draw = wins.draw(0)
    assert np.all(np.abs(draw.worth - [0.3, 0.6]) < STANDARD_ERRORS * np.sqrt(0.25 / 1000))
    chance = SimulatorProblem(
        Toss(), Settings(depth=1, length=5, samples=8), most_steps=1, leaf_rollouts=1000
    )
    draw = chance.draw(0)
    assert draw.tree.has_chance
    means = [np.mean([draw.roll(leaf) for _ in range(400)]) for leaf in range(draw.tree.n_leaves)]
    assert draw.worth == pytest.approx(action_values(draw.tree, np.array(means)), abs=0.06)


def test_a_model_may_be_judged_by_rollouts_too_where_it_is_asked_for():
    def outcomes(self, state, action):
        odds = self.odds[action]
        return [Outcome(odds, state + 1, 1.0), Outcome(1 - odds, state + 1, 0.0)]

    kind = type("Known", (Toss,), {"outcomes": outcomes})
    settings = Settings(depth=1, length=5, plans=True)
    exact = SimulatorProblem(kind(), settings, most_steps=1).draw(0)
    assert (exact.leaf_rollouts, exact.worth_error) == (0, 0.0)
    assert exact.worth == pytest.approx([0.3 + 0.5 * 0.6, 0.6 + 0.5 * 0.6], rel=CLOSED_FORM)
    with pytest.raises(RefusedError, match="more than 1 reachable states to solve; leaf_rollouts=4000 tells"):
        SimulatorProblem(kind(), settings, most_steps=1, max_states=1).draw(0)
    asked = SimulatorProblem(kind(), settings, most_steps=1, leaf_rollouts=500).draw(0)
    assert asked.leaf_rollouts == 500


def test_settings_that_need_a_model_are_refused_without_one(dock):  # noqa: ARG001
    with pytest.raises(InputError, match="problem dock:states: simulator Dock: settings: must be Settings"):
        make_problem("dock:states")
    assert make_problem("dock:sampled").draw(3).tree.has_chance
    assert make_problem("dock:plain").problem.leaf_rollouts == 4000
    for wrong in (99, 1.5):
        with pytest.raises(InputError, match="leaf_rollouts: must be a whole number of at least 100"):
            SimulatorProblem(Toss(), Settings(plans=True), leaf_rollouts=wrong)


def test_where_no_choice_matters_it_is_told():
    even = type("Even", (Toss,), {"odds": (0.5, 0.5)})
    problem = SimulatorProblem(even(), Settings(depth=1, plans=True), most_steps=1, leaf_rollouts=100)
    with pytest.raises(RefusedError, match="where 100 rollouts a leaf tell the actions apart"):
        problem.draw(0)


FLAGS = ["--problem", "dock:problem", "--problem", "tree-2x2^1-noise1", "--budget", "12", "--policy", "uct"]
FLAGS += ["--policy", "static-rate", "--tuning-seeds", "2", "--seeds"]


def test_a_users_simulator_without_a_model_is_rehearsed(dock, capsys, monkeypatch):
    """On two workers, again from what the folder holds without a new estimate, and not after a change."""
    out = dock / "out"
    assert command_line(["rehearse", *FLAGS, "5", "--workers", "2", "--out", str(out)]) == 0
    said = capsys.readouterr().out
    assert "Regret against: exact optimum on tree-2x2^1-noise1." in said
    assert "Regret against: 400 rollouts a leaf on dock:problem" in said
    assert "a mean regret below it is noise" in said
    summary = json.loads((out / "summary.json").read_text())
    assert summary["counted"] == ["tree-2x2^1-noise1"]
    assert summary["against"]["dock:problem"]["error"] > 0
    assert summary["kinds"]["dock:problem"] == "Gaussian, against 400 rollouts a leaf"
    against = {row["problem"]: row["regret_against"] for row in summary["rows"]}
    assert against == {"dock:problem": "400 rollouts a leaf", "tree-2x2^1-noise1": EXACT}
    assert "dock:problem, 12 (regret against: 400 rollouts a leaf)" in rehearsal_page(summary)
    column = pq.read_table(out / "cells.parquet")["regret_error"].to_pylist()
    assert column == [row["regret_error"] for row in summary["rows"]]

    def never(*_):
        raise AssertionError("estimated once more")

    for lost in (out / "cells").glob("dock*.parquet"):
        lost.unlink()
    with monkeypatch.context() as patched:
        patched.setattr(problems_module, "leaf_means", never)
        assert command_line(["rehearse", *FLAGS, "5", "--out", str(out)]) == 0
    again = json.loads((out / "summary.json").read_text())
    assert [row["measured"] for row in again["rows"]] == [row["measured"] for row in summary["rows"]]
    assert again["against"] == summary["against"]
    text = (dock / "dock.py").read_text()
    (dock / "dock.py").write_text(text.replace("leaf_rollouts=400", "leaf_rollouts=401"))
    sys.modules.pop("dock")
    assert command_line(["rehearse", *FLAGS, "5", "--out", str(out)]) == 2
    assert "holds decisions of another problem named dock:problem" in capsys.readouterr().err


def test_an_estimate_of_the_time_leaves_nothing_and_counts_what_the_judging_takes(dock, capsys):
    out = dock / "out"
    flags = ["--problem", "dock:problem", "--budget", "4", "--policy", "uct:c=1", "--out", str(out)]
    assert command_line(["rehearse", *flags, "--seeds", "600", "--tuning-seeds", "0", "--estimate"]) == 0
    assert not out.exists()
    row = next(line for line in capsys.readouterr().out.splitlines() if line.startswith("| dock"))
    # 600 decisions, 3 leaves, 400 rollouts of up to 5 steps, a microsecond each and many more in truth
    assert float(row.split("|")[2].replace(",", "")) > 600 * 3 * 400 * 2e-6
    assert command_line(["rehearse", *flags, "--budget", "5", "--seeds", "7", "--estimate"]) == 0


def test_counts_and_means_never_mix_what_regret_is_against(dock):
    """Of both kinds together aims and break-even count the exact one alone, and it says so."""
    scorer = "scorer:" + str(MODELS / "cold-store-fast.onnx")
    both = Campaign(
        problems=("dock:problem", "tree-2x2^1-noise1"), budgets=("2ms@100us",),
        policies=("uct", "static-rate", scorer), seeds=2, tuning_seeds=0,
    )  # fmt: skip
    results = run(both, dock / "both")
    summary = summarise(results)
    assert {x["cells"] for x in summary["aims"]["best scorer"].values()} <= {1}
    assert {row["problems"] for row in summary["break_even"]} <= {1}
    assert [row["kind"] for row in summary["by_kind"]] == [
        "Gaussian",
        "Gaussian, against 400 rollouts a leaf",
    ]
    assert "counts of aims and break-even are of the problems with an exact optimum alone" in " ".join(
        short_table(summary)
    )
    assert against_sentences({"against": {"tree": results.against["tree-2x2^1-noise1"].as_json()}}) == [
        "Regret against: exact optimum."
    ]


def test_a_real_environment_without_a_table_is_rehearsed(tmp_path, monkeypatch, capsys):
    """CartPole by copies of its state, plans of one push."""
    (tmp_path / "pole.py").write_text(
        "from distill.rehearse.gym_copies import GymCopies\n"
        "from distill.rehearse.lookahead import Settings\n"
        "from distill.rehearse.problems import SimulatorProblem\n"
        "def problem():\n"
        "    settings = Settings(depth=1, length=6, plans=True)\n"
        "    return SimulatorProblem(GymCopies('CartPole-v1', discount=0.98), settings, leaf_rollouts=100)\n"
    )
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr(sys, "path", list(sys.path))
    flags = ["--problem", "pole:problem", "--budget", "16", "--policy", "uct:c=1", "--policy", "static-rate"]
    assert command_line(["rehearse", *flags, "--seeds", "2", "--tuning-seeds", "0", "--out", "out"]) == 0
    sys.modules.pop("pole")
    assert "Regret against: 100 rollouts a leaf on pole:problem" in capsys.readouterr().out
    summary = json.loads((tmp_path / "out" / "summary.json").read_text())
    assert {row["policy"] for row in summary["rows"]} == {"uct-1", "static_rate"}
    assert summary["unsearched"][0]["measured"] > 0


@pytest.mark.parametrize("env", ["CartPole-v1", "Blackjack-v1", "FrozenLake-v1"])
def test_a_rollout_in_one_copy_is_the_rollout_step_by_step(env):
    class Stepwise(GymCopies):
        def step(self, state, action, rng):
            return super().step(state, action, rng)

    world, slow = GymCopies(env, discount=0.9), Stepwise(env, discount=0.9)
    assert not hasattr(slow, "private_copy")  # what a subclass does to steps counts in rollouts too
    state = world.start(np.random.default_rng(1))
    shown = str(state)
    for seed in range(20):
        both = [rollout(w, state, np.random.default_rng(seed), length=9, plan=(1, 0)) for w in (world, slow)]
        assert both[0] == both[1]
    assert str(state) == shown
