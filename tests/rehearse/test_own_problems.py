"""Problems of one's own by MODULE:NAME: the README's example, and what is refused."""

from __future__ import annotations

import json
import re
import sys
from pathlib import Path

import pytest

from distill.cli import run
from distill.errors import InputError
from distill.rehearse.catalogue import make_problem
from distill.rehearse.lookahead import Settings
from distill.rehearse.problems import SimulatorProblem
from distill.rehearse.simulator import Outcome

ROOT = Path(__file__).parents[2]
FAST = ROOT / "models" / "cold-store-fast.onnx"


@pytest.fixture
def example(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """The README's module in the present folder."""
    found = re.search(
        r"<!-- example: own simulator -->\n```python\n# (\w+\.py)\n(.*?)```",
        (ROOT / "README.md").read_text(),
        re.DOTALL,
    )
    assert found is not None
    (tmp_path / found[1]).write_text(found[2])
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr(sys, "path", list(sys.path))
    yield tmp_path
    sys.modules.pop(found[1].removesuffix(".py"), None)


def test_the_readmes_simulator_is_rehearsed(example: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """With two workers, which make it themselves; the optimum that regret is against comes from its model."""
    flags = [
        "--problem",
        "aisle:problem",
        "--problem",
        "tree-2x2^1-noise1",
        "--budget",
        "48",
        "--seeds",
        "20",
    ]
    out = example / "out"
    more = ["--scorer", str(FAST), "--tuning-seeds", "10", "--workers", "2", "--out", str(out)]
    assert run(["rehearse", *flags, *more]) == 0
    assert "| aisle:problem | 48 | cold-store-fast |" in capsys.readouterr().out
    summary = json.loads((out / "summary.json").read_text())
    (without,) = [row for row in summary["unsearched"] if row["problem"] == "aisle:problem"]
    best = min(row["measured"] for row in summary["rows"] if row["problem"] == "aisle:problem")
    assert best < without["measured"]


def test_the_readmes_optimum_is_worth_what_it_says(example: Path) -> None:  # noqa: ARG001
    """From the last minute but one on by hand: waiting ends the job, and so does going round."""
    problem = make_problem("aisle:problem").problem
    worth = problem._worth_of((2, 8))
    assert worth == pytest.approx([0.35 * (6 - 1.6) - 0.65 * 0.3, 0.7 * 2 - 0.3 * 0.3, 1.0])


@pytest.mark.parametrize(
    ("code", "name", "message"),
    [
        (
            "x = 1",
            "x",
            "must be a problem, or a function that returns one or (simulator, settings); got 'int'",
        ),
        ("x = 1", "y", "must be made without an error (AttributeError: module 'mine' has no attribute 'y')"),
        ("import nowhere_at_all", "y", "must be made without an error (ModuleNotFoundError: No module named"),
        ("def p(): return 1 / 0", "p", "must be made without an error (ZeroDivisionError: division by zero)"),
        ("def p(): return object(), None", "p", "simulator object: must have name, discount, start, actions"),
        ("", "a b", "must be MODULE:NAME, such as my_simulator:problem; got 'mine:a b'"),
    ],
)
def test_what_is_no_problem_is_one_clear_line(
    code: str,
    name: str,
    message: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    (tmp_path / "mine.py").write_text(code)
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr(sys, "path", list(sys.path))
    monkeypatch.setattr(sys, "dont_write_bytecode", True)
    sys.modules.pop("mine", None)
    flags = ["--problem", f"mine:{name}", "--budget", "4", "--out", str(tmp_path / "out")]
    assert run(["rehearse", *flags]) == 2
    error = capsys.readouterr().err
    assert message in error
    assert error.count("\n") == 1
    assert not (tmp_path / "out").exists()


class Coin:
    """Heads or nothing, once."""

    name, discount = "coin", 1.0

    def start(self, rng):  # noqa: ARG002
        return ("toss",)

    def actions(self, state):  # noqa: ARG002
        return (0, 1)

    def is_terminal(self, state):
        return state == ("over",)

    def outcomes(self, state, action):  # noqa: ARG002
        return [Outcome(0.5 + 0.1 * action, ("over",), 1.0), Outcome(0.5 - 0.1 * action, ("over",), 0.0)]

    def step(self, state, action, rng):  # noqa: ARG002
        return ("over",), float(rng.random() < 0.5 + 0.1 * action)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"discount": 1.5}, "simulator Coin: discount: must be above 0 and at most 1; got 1.5"),
        ({"actions": lambda *_: ()}, "simulator Coin: actions: must give at least one"),
        (
            {"start": lambda *_: ("over",)},
            "simulator Coin: start: must return a state that is not terminal",
        ),
        ({"start": lambda *_: ["toss"]}, "simulator Coin: start: must return a hashable state"),
    ],
)
def test_a_simulator_that_cannot_be_judged_is_refused(changes: dict[str, object], message: str) -> None:
    kind = type("Coin", (Coin,), changes)
    with pytest.raises(InputError, match=re.escape(message)):
        SimulatorProblem(kind(), Settings(depth=1))
    SimulatorProblem(Coin(), Settings(depth=1))
