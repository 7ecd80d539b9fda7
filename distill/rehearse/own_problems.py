"""Problems of one's own by name: MODULE:NAME, so that commands and workers can make them."""

from __future__ import annotations

import importlib
import math
import sys
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from distill.errors import DistillError, InputError
from distill.rehearse.guarded import called, number_of
from distill.rehearse.problems import Draw, Problem, SimulatorProblem

__all__ = ["own_problem"]


@dataclass(frozen=True)
class _Named:
    """A problem under the text that it was asked for by: every worker makes it from that.

    What its code raises, when a decision is drawn or a rollout made, is one error under that name.
    """

    problem: Problem
    name: str

    def draw(self, seed: int) -> Draw:
        draw = self._called("draw", self.problem.draw, seed)
        place = f"problem {self.name}"
        if not isinstance(draw, Draw):
            raise InputError(f"{place}: draw", "must return a Draw", draw)
        won = draw.tree.belief == "win_loss"

        def roll(leaf: int) -> float:
            found = self._called("roll", draw.roll, leaf)
            if type(found) is not float or not math.isfinite(found):
                found = number_of(f"{place}: roll", found)
            if won and found not in (0.0, 1.0):
                raise InputError(f"{place}: roll", "must be 1 or 0 where leaves win or lose", found)
            return float(found)

        return replace(draw, roll=roll)

    def keep_in(self, folder: Path) -> None:
        if (keep := getattr(self.problem, "keep_in", None)) is not None:
            keep(folder)

    def _called(self, method: str, function: Callable[..., Any], *arguments: Any) -> Any:
        try:
            return called(method, function, *arguments)
        except InputError as e:
            raise e.at(f"problem {self.name}") from e


def own_problem(text: str) -> Problem:
    """The problem that MODULE:NAME names; the module runs, as any import does.

    NAME : a `Problem`, or called without arguments for one; (simulator, settings) become a
    `SimulatorProblem`. The present folder is looked in too. Raises InputError where nothing such is found,
    or the code raises.
    """
    module, _, name = text.partition(":")
    if not module or not name.isidentifier():
        raise InputError("problem", "must be MODULE:NAME, such as my_simulator:problem", text)
    if (here := str(Path.cwd())) not in sys.path:
        sys.path.append(here)
    try:
        found: Any = getattr(importlib.import_module(module), name)
        if callable(found) and not hasattr(found, "draw"):
            found = found()
        if isinstance(found, tuple) and len(found) == 2:
            found = SimulatorProblem(*found)
    except InputError as e:
        raise e.at(f"problem {text}") from e
    except DistillError:
        raise
    except (Exception, SystemExit) as e:  # whatever the code of others raises
        told = f"{type(e).__name__}: {' '.join(str(e).split())}"
        raise InputError(f"problem {text}", f"must be made without an error ({told})") from e
    if not callable(getattr(found, "draw", None)):
        rule = "must be a problem, or a function that returns one or (simulator, settings)"
        raise InputError(f"problem {text}", rule, type(found).__name__)
    return _Named(found, text)
