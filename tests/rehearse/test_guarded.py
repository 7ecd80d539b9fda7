"""Code of others that errs: one clear line with problem, method and what it did, in workers too."""

from __future__ import annotations

import os
import re
import sys

import numpy as np
import pytest
from ladder import CLOSED_FORM

from distill.cli import run
from distill.errors import InputError
from distill.rehearse import agreement
from distill.rehearse.guarded import Guarded, guarded
from distill.rehearse.lookahead import Settings
from distill.rehearse.problems import SimulatorProblem
from distill.rehearse.simulator import Advised, Modelled, Outcome

MODULE = """
import sys
from distill.rehearse.lookahead import Settings
from distill.rehearse.problems import SimulatorProblem
from distill.rehearse.simulator import Outcome

class Hatch:
    name, discount, calls = "hatch", 0.9, 0
    def start(self, rng):
        return ("shut", 0)
    def actions(self, state):
        return (0, 1)
    def is_terminal(self, state):
        return state[1] >= 3
    def outcomes(self, state, action):
        odds = 0.5 + 0.2 * action
        return [Outcome(odds, ("open", 3), 1.0), Outcome(1 - odds, ("shut", state[1] + 1), 0.0)]
    def step(self, state, action, rng):
        ways = self.outcomes(state, action)
        way = ways[rng.choice(2, p=[w.prob for w in ways])]
        return way.state, way.reward

settings = Settings(depth=1, length=3)
def problem():
    return Hatch(), settings
def __getattr__(name):
    raise AttributeError(name)
"""

# What is put in place of a method -> what is said of it.
FAULTS = {
    "def step(self, state, action, rng): return ('open', 3), 'much'": (
        "simulator Hatch: step: reward: must be a finite number; got 'much'"
    ),
    "def step(self, state, action, rng): return 1.0": (
        "step: must return a pair, the next state and the reward; got 1.0"
    ),
    "def step(self, state, action, rng): return ['open'], 1.0": "step: must return a hashable state",
    "def step(self, state, action, rng): return ('open', 3), float('nan')": (
        "step: reward: must be a finite number; got nan"
    ),
    "def step(self, state, action, rng): return ('open', 3), float('inf')": (
        "step: reward: must be a finite number; got inf"
    ),
    "def step(self, state, action, rng): return 1 / 0": (
        "step: must not raise; it raised ZeroDivisionError: division by zero (mine.py line 23)"
    ),
    "def step(self, state, action, rng): sys.exit(7)": "step: must not raise; it raised SystemExit: 7",
    "def start(self, rng): raise ValueError('two\\nlines')": (
        "start: must not raise; it raised ValueError: two lines"
    ),
    "def actions(self, state): return (0, 'go')": (
        "actions: must give whole numbers, each once; got (0, 'go')"
    ),
    "def actions(self, state): return 3": "actions: must give whole numbers, each once; got 3",
    "def is_terminal(self, state): return None": "is_terminal: must return True or False; got None",
    "def outcomes(self, state, action): return [Outcome(0.4, ('open', 3), 1.0)]": (
        "outcomes of action 0: prob must sum to 1; got 0.4"
    ),
    "def outcomes(self, state, action): return [Outcome(1.4, 'a', 1.0), Outcome(-0.4, 'b', 1.0)]": (
        "outcomes of action 0: prob must be from 0 to 1; got 1.4"
    ),
    "def outcomes(self, state, action): return [('a', 1.0)]": (
        "must be a list of at least one (prob, state, reward)"
    ),
    "def advise(self, state, rng): return 'left'": (
        "advise: must return an action, a whole number; got 'left'"
    ),
    "def step(self, s, a, rng): return ('open', 3), 100.0 + float(rng.random() < 0.5 + 0.2 * a)": (
        "must pay on average what outcomes says, 0"
    ),
    "discount = 'most'": "simulator Hatch: discount: must be a finite number; got 'most'",
    "name = 3": "simulator Hatch: name: must be text; got 3",
}


def refused(tmp_path, monkeypatch, capsys, code, *more):
    (tmp_path / "mine.py").write_text(code)
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr(sys, "path", list(sys.path))
    monkeypatch.setattr(sys, "dont_write_bytecode", True)
    sys.modules.pop("mine", None)
    flags = [
        "--budget",
        "4",
        "--policy",
        "even",
        "--policy",
        "uct:c=1",
        "--seeds",
        "2",
        "--tuning-seeds",
        "0",
    ]
    assert run(["rehearse", "--problem", "mine:problem", *flags, *more, "--out", str(tmp_path / "out")]) == 2
    error = capsys.readouterr().err
    assert error.count("\n") == 1
    assert "problem mine:problem: " in error
    return error


@pytest.mark.parametrize("fault", FAULTS)
def test_a_fault_is_one_line(fault, tmp_path, monkeypatch, capsys):
    code = MODULE.replace("\nsettings =", f"\n    {fault}\n\nsettings =")
    assert FAULTS[fault] in refused(tmp_path, monkeypatch, capsys, code)


@pytest.mark.parametrize(
    ("settings", "message"),
    [
        ("{'depth': 2}", "settings: must be a Settings of distill.rehearse; got {'depth': 2}"),
        ("Settings(depth='two')", "settings: depth: must be a whole number of at least 1; got 'two'"),
        ("Settings(length=1.5)", "settings: length: must be a whole number of at least 0; got 1.5"),
        ("Settings(plans=1)", "settings: plans: must be True or False; got 1"),
        ("Settings(opening=4)", "settings: opening: must be (leaves, rollouts each), whole numbers; got 4"),
        ("Settings(win_loss=(1, 'x'))", "win_loss: must be a low and a higher number; got (1, 'x')"),
        ("sys.exit(7)", "must be made without an error (SystemExit: 7)"),
    ],
)
def test_settings_of_another_type_are_refused(settings, message, tmp_path, monkeypatch, capsys):
    code = MODULE.replace("settings = Settings(depth=1, length=3)", f"settings = {settings}")
    assert message in refused(tmp_path, monkeypatch, capsys, code)


def test_what_fails_in_a_worker_is_told_alike(tmp_path, monkeypatch, capsys):
    """Every check of this process is past; the second problem calls for the workers."""
    fault = (
        "def step(self, state, action, rng):\n        import os\n"
        "        if os.getpid() != int(os.environ['HATCH_STARTER']):\n            sys.exit(7)\n"
        "        return ('open', 3), float(rng.random() < 0.5 + 0.2 * action)"
    )
    monkeypatch.setenv("HATCH_STARTER", str(os.getpid()))
    code = MODULE.replace("\nsettings =", f"\n    {fault}\n\nsettings =")
    more = "--problem", "tree-2x2^1-noise1", "--workers", "2"
    error = refused(tmp_path, monkeypatch, capsys, code, *more)
    assert "step: must not raise; it raised SystemExit: 7" in error
    assert (tmp_path / "out" / "campaign.json").exists()  # it had begun


def test_problems_of_ones_own_are_guarded_too(tmp_path, monkeypatch, capsys):
    draws = {
        "return 3": "draw: must return a Draw; got 3",
        "return 1 / 0": "draw: must not raise; it raised ZeroDivisionError",
        "return replace(TreeProblem(2).draw(seed), roll=lambda leaf: 'x')": (
            "roll: must be a finite number; got 'x'"
        ),
        "return replace(TreeProblem(2, noise_var=None).draw(seed), roll=lambda leaf: 0.5)": (
            "roll: must be 1 or 0 where leaves win or lose; got 0.5"
        ),
    }
    for n, (body, message) in enumerate(draws.items()):
        code = "from dataclasses import replace\nfrom distill.rehearse.problems import TreeProblem\n"
        code += f"class P:\n    name = 'p{n}'\n    def draw(self, seed):\n        {body}\nproblem = P()\n"
        assert message in refused(tmp_path, monkeypatch, capsys, code)


class Coin:
    """Heads or nothing, once; `paid` may pay otherwise than the model says."""

    name, discount = "coin", 1.0

    def __init__(self, paid=lambda won, rng: won):  # noqa: ARG005
        self.paid = paid

    def start(self, rng):  # noqa: ARG002
        return ("toss",)

    def actions(self, state):  # noqa: ARG002
        return np.arange(2)

    def is_terminal(self, state):
        return state == ("over",)

    def outcomes(self, state, action):  # noqa: ARG002
        return [Outcome(0.5 + 0.1 * action, ("over",), 1), Outcome(0.5 - 0.1 * action, ("over",), 0)]

    def step(self, state, action, rng):  # noqa: ARG002
        return ("over",), self.paid(float(rng.random() < 0.5 + 0.1 * action), rng)


def test_answers_pass_through_as_numbers_of_python():
    coin = guarded(Coin())
    assert guarded(coin) is coin
    assert isinstance(coin, Modelled)
    assert not isinstance(coin, Advised)
    assert coin.actions(("toss",)) == (0, 1)
    assert coin.outcomes(("toss",), 1)[0] == Outcome(0.6, ("over",), 1.0)
    bare = type("Bare", (Coin,), {"outcomes": None})()
    assert type(guarded(bare)) is Guarded
    assert not isinstance(guarded(bare), Modelled)


def test_steps_are_held_to_the_models_mean_and_no_more():
    """Of the same spread, paid by another chance, or with a noise that the model does not name: taken."""
    for paid in (lambda won, rng: won, lambda won, rng: won + rng.standard_normal()):  # noqa: ARG005
        SimulatorProblem(Coin(paid), Settings(depth=1))
    for paid in (
        lambda won, rng: won + 100,  # noqa: ARG005
        lambda won, rng: 0.0,  # noqa: ARG005
        lambda won, rng: won + 9 + rng.standard_normal(),
    ):
        with pytest.raises(InputError, match=re.escape("simulator Coin: step")) as told:
            SimulatorProblem(Coin(paid), Settings(depth=1))
        assert "must pay on average what outcomes says" in str(told.value)


def test_the_odds_of_a_false_alarm_are_at_most_what_is_said(monkeypatch):
    """Said to be 0.3, coins that pay as modelled are refused in at most 18 of 60 trials."""
    monkeypatch.setattr(agreement, "FALSE_ALARM", 0.3)
    alarms = 0
    for seed in range(60):
        try:
            agreement.check_steps(Coin(), "coin", seed)
        except InputError:
            alarms += 1
    assert alarms <= 18
    monkeypatch.setattr(agreement, "FALSE_ALARM", 35.9)  # the same coins where far too little is allowed
    with pytest.raises(InputError, match="must pay on average"):
        for seed in range(60):
            agreement.check_steps(Coin(), "coin", seed)


def test_any_difference_shows_where_the_model_names_one_reward():
    sure = type("Sure", (Coin,), {"outcomes": lambda *_: [Outcome(1.0, ("over",), 0.5)]})
    SimulatorProblem(sure(lambda *_: 0.5 * (1 + CLOSED_FORM)), Settings(depth=1))  # rounding
    with pytest.raises(InputError, match=r"what outcomes says, 0\.5 "):
        SimulatorProblem(sure(lambda *_: 0.5001), Settings(depth=1))
